"""Invented melts and sweeps for the tests of decisions: noise as of a rheometer, seeds fixed."""

from __future__ import annotations

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.chains.polymer import Polymer, builtin
from mwdlink.decisions.components import Component, MeasuredBlend, Study
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

HDPE: Polymer = builtin("hdpe")
OMEGA = np.geomspace(1e-2, 1e2, 21)
# a rheometer's torque does not resolve less than this [Pa]
LEAST_MODULUS = 0.5
A = Distribution.from_averages(Mw=6e4, dispersity=2.5, label="A")
B = Distribution.from_averages(Mw=2.2e5, dispersity=3.0, label="B")
WEIGHED = (0.95, 0.9, 0.75, 0.5, 0.25, 0.1)


def sweep(
    distribution: Distribution,
    model: Model,
    rng: np.random.Generator,
    melt: Melt | None = None,
    omega: np.ndarray = OMEGA,
    noise: float = 0.02,
    bend: np.ndarray | float = 0.0,
    name: str = "",
) -> Sweep:
    """A noisy sweep of a melt; `bend` is added to ln of both moduli (a smooth model error)."""
    melt = HDPE.melt(190.0) if melt is None else melt
    up, out = Relaxation(distribution, melt, model).moduli(omega)
    up = up * np.exp(bend + noise * rng.standard_normal(omega.size))
    out = out * np.exp(bend + noise * rng.standard_normal(omega.size))
    seen = up > LEAST_MODULUS
    return Sweep(omega[seen], up[seen], out[seen], temperature_C=190.0, label=name)


def study(
    kernel: str = "reptation",
    exponent: float = 2.0,
    seed: int = 0,
    wrong: float | None = None,
    truth: float = 0.0,
    noise: float = 0.02,
    with_distributions: bool = True,
    weighed: tuple[float, ...] = WEIGHED,
    bends: float = 0.0,
) -> Study:
    """Two components and blends; the bag weighed `wrong` holds `truth` of A instead.

    `bends` is the size of a smooth random error of the rule in each blend [decades].
    """
    rng = np.random.default_rng(seed)
    model = Model(kernel, exponent)
    components = tuple(
        Component(d.label, d if with_distributions else None, sweep(d, model, rng, noise=noise))
        for d in (A, B)
    )
    blends = []
    x = np.log10(OMEGA)
    for p in weighed:
        q = truth if p == wrong else p
        bend = np.log(10) * bends * (rng.standard_normal() + 0.5 * rng.standard_normal() * x)
        d = Distribution.blend([(A, q), (B, 1 - q)])
        blends.append(
            MeasuredBlend(
                f"A{round(100 * p)}",
                {"A": p, "B": 1 - p},
                sweep(d, model, rng, noise=noise, bend=bend),
            )
        )
    return Study(HDPE, components, tuple(blends), 190.0)
