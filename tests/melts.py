"""Synthetic melts with known truth, shared by the tests and studies of the inversion."""

from __future__ import annotations

from typing import Any

import numpy as np

from mwdlink.chains import families
from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import Polymer, builtin
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.operator import log_grid

FAMILIES = ("log-normal", "two-peak", "tail", "skewed")


def exact_card(scatter: float = 0.0, **kernel: float) -> Polymer:
    """The polyethylene card with a time law known exactly (or with the scatter given)."""
    card: dict[str, Any] = builtin("hdpe").to_dict()
    card["viscosity"]["scatter_decades"] = scatter
    if kernel:
        card["kernel"] = {**card.get("kernel", {}), **kernel}
    return Polymer.from_dict(card, origin="test")


def melt_of(family: str, rng: np.random.Generator) -> Distribution:
    """A random member of a family: log-normal, two-peak, body with a tail, Schulz-Zimm."""

    def mass(low: float, high: float) -> float:
        return float(np.exp(rng.uniform(np.log(low), np.log(high))))

    if family == "log-normal":
        return families.lognormal(mass(8e4, 2.5e5), float(rng.uniform(1.5, 8.0)))
    if family == "two-peak":
        m, ratio, share = mass(5e4, 1.2e5), rng.uniform(3, 8), rng.uniform(0.3, 0.7)
        return families.mixture_of_lognormals(
            [m, m * ratio], rng.uniform(1.15, 2.0, 2).tolist(), [share, 1 - share]
        )
    if family == "tail":
        m, share = mass(8e4, 1.5e5), rng.uniform(0.005, 0.05)
        return families.mixture_of_lognormals(
            [m, m * rng.uniform(5, 10)],
            [rng.uniform(2, 4), rng.uniform(1.1, 1.6)],
            [1 - share, share],
        )
    return families.schulz_zimm(mass(8e4, 2.5e5), float(rng.uniform(1.5, 2.5)))


def measured(
    chains: Distribution,
    polymer: Polymer,
    model: Model,
    rng: np.random.Generator,
    noise: float = 0.03,
    low: float = 1e-3,
    high: float = 1e3,
    per_decade: int = 5,
) -> Sweep:
    """A sweep at the card's temperature with relative noise."""
    omega = log_grid(low, high, per_decade)
    a, b = Relaxation(chains, polymer.melt(), model).moduli(omega)
    return Sweep(
        omega=omega,
        storage=a * np.exp(noise * rng.standard_normal(omega.size)),
        loss=b * np.exp(noise * rng.standard_normal(omega.size)),
        temperature_C=polymer.temperature_C,
    )


def mean_within(chains: Distribution, low: float, high: float) -> float:
    """True mean molar mass of the weight between two limits [g/mol]."""
    x = np.geomspace(low, high, 4001)
    share = np.diff(chains.cumulative(x))
    return float(np.sum(share * np.sqrt(x[1:] * x[:-1])) / share.sum())
