"""How far the old closed ways are off on exact data, beside this package's own fit.

Run as a script it prints the table of docs/method-inversion.md:

    python tests/benchmarks/bias_table.py
"""

from __future__ import annotations

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.chains.polymer import builtin
from mwdlink.inversion.closed_form import cross_check
from mwdlink.inversion.objective import sweep_problem
from mwdlink.inversion.smoothing import scan
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

# exact data: nothing but the arithmetic, so the noise given to fits is a mere weight
WEIGHT = 0.003
WAYS = ("step on sqrt(G'(1/tau))", "step on sqrt(G(t))", "spectrum relation", "moments", "this fit")


def melts() -> dict[str, Distribution]:
    """Invented melts: log-normal ones, a most probable one, and one of two parts."""
    make = Distribution.from_averages
    parts = [(make(Mw=6e4, dispersity=2.0), 0.5), (make(Mw=2.5e5, dispersity=2.0), 0.5)]
    return {
        "log-normal, dispersity 1.5": make(Mw=1e5, dispersity=1.5),
        "log-normal, dispersity 2": make(Mw=1e5, dispersity=2.0),
        "log-normal, dispersity 4": make(Mw=1e5, dispersity=4.0),
        "Schulz-Zimm, dispersity 2": make(Mw=1e5, dispersity=2.0, family="schulz-zimm"),
        "two parts, 6e4 and 2.5e5": Distribution.blend(parts),
    }


def averages_of_step(above: np.ndarray, mass: np.ndarray) -> tuple[float, float]:
    """Mw and Mz [g/mol] of a weight above each molar mass (ascending)."""
    share = -np.diff(np.append(above, 0.0))
    share[0] += 1.0 - above[0]
    middle = np.append(np.sqrt(mass[1:] * mass[:-1]), mass[-1])
    first = float(share @ middle)
    return first, float(share @ middle**2) / first


def step_ways(d: Distribution, melt: Melt, model: Model) -> dict[str, tuple[float, float]]:
    """The two step-kernel readings, on a fine list of molar masses, from exact functions."""
    mass = np.geomspace(1e2, 1e8, 601)
    # time and molar mass tied by the bare law, as in the spectrum relation
    tau = melt.law_coefficient * mass**melt.law_exponent / melt.plateau_modulus
    melt_response = Relaxation(d, melt, model)
    modulus = melt.plateau_modulus
    order = np.argsort(1.0 / tau)
    storage = np.empty_like(tau)
    storage[order] = melt_response.moduli(1.0 / tau[order])[0]
    decay = melt_response.relaxation_modulus(tau)
    return {
        WAYS[0]: averages_of_step(np.sqrt(storage / modulus), mass),
        WAYS[1]: averages_of_step(np.sqrt(decay / modulus), mass),
    }


def fit_averages(
    omega: np.ndarray, storage: np.ndarray, loss: np.ndarray, melt: Melt, model: Model
) -> tuple[float, float]:
    """Mw and Mz [g/mol] of this package's fit at its own choice of smoothing."""
    sigma = np.full(2 * omega.size, WEIGHT)
    problem = sweep_problem(omega, storage, loss, sigma, melt, model)
    found = scan(problem)
    w = found.fits[found.best].w
    # the two lumps are nearly empty on data like these; their own masses hardly count
    nodes = problem.window.nodes
    mass = np.concatenate([nodes, [0.5 * nodes[0], nodes[-1]]])
    first = float(w @ mass)
    return first, float(w @ mass**2) / first


def errors(
    d: Distribution, kernel: str = "exponential", *, rouse: bool = False, melt: Melt | None = None
) -> dict[str, tuple[float, float]]:
    """Relative errors of Mw and Mz by every way on exact data over the whole relaxation."""
    melt = melt or builtin("hdpe").melt(190.0)
    model = Model(kernel, 2.0, rouse)
    response = Relaxation(d, melt, model)
    slowest = 1.0 / response.longest_time
    omega = np.geomspace(1e-1 * slowest, 1e6, int(5 * np.log10(1e7 / slowest)) + 1)
    storage, loss = response.moduli(omega)
    check = cross_check(omega, storage, loss, WEIGHT, melt, model)
    out = step_ways(d, melt, model)
    for way, found in ((WAYS[2], check.spectrum_relation), (WAYS[3], check.moments)):
        if found["Mw_g_per_mol"] is not None and found["Mz_g_per_mol"] is not None:
            out[way] = (found["Mw_g_per_mol"], found["Mz_g_per_mol"])
    out[WAYS[4]] = fit_averages(omega, storage, loss, melt, model)
    return {k: (v[0] / d.Mw - 1.0, v[1] / d.Mz - 1.0) for k, v in out.items()}


def main() -> None:
    print("| melt | kernel | " + " | ".join(f"{w}: Mw / Mz" for w in WAYS) + " |")
    print("|---|---|" + "---|" * len(WAYS))
    for kernel in ("exponential", "reptation", "power-law"):
        for name, d in melts().items():
            found = errors(d, kernel)
            cells = [
                f"{100 * found[w][0]:+.1f} / {100 * found[w][1]:+.1f} %" if w in found else "-"
                for w in WAYS
            ]
            print(f"| {name} | {kernel} | " + " | ".join(cells) + " |")


if __name__ == "__main__":
    main()
