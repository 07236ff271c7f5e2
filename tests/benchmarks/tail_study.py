"""How well a tail is found, and how often one is found that is not there.

Run by hand; prints the tables of docs/tail.md:

    python tests/benchmarks/tail_study.py --cases 200 --free 50
    python tests/benchmarks/tail_study.py --cases 24 --true exponential --fit power-law

Invented linear polyethylenes: a body of one of four kinds, 0.3 to 4 wt% of a log-normal tail about
two to three times beyond the GPC's exclusion limit of 1.2e6 g/mol, the time law off by up to 15 %,
3 % noise on the moduli, 2 % of itself and 0.2 % of the peak on every row of the GPC.
"""

from __future__ import annotations

import argparse
import time

import numpy as np
from scipy.stats import norm

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.gpc_error import BASELINE_ERROR, RELATIVE_ERROR
from mwdlink.chains.polymer import builtin
from mwdlink.decisions import tail
from mwdlink.decisions.tail import find_tail
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

EXCLUSION = 1.2e6
NOISE = 0.03
BODIES = ("log-normal", "Schulz-Zimm", "generalised exponential", "two parts")
GRID = np.linspace(np.log(50.0), np.log(3e8), 1500)


def lognormal(Mw: float, dispersity: float) -> np.ndarray:
    """Weights of a log-normal on GRID."""
    s = np.sqrt(np.log(dispersity))
    f = np.exp(-0.5 * ((GRID - np.log(Mw) + 0.5 * s * s) / s) ** 2)
    return f / f.sum()


def gamma_like(Mw: float, a: float, b: float) -> np.ndarray:
    """Weights of a generalised exponential of given Mw on GRID."""

    def at(scale: float) -> np.ndarray:
        r = GRID - np.log(scale)
        f = np.exp((a + 1) * r - np.exp(b * r))
        return f / f.sum()

    return at(Mw * Mw / float(at(Mw) @ np.exp(GRID)))


def body(kind: str, rng: np.random.Generator) -> np.ndarray:
    Mw = rng.uniform(0.8e5, 1.6e5)
    if kind == "log-normal":
        return lognormal(Mw, rng.uniform(2.5, 6.0))
    if kind == "Schulz-Zimm":
        return gamma_like(Mw, 1.0 / (rng.uniform(1.8, 3.0) - 1.0), 1.0)
    if kind == "generalised exponential":
        return gamma_like(Mw, rng.uniform(0.5, 2.0), rng.uniform(0.4, 0.8))
    return 0.5 * lognormal(3e4, 2.2) + 0.5 * lognormal(2.0 * Mw, 2.2)


def made(
    seed: int,
    *,
    tail: float | None = None,
    kernel: str = "power-law",
    kinds: tuple[str, ...] = BODIES[:1],
    omega: tuple[float, float] = (1e-3, 1e3),
    exponent: float = 2.0,
    noise: float = NOISE,
    tail_shape: tuple[float, float] | None = None,
) -> tuple[Distribution, Distribution, Sweep, float]:
    """True distribution, GPC, sweep and time-law factor of one invented sample.

    `tail_shape` is Mw [g/mol] and dispersity of the tail; by default both are drawn.
    """
    rng = np.random.default_rng([seed, 6])
    share = rng.uniform(0.003, 0.04) if tail is None else tail
    weights = (1 - share) * body(kinds[seed % len(kinds)], rng)
    drawn = rng.uniform(2e6, 4e6), rng.uniform(1.2, 1.6)
    weights = weights + share * lognormal(*(tail_shape or drawn))
    held = weights > 1e-13 * weights.max()
    true = Distribution.from_nodes(np.exp(GRID[held]), weights[held])
    factor = float(np.exp(rng.uniform(np.log(0.87), np.log(1.15))))
    melt = builtin("hdpe").melt(190.0).with_(time_factor=factor)
    decades = np.log10(omega[1] / omega[0])
    w = np.geomspace(*omega, int(round(5 * decades)) + 1)
    storage, loss = Relaxation(true, melt, Model(kernel, exponent)).moduli(w)
    sweep = Sweep(
        w,
        storage * np.exp(noise * rng.standard_normal(w.size)),
        loss * np.exp(noise * rng.standard_normal(w.size)),
        temperature_C=190.0,
    )
    m = np.geomspace(1e3, EXCLUSION, 150)
    density = np.interp(np.log(m), np.log(true.molar_mass), true.density)
    density = density * (1 + 0.02 * rng.standard_normal(m.size))
    density = density + 0.002 * density.max() * rng.standard_normal(m.size)
    return true, Distribution.from_table(m, density, calibration="absolute"), sweep, factor


