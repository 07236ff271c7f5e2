"""Does the detection limit hold? Pairs with a tail of exactly that weight, and how many show it.

Run by hand; prints the table of docs/tail.md:

    python tests/benchmarks/tail_power.py --pairs 40

Each pair is made twice from the same random numbers: without a tail, which gives the limit that
`find_tail` states, and with a tail of that weight (or half of it) at twice the molar mass asked
about, dispersity 1.3, as the limit is defined. Bodies, time law and GPC as in `tail_study.py`.
"""

from __future__ import annotations

import argparse
import importlib.util
from pathlib import Path
from types import ModuleType

import numpy as np

from mwdlink.decisions.tail import find_tail
from mwdlink.decisions.tail_limit import TAIL_DISPERSITY, TAIL_RATIO


def _study() -> ModuleType:
    path = Path(__file__).with_name("tail_study.py")
    spec = importlib.util.spec_from_file_location("tail_study", path)
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


STUDY = _study()
SETTINGS = tuple((noise, low) for low in (1e-3, 1e-2) for noise in (0.01, 0.03, 0.05))


def power(
    pairs: int,
    noise: float,
    low: float,
    members: int = 60,
    sizes: tuple[float, ...] = (1.0, 0.5),
    first: int = 0,
) -> dict[str, object]:
    """Share of pairs with a tail of so many detection limits in which one is found.

    Returns
    -------
    dict
        `limit` : median detection limit [wt%]; `none` : pairs for which no limit is stated;
        `found` : share found for each of `sizes` [-]; `missed` : number of those not found, of all
        sizes, and `held` : of them, those whose answer "less than" is true.
    """
    beyond = STUDY.EXCLUSION
    shape = (TAIL_RATIO * beyond, TAIL_DISPERSITY)
    limits: list[float] = []
    found: list[list[bool]] = [[] for _ in sizes]
    none = missed = held = 0
    for seed in range(first, first + pairs):
        made = {"kinds": STUDY.BODIES, "omega": (low, 1e3), "noise": noise, "tail_shape": shape}
        asked = {"beyond": beyond, "noise": noise, "kernels": ("power-law",)}
        _, gpc, sweep, _ = STUDY.made(seed, tail=0.0, **made)
        limit = find_tail(gpc, sweep, "hdpe", members=0, **asked).detection_limit
        if limit is None:
            none += 1
            continue
        limits.append(limit)
        for size, hits in zip(sizes, found, strict=True):
            true, gpc, sweep, _ = STUDY.made(seed, tail=size * limit, **made)
            r = find_tail(gpc, sweep, "hdpe", members=members, **asked)
            hits.append(r.found)
            missed += not r.found
            held += not r.found and r.at_most >= true.weight_above(beyond)
    return {
        "limit": 100.0 * float(np.median(limits)) if limits else None,
        "none": none,
        "found": [float(np.mean(h)) if h else None for h in found],
        "missed": missed,
        "held": held,
    }


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--pairs", type=int, default=40)
    parser.add_argument("--members", type=int, default=60)
    parser.add_argument("--first", type=int, default=0, help="seed of the first pair")
    a = parser.parse_args()
    print(
        "| noise | lowest frequency rad/s | limit wt% | no limit | found at the limit | "
        "at half of it | 'less than' true where none was found |\n|---|---|---|---|---|---|---|",
        flush=True,
    )
    for noise, low in SETTINGS:
        r = power(a.pairs, noise, low, a.members, first=a.first)
        at, half = r["found"]  # type: ignore[misc]
        print(
            f"| {100 * noise:.0f} % | {low:g} | {r['limit']:.2f} | {r['none']} | {at:.2f} | "
            f"{half:.2f} | {r['held']} of {r['missed']} |",
            flush=True,
        )


if __name__ == "__main__":
    main()
