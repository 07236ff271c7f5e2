"""Accuracy and cover of `invert` on melts with known truth; prints Markdown.

    python tests/benchmarks/accuracy.py [MELTS] [KERNEL] [FAMILIES]

MELTS melts a family (default 200), the kernel of both data and fit, exponent 2, 3 % noise, six
decades at five points a decade, the card's time law known exactly. Weights are counted where M lies
inside the window; what is said of one below it is a lower bound, and has a row of its own.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))
from melts import FAMILIES, exact_card, mean_within, measured, melt_of  # noqa: E402

from mwdlink.inversion.invert import invert  # noqa: E402
from mwdlink.relaxation.mixing import Model  # noqa: E402

MULTIPLES = (1.0, 2.5, 4.0)


def study(family: str, melts: int, kernel: str, members: int = 200, noise: float = 0.03) -> dict:
    """Errors and cover of one family: quantity -> list of (error, covered)."""
    card, model = exact_card(), Model(kernel, 2.0, True)
    out: dict[str, list[tuple[float, bool]]] = {}
    spent = 0.0
    for i in range(melts):
        rng = np.random.default_rng([7, i, FAMILIES.index(family)])
        chains = melt_of(family, rng)
        sweep = measured(chains, card, model, rng, noise)
        marks = tuple(float(chains.Mw * x) for x in MULTIPLES) + (5e5,)
        start = time.process_time()
        r = invert(
            sweep, card, kernels=[kernel], exponent=2.0, noise=noise, members=members, above=marks
        )
        spent += time.process_time() - start
        truth = mean_within(chains, *r.window)
        u = r.averages["Mw_within_window_g_per_mol"]
        out.setdefault("Mw within window", []).append(
            (abs(u.value / truth - 1), u.low <= truth <= u.high)
        )
        names = [f"above {x:g} Mw" for x in MULTIPLES] + ["above 5e5"]
        for name, (m, v) in zip(names, r.above, strict=True):
            if m > r.window[1]:
                continue
            if m < r.window[0]:
                # no interval of 90 %: from what is above the window's low end to everything
                name += ", M below the window"
            true = chains.weight_above(m)
            out.setdefault(name, []).append((abs(v.value - true), v.low <= true <= v.high))
    out["seconds"] = [(spent / melts, True)]
    return out


def main() -> None:
    melts = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    kernel = sys.argv[2] if len(sys.argv) > 2 else "power-law"
    chosen = sys.argv[3].split(",") if len(sys.argv) > 3 else FAMILIES
    write = sys.stdout.write
    write(f"{melts} melts a family, kernel {kernel}, 3 % noise, 200 members\n\n")
    write(
        "| family | quantity | melts | median error | 90th percentile | worst | cover of 90 % |\n"
    )
    write("|---|---|---|---|---|---|---|\n")
    for family in chosen:
        found = study(family, melts, kernel)
        seconds = found.pop("seconds")[0][0]
        for name, pairs in found.items():
            e = np.array([p[0] for p in pairs]) * 100
            cover = np.mean([p[1] for p in pairs])
            unit = "%" if name.startswith("Mw") else "wt%"
            write(
                f"| {family} | {name} | {len(pairs)} | {np.median(e):.3g} {unit} "
                f"| {np.quantile(e, 0.9):.3g} | {e.max():.3g} | {cover:.3f} |\n"
            )
        write(f"| {family} | CPU time, s | {melts} | {seconds:.2f} | | | |\n")
        sys.stdout.flush()


if __name__ == "__main__":
    main()