def study(
    cases: int,
    fit: tuple[str, ...] | None,
    members: int,
    *,
    first: int = 0,
    asked: float | tuple[float, float] | None = None,
    exponent_spread: float = 0.0,
    **made_with: object,
) -> dict[str, float]:
    """Errors, cover and findings over a number of cases.

    Parameters
    ----------
    first : int
        Seed of the first case.
    asked : float, (low, high) or None
        Exponent given to `find_tail`.
    exponent_spread : float
        Standard deviation of the melts' own exponents about 2.
    """
    error, half, inside, found, limit, factor, seconds, assumed = ([] for _ in range(8))
    for seed in range(first, first + cases):
        own = 2.0 + exponent_spread * float(np.random.default_rng([seed, 7]).standard_normal())
        true, gpc, sweep, law = made(seed, exponent=max(own, 1.5), **made_with)  # type: ignore[arg-type]
        began = time.process_time()
        r = find_tail(
            gpc,
            sweep,
            "hdpe",
            beyond=EXCLUSION,
            noise=NOISE,
            members=members,
            kernels=fit,
            exponent=asked,
        )
        seconds.append(time.process_time() - began)
        value = true.weight_above(EXCLUSION)
        f = r.fraction
        error.append(100 * (f.value - value))
        half.append(50 * (f.high - f.low))
        inside.append(f.low <= value <= f.high)
        found.append(r.found)
        assumed.append(f.status != "resolved")
        limit.append(100 * (r.detection_limit or 1.0))
        factor.append(r.time_law_factor.value / law - 1)
    size = np.abs(error)
    return {
        "cases": cases,
        "median error": float(np.median(size)),
        "worst error": float(size.max()),
        "worst seed": first + int(np.argmax(size)),
        "bias": float(np.mean(error)),
        "rms": float(np.sqrt(np.mean(size**2))),
        "half width": float(np.median(half)),
        "cover": float(np.mean(inside)),
        "found": int(np.sum(found)),
        "assumed": int(np.sum(assumed)),
        "limit": float(np.median(limit)),
        "time law": float(np.median(np.abs(factor))),
        "seconds": float(np.median(seconds)),
    }


def bound(cases: int, first: int = 0) -> dict[str, float]:
    """What no reading of these pairs can beat: the body known, and the kind of the tail.

    Standard deviation [wt%] of the weight beyond the exclusion limit from the Fisher information of
    both instruments, where only the tail's weight, mass and width, the time law, the level and the
    exponent are unknown: all but the exponent within what the melts of this study differ by, the
    exponent within 0.2 or known. The GPC's rows err as `find_tail` assumes.

    Once for melts whose exponents are spread by 0.2, and once for those of this study, whose
    exponent is the middle of that prior without the reader knowing; from each the chance that none
    of all cases errs by more than 0.5 wt%.
    """
    melt = builtin("hdpe").melt(190.0)
    omega = np.geomspace(1e-3, 1e3, 31)
    rows = np.linspace(3.2, np.log10(EXCLUSION), 47)
    # weight, ln mass, dispersity, ln time law, ln level, exponent
    spread = np.array([np.inf, 0.2, 0.115, 0.083, 1e-3, 0.2])
    steps = np.diag([1e-3, 0.02, 0.02, 0.01, 0.01, 0.01])
    unknown, middle, known = [], [], []
    for seed in range(first, first + cases):
        rng = np.random.default_rng([seed, 6])
        share = rng.uniform(0.003, 0.04)
        main = body(BODIES[seed % len(BODIES)], rng)
        centre = np.array([share, np.log(rng.uniform(2e6, 4e6)), rng.uniform(1.2, 1.6), 0, 0, 2.0])

        def seen(p: np.ndarray, main: np.ndarray = main) -> tuple[np.ndarray, np.ndarray, float]:
            w = (1 - p[0]) * main + p[0] * lognormal(np.exp(p[1]), p[2])
            held = w > 1e-13 * w.max()
            d = Distribution.from_nodes(np.exp(GRID[held]), w[held])
            law = melt.with_(time_factor=float(np.exp(p[3])))
            storage, loss = Relaxation(d, law, Model("power-law", float(p[5]))).moduli(omega)
            curve = np.interp(rows, GRID / np.log(10.0), w)
            moduli = np.log(np.concatenate([storage, loss])) + p[4]
            return moduli, curve / curve.sum(), d.weight_above(EXCLUSION)

        curve = seen(centre)[1]
        error = np.hypot(RELATIVE_ERROR * curve, BASELINE_ERROR * curve.max())
        columns, wanted = [], []
        for h in steps:
            up, down = seen(centre + h), seen(centre - h)
            change = np.concatenate([(up[0] - down[0]) / NOISE, (up[1] - down[1]) / error])
            columns.append(change / (2 * h.sum()))
            wanted.append(100 * (up[2] - down[2]) / (2 * h.sum()))
        slope, weight = np.column_stack(columns), np.array(wanted)
        information = slope.T @ slope + np.diag(spread**-2.0)
        reach = np.linalg.solve(information, weight)
        unknown.append(np.sqrt(weight @ reach))
        # what the exponent's prior says of the true one is no noise where it is always the middle
        middle.append(np.sqrt(weight @ reach - (reach[5] / spread[5]) ** 2))
        known.append(np.sqrt(weight[:5] @ np.linalg.solve(information[:5, :5], weight[:5])))

    def none_beyond(sd: list[np.ndarray]) -> float:
        return float(np.prod(2.0 * norm.cdf(0.5 / np.array(sd)) - 1.0))

    return {
        "exponent within 0.2, root mean square [wt%]": float(np.sqrt(np.mean(np.square(unknown)))),
        "exponent within 0.2, largest [wt%]": float(np.max(unknown)),
        "exponent known, root mean square [wt%]": float(np.sqrt(np.mean(np.square(known)))),
        "chance that none errs by more than 0.5 wt%, exponents spread by 0.2": none_beyond(unknown),
        "chance that none errs by more than 0.5 wt%, exponents all 2": none_beyond(middle),
        "the same, exponent known": none_beyond(known),
    }


