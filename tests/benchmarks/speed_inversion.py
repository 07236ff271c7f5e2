"""Speed of the inversion, as ratios within one run.

Run as a script it prints the tables of docs/speed.md:

    python tests/benchmarks/speed_inversion.py

Ratios are what counts: the same machine, the same minute, both sides on one thread.
"""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("OMP_NUM_THREADS", "1")

import argparse
import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.linalg.lapack import dposv
from scipy.optimize import least_squares

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.inversion.many import Copies, minimise_many
from mwdlink.inversion.objective import Problem, lump_rows, sweep_problem, weights
from mwdlink.inversion.smoothing import Scan, good_start, scan
from mwdlink.inversion.solve import draw_shift, minimise
from mwdlink.inversion.window import find_window
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

LAMBDAS, MEMBERS = 17, 200
MODEL = Model("power-law")


def make_problem(nodes: int = 60, frequencies: int = 31, noise: float = 0.03) -> Problem:
    """An invented log-normal melt over six decades."""
    melt = builtin("hdpe").melt(190.0)
    omega = np.logspace(-3, 3, frequencies)
    d = Distribution.from_averages(Mw=1.2e5, dispersity=3.0)
    storage, loss = Relaxation(d, melt, MODEL).moduli(omega)
    rng = np.random.default_rng(0)
    up, out = (x * np.exp(noise * rng.standard_normal(omega.size)) for x in (storage, loss))
    window = find_window(omega, melt, MODEL, nodes)
    return sweep_problem(omega, up, out, np.full(2 * omega.size, noise), melt, MODEL, window)


def seconds(job: Callable[[], object], least: float = 0.0, repeats: int = 1) -> float:
    """Shortest processor time of some runs [s]; processor time, so that neighbours do not count."""
    best, start = np.inf, time.perf_counter()
    while repeats > 0 or time.perf_counter() - start < least:
        began = time.process_time()
        job()
        best = min(best, time.process_time() - began)
        repeats -= 1
    return float(best)


def draw_copies(problem: Problem, found: Scan, members: int) -> Copies:
    """Perturbed copies spread over the scan by its weights."""
    rng = np.random.default_rng(1)
    index = rng.choice(found.smoothing.size, size=members, p=found.weights)
    n = problem.size
    return Copies(
        np.array([found.fits[k].u for k in index]),
        found.smoothing[index],
        rng.standard_normal((members, problem.data.size)),
        rng.standard_normal((members, n - 5)),
        rng.standard_normal((members, 3)),
        rng.standard_normal((members, 2)),
    )


def whole_job(problem: Problem, members: int = MEMBERS) -> tuple[Scan, np.ndarray]:
    """Scan of 17 lambdas and the ensemble."""
    found = scan(problem)
    u, _ = minimise_many(problem, draw_copies(problem, found, members))
    return found, u


def general_solver(problem: Problem, smoothing: float, u0: np.ndarray, seed: int | None) -> float:
    """The same objective by scipy.optimize.least_squares as it comes, numeric Jacobian; its end."""
    root = np.sqrt(smoothing)
    prior, forward = problem.prior, problem.forward
    shift = None if seed is None else draw_shift(problem, np.random.default_rng(seed))
    data = problem.data + (0.0 if shift is None else problem.sigma * shift.data)
    pull = 0.0 if shift is None else shift.third
    centre = prior.weak_centre + (0.0 if shift is None else shift.weak)
    lumps = 0.0 if shift is None else shift.lumps

    def residuals(u: np.ndarray) -> np.ndarray:
        w = weights(u)
        return np.concatenate(
            [
                (np.log(np.maximum(forward.values(w), 1e-300)) - data) / problem.sigma,
                root * (prior.third @ u) - pull,
                prior.weak @ u - centre,
                lump_rows(w)[0] - lumps,
            ]
        )

    return 2.0 * float(least_squares(residuals, u0).cost)


@dataclass(frozen=True)
class Job:
    """One whole job against the general solver.

    Attributes
    ----------
    ours : float
        17 lambdas and 200 members [s].
    cold : float
        217 general solves, each from the scan's start [s].
    warm : float
        The same with the 200 members started from the fit they are perturbations of [s].
    solved : int
        How many general solves were made; the rest is scaled.
    """

    ours: float
    cold: float
    warm: float
    solved: int


