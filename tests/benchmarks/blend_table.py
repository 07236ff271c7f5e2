"""Measured tables of docs/blends.md: python tests/benchmarks/blend_table.py [SEEDS]

Invented blends of two log-normal polyethylenes (Mw 6e4 and 2.2e5 g/mol, dispersity 2.5 and 3) at
190 C, four decades of frequency, 2 % noise. Run by hand; takes a few minutes.
"""

from __future__ import annotations

import sys
import time
from dataclasses import replace
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))

import numpy as np  # noqa: E402
from decisions.made_up import HDPE, OMEGA, A, B, study, sweep  # noqa: E402
from decisions.test_calibrate import off  # noqa: E402
from decisions.test_gpc_band import MATCHED, certain, covered, melts, table  # noqa: E402

from mwdlink.chains.distribution import Distribution  # noqa: E402
from mwdlink.chains.gpc_error import GpcError, perturbed  # noqa: E402
from mwdlink.decisions.blend import blend  # noqa: E402
from mwdlink.decisions.blend_parts import central_map  # noqa: E402
from mwdlink.decisions.blend_sweeps import (  # noqa: E402
    MeasuredBank,
    log_additive,
    modes_of,
    root_additive,
)
from mwdlink.decisions.blendcheck import check_blends  # noqa: E402
from mwdlink.decisions.calibrate import calibrate  # noqa: E402
from mwdlink.decisions.predict import predict  # noqa: E402
from mwdlink.decisions.response import Bank  # noqa: E402
from mwdlink.relaxation.melt_response import Relaxation  # noqa: E402
from mwdlink.relaxation.mixing import Model  # noqa: E402

KERNELS = ("exponential", "reptation", "power-law")
MELT = HDPE.melt(190.0)
SEEDS = int(sys.argv[1]) if len(sys.argv) > 1 else 6


def say(text: str) -> None:
    sys.stdout.write(text + "\n")
    sys.stdout.flush()


def component_spectra() -> None:
    """Predicted against true moduli of blends, through the components' noisy sweeps."""
    say(
        "\n| data made with | G' rms / worst [decades] | G'' rms / worst [decades] |\n|---|---|---|"
    )
    for kernel in KERNELS:
        model, gaps = Model(kernel, 2.0), []
        for seed in range(SEEDS):
            rng = np.random.default_rng(seed)
            bank = MeasuredBank([modes_of(sweep(d, model, rng)) for d in (A, B)])
            for p in (0.05, 0.25, 0.5, 0.75, 0.95):
                true = Relaxation(Distribution.blend([(A, 1 - p), (B, p)]), MELT, model)
                told = bank.response(np.array([[1 - p, p]]), 2.0).moduli(OMEGA)
                gaps.append([np.log10(t[0] / m) for t, m in zip(told, true.moduli(OMEGA))])
        g = np.array(gaps)
        cells = [
            f"{np.sqrt(np.mean(g[:, i] ** 2)):.4f} / {np.abs(g[:, i]).max():.4f}" for i in (0, 1)
        ]
        say(f"| {kernel} | {cells[0]} | {cells[1]} |")


def classical() -> None:
    """eta0 of blends by the classical rules and by the components' spectra, against the truth."""
    w = np.geomspace(1e-3, 1e2, 26)
    say("\n| data made with | measured spectra | Mw-additive | log-additive |\n|---|---|---|---|")
    for kernel in KERNELS:
        bank = Bank([A, B], MELT)
        x = np.linspace(0.05, 0.95, 19)
        phi = np.stack([1 - x, x], 1)
        true = bank.response(phi, kernel, 2.0).terminal[0]
        pure = bank.response(np.eye(2), kernel, 2.0).terminal[0]
        rng = np.random.default_rng(0)
        swept = MeasuredBank([modes_of(sweep(d, Model(kernel, 2.0), rng, omega=w)) for d in (A, B)])
        told = (
            swept.response(phi, 2.0).terminal[0],
            root_additive(phi, pure, MELT.law_exponent),
            log_additive(phi, pure),
        )
        cells = [f"{np.sqrt(np.mean(np.log10(t / true) ** 2)):.3f}" for t in told]
        say(f"| {kernel} | {' | '.join(cells)} |")


def recovered() -> None:
    """Fractions read back, false alarms, and whether a wrong label shows."""
    say(
        "\n| data made with | median / worst error of a fraction [wt%] | false alarms | wrong "
        "label found, alone |\n|---|---|---|---|"
    )
    for kernel, exponent in (("exponential", 2.3), ("reptation", 2.0), ("power-law", 1.8)):
        errors, alarms, count, found = [], 0, 0, 0
        for seed in range(SEEDS):
            r = check_blends(study(kernel, exponent, seed, with_distributions=False))
            errors += [abs(b.recovered["A"].value - b.weighed["A"]) for b in r.blends]
            alarms += sum(b.agrees is False for b in r.blends)
            count += len(r.blends)
            wrong = (0.9, 0.75, 0.5, 0.25)[seed % 4]
            made = study(kernel, exponent, 50 + seed, wrong, wrong - 0.08, with_distributions=False)
            odd = [b.name for b in check_blends(made).blends if b.agrees is False]
            found += odd == [f"A{round(100 * wrong)}"]
        say(
            f"| {kernel}, exponent {exponent} | {100 * np.median(errors):.2f} / "
            f"{100 * max(errors):.2f} | {alarms} of {count} | {found} of {SEEDS} |"
        )