def line(name: str, s: dict[str, float]) -> str:
    return (
        f"| {name} | {s['cases']} | {s['median error']:.2f} | {s['worst error']:.2f} | "
        f"{s['half width']:.2f} | {s['cover']:.2f} | {s['found']} | {s['assumed']} | "
        f"{s['limit']:.2f} | {100 * s['time law']:.0f} % | {s['seconds']:.1f} |"
    )


HEAD = (
    "| data | cases | median error wt% | worst wt% | half width wt% | cover | found | assumed | "
    "detection limit wt% | time law off by | CPU s |\n"
    "|---|---|---|---|---|---|---|---|---|---|---|"
)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--cases", type=int, default=200)
    parser.add_argument("--free", type=int, default=0)
    parser.add_argument("--first", type=int, default=0, help="seed of the first case")
    parser.add_argument("--true", default="power-law")
    parser.add_argument("--fit", nargs="*")
    parser.add_argument("--bodies", choices=("log-normal", "all"), default="all")
    parser.add_argument("--members", type=int, default=100)
    parser.add_argument("--omega", default="1e-3:1e3")
    parser.add_argument("--exponent", help="given to the fit: a number, or LOW:HIGH")
    parser.add_argument(
        "--exponent-spread", type=float, default=0.0, help="of the melts' own exponents"
    )
    parser.add_argument("--bound", type=int, default=0, help="cases for what nothing can beat")
    parser.add_argument(
        "--unlisted", action="store_true", help="take the melts' own kernel off the list"
    )
    a = parser.parse_args()
    if a.unlisted:
        listed = tail.available_kernels
        tail.available_kernels = lambda melt: tuple(k for k in listed(melt) if k != a.true)
    if a.bound:
        for name, value in bound(a.bound, a.first).items():
            print(f"at best, {name}: {value:.3g}")
        return
    low, high = (float(v) for v in a.omega.split(":"))
    kinds = BODIES if a.bodies == "all" else BODIES[:1]
    fit = tuple(a.fit) if a.fit else None
    asked: float | tuple[float, float] | None = None
    if a.exponent:
        ends = [float(v) for v in a.exponent.split(":")]
        asked = ends[0] if len(ends) == 1 else (ends[0], ends[1])
    shared = {
        "kernel": a.true,
        "kinds": kinds,
        "omega": (low, high),
        "first": a.first,
        "asked": asked,
        "exponent_spread": a.exponent_spread,
    }
    print(HEAD, flush=True)
    name = f"{a.true} melt, fitted with {', '.join(fit) if fit else 'all kernels'}, {a.omega} rad/s"
    if a.cases:
        s = study(a.cases, fit, a.members, **shared)  # type: ignore[arg-type]
        print(line(name, s), flush=True)
        print(
            f"bias {s['bias']:+.3f}, rms {s['rms']:.3f}, worst: seed {s['worst seed']}", flush=True
        )
    if a.free:
        free = study(a.free, fit, a.members, tail=0.0, **shared)  # type: ignore[arg-type]
        print(line(f"{name}, no tail", free), flush=True)


if __name__ == "__main__":
    main()