def job_ratio(solves: int = 4, repeats: int = 5) -> Job:
    """The job of 17 lambdas and 200 members against 217 general solves (a few, scaled)."""
    problem = make_problem()
    found, _ = whole_job(problem, 20)
    start, best = good_start(problem), found.fits[found.best]
    ours, scan_times, cold, warm = [], [], [], []
    some = np.linspace(1, LAMBDAS - 2, solves).astype(int)
    for k in range(max(repeats, solves)):
        # in turn, so that both sides meet the same neighbours
        ours.append(seconds(lambda: whole_job(problem)))
        if k < solves:
            lam = float(found.smoothing[some[k]])
            scan_times.append(seconds(lambda lam=lam: general_solver(problem, lam, start, None)))
            cold.append(seconds(lambda k=k: general_solver(problem, best.smoothing, start, k)))
            warm.append(seconds(lambda k=k: general_solver(problem, best.smoothing, best.u, k)))
    first = LAMBDAS * float(np.mean(scan_times))
    return Job(
        float(np.median(ours)),
        first + MEMBERS * float(np.mean(cold)),
        first + MEMBERS * float(np.mean(warm)),
        3 * solves,
    )


def step_ratio() -> tuple[float, float]:
    """Time of one Gauss-Newton step and of its bare products and factorisation [s].

    The difference between five steps and two from one start, so that what is done once a fit does
    not count; the start is one from which no step is refused.
    """
    problem = make_problem()
    found = scan(problem)
    k = LAMBDAS // 2
    start, smoothing = found.fits[k + 4].u, float(found.smoothing[k])

    def run(steps: int) -> Callable[[], object]:
        return lambda: minimise(problem, start, smoothing, None, 0.0, steps)

    times = [(seconds(run(5), repeats=20), seconds(run(2), repeats=20)) for _ in range(12)]
    step = float(np.median([(x - y) / 3 for x, y in times]))
    f, w = problem.forward, weights(start)
    scaled = f.values_and_slope(w)[1]
    hessian = scaled.T @ scaled + problem.prior.precision(smoothing)
    hessian += 1e-3 * np.diag(np.diag(hessian))
    gradient = np.ones(problem.size)
    weighted = f.survival * 1.5
    s = f.survival @ w

    def bare() -> None:
        # K w, C (G), the Jacobian C diag K, J'J, J'r, the factorisation, and the trial's K w, C G
        f.survival @ w
        f.rows @ s
        f.linear @ w
        j = f.rows @ weighted
        j.T @ j
        j.T @ problem.data
        dposv(hessian, gradient)
        f.survival @ w
        f.rows @ s
        f.linear @ w

    return step, float(np.median([seconds(bare, repeats=20) for _ in range(12)]))


def scaling() -> dict[str, list[tuple[int, float, float]]]:
    """Time of the scan and of the members against nodes, frequencies and members [s]."""
    out: dict[str, list[tuple[int, float, float]]] = {}

    def both(problem: Problem, members: int) -> tuple[float, float]:
        found = scan(problem)
        copies = draw_copies(problem, found, members)
        first = seconds(lambda: scan(problem), repeats=2)
        return first, seconds(lambda: minimise_many(problem, copies), repeats=2)

    out["nodes"] = [(n, *both(make_problem(nodes=n), 100)) for n in (30, 60, 120)]
    out["frequencies"] = [(m, *both(make_problem(frequencies=m), 100)) for m in (16, 31, 61)]
    out["members"] = [(m, *both(make_problem(), m)) for m in (50, 200, 800)]
    return out


def main() -> None:
    argparse.ArgumentParser(description=__doc__).parse_args()
    job = job_ratio()
    print("| job | processor time | ratio |\n|---|---|---|")
    print(f"| one kernel: {LAMBDAS} lambdas and {MEMBERS} members | {job.ours:.2f} s | 1 |")
    for name, value in (("each from the same start", job.cold), ("members warm", job.warm)):
        print(
            f"| {LAMBDAS + MEMBERS} general solves, {name} | {value:.1f} s | "
            f"{value / job.ours:.0f} |"
        )
    step, bare = step_ratio()
    print("\n| one step | processor time |\n|---|---|")
    print(f"| Gauss-Newton step | {1e3 * step:.2f} ms |")
    print(f"| its bare products and factorisation | {1e3 * bare:.2f} ms |")
    print(f"| ratio | {step / bare:.1f} |")
    for name, rows in scaling().items():
        print(f"\n| {name} | scan of {LAMBDAS} lambdas | members |\n|---|---|---|")
        for n, first, second in rows:
            print(f"| {n} | {first:.3f} s | {second:.3f} s |")


if __name__ == "__main__":
    main()
