"""How long the forward map takes: a distribution of 400 nodes to 200 frequencies.

    python tests/benchmarks/forward_speed.py

`kept` is a second call on the same melt, `new` a new melt of the same size (its times, its table
and its Rouse part made anew, the fit of exponentials kept), `first` includes that fit. Times are
processor time of one thread (set OPENBLAS_NUM_THREADS=1), the smallest of several runs.
"""

from __future__ import annotations

import dataclasses
import time
from collections.abc import Callable

import numpy as np

from mwdlink.chains import families
from mwdlink.chains.polymer import builtin
from mwdlink.relaxation import operator
from mwdlink.relaxation.kernels import KERNEL_NAMES
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

TARGET_MS = 10.0
OMEGA = np.logspace(-4, 4, 200)


def least(work: Callable[[], object], runs: int) -> float:
    """Smallest processor time of some runs [ms]."""
    found = []
    for _ in range(runs):
        start = time.process_time()
        work()
        found.append(time.process_time() - start)
    return 1e3 * min(found)


def measure(nodes: int = 400, runs: int = 9) -> dict[str, dict[str, float]]:
    """Times [ms] by kernel and case."""
    # M1 of the fluctuation kernel invented: no shipped card names it
    melt = dataclasses.replace(builtin("hdpe").melt(), fluctuation_molar_mass=1500.0)
    d = families.lognormal(1.2e5, 4.0, points=nodes).compact()
    out = {}
    for kernel in KERNEL_NAMES:
        model = Model(kernel)

        def new(model: Model = model) -> None:
            Relaxation(d, melt, model).moduli(OMEGA)

        def first(model: Model = model) -> None:
            operator._unit_melt_fit.cache_clear()
            Relaxation(d, melt, model).moduli(OMEGA)

        held = Relaxation(d, melt, model)
        out[kernel] = {
            "first": least(first, min(runs, 3)),
            "new": least(new, runs),
            "kept": least(lambda held=held: held.moduli(OMEGA), runs),
            "spectrum": least(lambda held=held: held.spectrum(), min(runs, 3)),
        }
    return out


def main() -> None:
    found = measure()
    print(f"{'kernel':12s}" + "".join(f"{case:>10s}" for case in next(iter(found.values()))))
    for kernel, times in found.items():
        print(f"{kernel:12s}" + "".join(f"{t:8.1f}ms" for t in times.values()))
    print(f"target with the fit kept: {TARGET_MS:g} ms")


if __name__ == "__main__":
    main()
