"""How a batch scales: throughput, workers, inputs, memory, and where one input's time goes.

    python tests/benchmarks/batch_scale.py                          # small: two minutes
    python tests/benchmarks/batch_scale.py --counts 10,100,1000,10000 --members 0,200 --workers 1,2

Prints a table for docs/speed.md. The lots are made up, of one frequency list (41 frequencies over
four decades). CPU seconds count all processes; they matter more than the wall on a busy machine.
"""

from __future__ import annotations

import argparse
import os
import resource
import shutil
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

for name in ("OPENBLAS", "OMP", "MKL"):
    os.environ[f"{name}_NUM_THREADS"] = "1"

import numpy as np  # noqa: E402

from mwdlink.chains.families import lognormal  # noqa: E402
from mwdlink.chains.polymer import builtin  # noqa: E402
from mwdlink.relaxation.melt_response import Relaxation  # noqa: E402
from mwdlink.relaxation.mixing import Model  # noqa: E402
from mwdlink.runs.batch import batch  # noqa: E402

KINDS = 50


def write_lots(folder: Path, count: int) -> None:
    """Files of lots; from the fiftieth on the melts repeat, with other noise."""
    folder.mkdir()
    rng = np.random.default_rng(4)
    omega = np.geomspace(1e-2, 1e2, 41)
    melt = builtin("hdpe").melt(190.0)
    clean = [
        Relaxation(lognormal(1.2e5 * np.exp(0.1 * rng.standard_normal()), 4.0), melt, Model())
        .moduli(omega)
        for _ in range(min(count, KINDS))
    ]  # fmt: skip
    for i in range(count):
        noise = np.exp(0.02 * rng.standard_normal((2, omega.size)))
        rows = np.column_stack([omega, *(np.array(clean[i % len(clean)]) * noise)])
        text = "\n".join(",".join(f"{x:.6g}" for x in row) for row in rows)
        (folder / f"lot {i:05d}.csv").write_text(
            f"# T = 190 C\nomega [rad/s],G' [Pa],G'' [Pa]\n{text}\n"
        )


def cpu() -> float:
    """CPU seconds of this process and its ended children."""
    return sum(
        usage.ru_utime + usage.ru_stime
        for usage in map(resource.getrusage, (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN))
    )


def run(lots: Path, out: Path, workers: int, members: int) -> dict[str, float]:
    began, spent = time.monotonic(), cpu()
    result = batch(
        [lots], "hdpe", out=out, workers=workers, members=members, temperature_C=190.0
    )  # fmt: skip
    wall, used = time.monotonic() - began, cpu() - spent
    shutil.rmtree(out)
    n = len(result.rows)
    peak = resource.getrusage(
        resource.RUSAGE_CHILDREN if workers > 1 else resource.RUSAGE_SELF
    ).ru_maxrss
    return {
        "inputs": n,
        "wall": wall,
        "cpu": used,
        "megabytes": peak / 1024,
    }