def gpc_errors(cases: int = 200) -> None:
    """How often 90 % bands hold the truth when the GPC tables were off by the model's errors."""
    say(
        f"\n{cases} cases each, kernel and exponent known, viscosity law exact: share of truths in "
        "90 % bands\n\n| | eta0 | crossover omega | crossover G | G' | G'' | half width of eta0 "
        "[%] |\n|---|---|---|---|---|---|---|"
    )
    own = certain()
    for name, kind, ask in (
        ("one table, absolute", "absolute", None),
        ("one table, unstated", "unstated", None),
        ("two tables, unstated", "unstated", 0.4),
    ):
        hits: dict[str, list[float]] = {}
        widths = []
        for i in range(cases):
            shift = 0.05 if kind == "unstated" else 0.01
            factor = np.exp(shift * np.random.default_rng(7000 + i).standard_normal())
            true = [table(melts(i + 1000 * k), kind) for k in range(1 if ask is None else 2)]
            error = GpcError(molar_mass=0.0)
            seen = [perturbed(d, error, 2 * i + k).scaled(factor) for k, d in enumerate(true)]
            if ask is None:
                truth = predict(true[0], own, members=0, **MATCHED)
                told = predict(seen[0], own, members=200, seed=i, **MATCHED)
            else:
                truth = blend(true, [ask, 1 - ask], own, members=0, **MATCHED)
                told = blend(seen, [ask, 1 - ask], own, members=200, seed=i, **MATCHED)
            covered(truth, told, hits)
            u = told.outputs.bands["eta0_Pa_s"]
            widths.append(50.0 * np.log(u.high / u.low))
        keys = ("eta0_Pa_s", "crossover_omega_rad_per_s", "crossover_G_Pa", "G'", "G''")
        cells = " | ".join(f"{np.mean(hits[k]):.2f}" for k in keys)
        say(f"| {name} | {cells} | {np.median(widths):.0f} |")


def through_distributions(cases: int = 12) -> None:
    """The check without components' sweeps, their GPC tables off by the model's errors."""
    inside, alarms, bags, found = [], 0, 0, 0
    for seed in range(cases):
        made = study("power-law", 2.0, seed, 0.5, 0.4)
        parts = tuple(
            replace(
                c,
                distribution=perturbed(table(c.distribution), GpcError(), 10 * seed + k),
                sweep=None,
            )
            for k, c in enumerate(made.components)
        )
        right = replace(study("power-law", 2.0, seed), components=parts)
        r = check_blends(right, kernels=["power-law"])
        inside.append(r.exponent.low <= 2.0 <= r.exponent.high)
        alarms += sum(b.agrees is False for b in r.blends)
        bags += len(r.blends)
        r = check_blends(replace(made, components=parts), kernels=["power-law"])
        found += [b.name for b in r.blends if b.agrees is False] == ["A50"]
    say(
        f"\nthrough distributions, tables off: exponent held in {sum(inside)} of {cases}, "
        f"{alarms} false alarms of {bags} bags, a bag 10 wt% off found alone in {found}"
    )


def constants(cases: int = 20) -> None:
    """`calibrate` on tables that are off, and the same taken as exact."""
    for name in ("as measured", "as exact"):
        misses, inside = [], []
        for seed in range(cases):
            made = off(seed)
            if name == "as exact":
                parts = tuple(
                    replace(c, distribution=replace(c.distribution, measured=False))
                    for c in made.components
                )
                made = replace(made, components=parts)
            u = calibrate(made, kernels=["power-law"]).exponent
            misses.append(u.value - 2.15)
            inside.append(u.low is not None and u.low <= 2.15 <= u.high)
        rms = np.sqrt(np.mean(np.square(misses)))
        say(f"calibrate, tables off, {name}: exponent off by {rms:.2f}, held in {sum(inside)}")


def speed() -> None:
    """Best of three, one core."""
    made = study("power-law", 2.0, 0)

    def best(job):
        times = []
        for _ in range(3):
            start = time.process_time()
            job()
            times.append(time.process_time() - start)
        return min(times)

    r = blend([A, B], [0.5, 0.5], HDPE, members=0)
    c = r.computed
    seconds = best(
        lambda: central_map(
            c.central,
            r.fractions,
            c.omega,
            759.0,
            (2.16, 5.0, 21.6),
            (0.1, 1.0, 10.0, 100.0),
            True,
            c.belief,
        )  # fmt: skip
    )
    say(f"\nmap of 101 fractions, all properties: {seconds:.3f} s")
    say(f"blend with 200 members: {best(lambda: blend([A, B], [0.5, 0.5], HDPE)):.2f} s")
    say(f"check of 2 components and 6 blends, all rules: {best(lambda: check_blends(made)):.2f} s")


if __name__ == "__main__":
    component_spectra()
    classical()
    recovered()
    gpc_errors()
    through_distributions()
    constants()
    speed()
