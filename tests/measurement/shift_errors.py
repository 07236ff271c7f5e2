"""How well known shifts are recovered when neighbours share two thirds of a decade.

Run as a script it prints the table of docs/master-curves.md:

    python tests/measurement/shift_errors.py --sweeps 25
"""

from __future__ import annotations

import argparse

import numpy as np

from mwdlink.chains.families import lognormal
from mwdlink.chains.polymer import builtin
from mwdlink.measurement.master import make_master
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.melt_response import Relaxation

STEP = 4 / 3  # decades between neighbours, each sweep two decades wide
TEMPERATURES = (170.0, 180.0, 190.0, 200.0, 210.0)
TRUE = STEP * np.array([2, 1, 0, -1, -2])
NOISE = 0.02


def errors(dispersity: float, points: int, sweeps: int) -> tuple[np.ndarray, np.ndarray]:
    """Errors of log10 a_T, and whether the 90 % intervals hold the true ones, (sweeps, 5)."""
    distribution = lognormal(Mw=1.5e5, dispersity=dispersity)
    melt = Relaxation(distribution, builtin("hdpe").melt(190.0)).spectrum()
    omega = np.logspace(-1, 1, points)
    off, held = [], []
    for seed in range(sweeps):
        rng = np.random.default_rng([seed, points])
        data = []
        for t, shift in zip(TEMPERATURES, TRUE, strict=True):
            storage, loss = melt.moduli(omega * 10**shift)
            scatter = np.exp(NOISE * rng.standard_normal((2, points)))
            data.append(Sweep(omega, storage * scatter[0], loss * scatter[1], temperature_C=t))
        made = make_master(data, 190.0)
        a = [s.a_T for s in made.steps]
        off.append(np.log10([q.value for q in a]) - TRUE)
        held.append([q.low <= 10**y <= q.high for q, y in zip(a, TRUE, strict=True)])
    return np.array(off), np.array(held)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sweeps", type=int, default=25)
    count = parser.parse_args().sweeps
    print("| melt | points a sweep | error, one step away | two steps away | intervals that hold |")
    print("|---|---|---|---|---|")
    for name, dispersity in (("dispersity 3", 3.0), ("dispersity 1.1", 1.1)):
        for points in (11, 20):
            off, held = errors(dispersity, points, count)
            rms = np.sqrt(np.mean(off**2, axis=0))
            near, far = (f"{x.min():.4f} to {x.max():.4f}" for x in (rms[[1, 3]], rms[[0, 4]]))
            share = held[:, [0, 1, 3, 4]].mean()
            print(f"| {name} | {points} | {near} | {far} | {100 * share:.0f} % |")


if __name__ == "__main__":
    main()