def where_time_goes(lots: Path, members: int) -> dict[str, float]:
    """Shares of one input's processor time, and of the bare algebra of its steps."""
    import mwdlink.runs.one as one
    from mwdlink.inversion import ensemble, many, objective
    from mwdlink.runs.lots import find_lots

    spent: dict[str, float] = {}
    steps = [0]

    def watched(name: str, function: Any) -> Any:
        def inner(*args: Any, **kwargs: Any) -> Any:
            began = time.process_time()
            try:
                return function(*args, **kwargs)
            finally:
                spent[name] = spent.get(name, 0.0) + time.process_time() - began

        return inner

    def counted(function: Any, how_many: Any) -> Any:
        def inner(*args: Any, **kwargs: Any) -> Any:
            steps[0] += how_many(*args)
            return function(*args, **kwargs)

        return inner

    places = [
        (one, "read_measured", "reading"),
        (objective, "_sweep_forward", "operators"),
        (ensemble, "_survival_of", "operators"),
        (one, "write_result", "writing"),
        (one, "fingerprint", "fingerprint"),
        (ensemble, "scan", "scans"),
        (ensemble, "minimise_many", "members"),
    ]
    kept = [(home, attribute, getattr(home, attribute)) for home, attribute, _ in places]
    kept += [(objective.Forward, "slope", objective.Forward.slope)]
    kept += [(many._State, "normal", many._State.normal)]
    try:
        for home, attribute, name in places:
            setattr(home, attribute, watched(name, getattr(home, attribute)))
        objective.Forward.slope = counted(objective.Forward.slope, lambda *a: 1)
        many._State.normal = counted(many._State.normal, lambda state, known, index: len(index))
        with tempfile.TemporaryDirectory() as top:
            # the last step (pictures and page) belongs to the whole, not to an input
            job = one.Job(
                top, (), {"": builtin("hdpe")}, 190.0, {"members": members}, {}
            )  # fmt: skip
            (Path(top) / one.MARK).touch()
            first, *tried = find_lots([lots])[0][:6]
            one.run_one(job, 0, first)  # what lots share is made once
            spent.clear()
            steps[0] = 0
            began = time.process_time()
            for index, lot in enumerate(tried, 1):
                one.run_one(job, index, lot)
            total = time.process_time() - began
    finally:
        for home, attribute, function in kept:
            setattr(home, attribute, function)
    shares = {k: v / total for k, v in spent.items()}
    shares["other"] = 1.0 - sum(shares.values())
    shares["bare algebra of all steps"] = steps[0] * bare_step() / total
    return shares | {"seconds an input": total / max(len(tried), 1)}


def bare_step() -> float:
    """Matrix products and factorisation of one step at this size, and nothing else [s]."""
    from scipy.linalg.lapack import dposv

    from mwdlink.inversion.objective import sweep_problem, weights
    from mwdlink.inversion.smoothing import good_start

    omega = np.geomspace(1e-2, 1e2, 41)
    melt = builtin("hdpe").melt(190.0)
    up, out = Relaxation(lognormal(1.2e5, 4.0), melt, Model()).moduli(omega)
    problem = sweep_problem(omega, up, out, np.full(82, 0.02), melt, Model())
    f, w = problem.forward, weights(good_start(problem))
    j = f.values_and_slope(w)[1]
    hessian = j.T @ j / np.mean(j) ** 2 + problem.prior.precision(1e-2)
    hessian += 1e-3 * np.diag(np.diag(hessian))
    weighted, gradient, s = f.survival * 1.5, np.ones(problem.size), f.survival @ w
    best = np.inf
    for _ in range(20):
        began = time.process_time()
        for _ in range(50):
            f.survival @ w
            f.rows @ s
            f.linear @ w
            k = f.rows @ weighted
            k.T @ k
            k.T @ problem.data
            dposv(hessian, gradient)
            f.survival @ w
            f.rows @ s
            f.linear @ w
        best = min(best, (time.process_time() - began) / 50)
    return best


def main() -> None:
    parse = argparse.ArgumentParser()
    parse.add_argument("--counts", default="8,24")
    parse.add_argument("--workers", default="1,2")
    parse.add_argument("--members", default="0,200")
    asked = parse.parse_args()
    counts = [int(c) for c in asked.counts.split(",")]
    say = sys.stdout.write
    with tempfile.TemporaryDirectory() as top:
        home = Path(top)
        for count in counts:
            write_lots(home / f"lots-{count}", count)
        say("| inputs | members | workers | wall [s] | CPU [s] | CPU an input [s] | MB |\n")
        say("|---|---|---|---|---|---|---|\n")
        for members in map(int, asked.members.split(",")):
            for workers in map(int, asked.workers.split(",")):
                for count in counts:
                    r = run(home / f"lots-{count}", home / "out", workers, members)
                    say(
                        f"| {count} | {members} | {workers} | {r['wall']:.1f} | {r['cpu']:.1f} | "
                        f"{r['cpu'] / count:.3f} | {r['megabytes']:.0f} |\n"
                    )
                    sys.stdout.flush()
            shares = where_time_goes(home / f"lots-{counts[0]}", members)
            told = ", ".join(
                f"{k} {v:.2f}" if k.startswith("seconds") else f"{k} {100 * v:.1f} %"
                for k, v in shares.items()
            )
            say(f"\n{members} members: {told}\n\n")


if __name__ == "__main__":
    main()
