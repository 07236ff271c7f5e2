"""How close two equal peaks may lie and still be told apart, by kernel and noise.

Run as a script it prints the table of docs/method-inversion.md (parts of dispersity 1.1, six
decades of frequency at 5 points a decade):

    python tests/benchmarks/peak_resolution.py --seeds 6
"""

from __future__ import annotations

import argparse

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.inversion.objective import Problem, sweep_problem
from mwdlink.inversion.peaks import Peak, find_peaks
from mwdlink.inversion.smoothing import Scan, scan
from mwdlink.inversion.solve import draw_shift, minimise
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

MELT = builtin("hdpe").melt(190.0)
OMEGA = np.logspace(-3, 3, 31)


def noisy_problem(
    d: Distribution, made: Model, read: Model, noise: float, rng: np.random.Generator
) -> Problem:
    """The problem of one noisy sweep, made by one model and read by another."""
    storage, loss = Relaxation(d, MELT, made).moduli(OMEGA)
    up = storage * np.exp(noise * rng.standard_normal(OMEGA.size))
    out = loss * np.exp(noise * rng.standard_normal(OMEGA.size))
    return sweep_problem(OMEGA, up, out, np.full(2 * OMEGA.size, noise), MELT, read)


def peaks_of(problem: Problem, rng: np.random.Generator, members: int) -> tuple[Scan, list[Peak]]:
    """Scan, a small ensemble over the scan, and its peaks."""
    found = scan(problem)
    ensemble = [
        minimise(problem, found.fits[i].u, float(found.smoothing[i]), draw_shift(problem, rng)).w
        for i in rng.choice(len(found.fits), size=members, p=found.weights)
    ]
    step = problem.window.spacing
    central = found.fits[found.best].w[:-2] / step
    density = np.array(ensemble)[:, :-2] / step
    return found, find_peaks(problem.window.nodes, density, central, problem.window)


def pair(ratio: float, dispersity: float = 1.1) -> Distribution:
    """Two equal parts around 1e5 g/mol; invented."""
    make = Distribution.from_averages
    low, high = 1e5 / np.sqrt(ratio), 1e5 * np.sqrt(ratio)
    parts = [(make(Mw=m, dispersity=dispersity), 0.5) for m in (low, high)]
    return Distribution.blend(parts)


def resolved(
    ratio: float, kernel: str, noise: float, seeds: int, members: int = 20
) -> float:
    """Share of noise seeds in which exactly two peaks are found."""
    model = Model(kernel)
    hits = 0
    for seed in range(seeds):
        rng = np.random.default_rng([seed, 11])
        _, peaks = peaks_of(noisy_problem(pair(ratio), model, model, noise, rng), rng, members)
        hits += len(peaks) == 2
    return hits / seeds


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seeds", type=int, default=6)
    seeds = parser.parse_args().seeds
    ratios = (1.75, 2.0, 2.25, 2.5, 3.0, 4.0)
    print("| kernel | noise | " + " | ".join(f"{r:g}" for r in ratios) + " |")
    print("|---|---|" + "---|" * len(ratios))
    for kernel in ("exponential", "reptation", "power-law"):
        for noise in (0.01, 0.03):
            cells = [f"{resolved(r, kernel, noise, seeds):.2f}" for r in ratios]
            print(f"| {kernel} | {100 * noise:g} % | " + " | ".join(cells) + " |", flush=True)


if __name__ == "__main__":
    main()
