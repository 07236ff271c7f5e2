"""How often a clean sheet raises a false alarm, and how often a claim that is off is named.

Run by hand; prints the table of docs/datasheet.md:

    python tests/benchmarks/sheet_study.py --sheets 200

Invented sheets of linear polyethylene: a melt drawn from one of three families, a card that is off
by its own scatter, an exponent from its prior, one of three kernels; five to nine claims, each off
by half its tolerance times a normal number. Then one claim that the others determine is moved by
four combined standard deviations (its own and the expected one's).
"""

from __future__ import annotations

import argparse
import time
from dataclasses import replace

import numpy as np

from mwdlink.chains.polymer import builtin
from mwdlink.decisions.datasheet import check_datasheet
from mwdlink.decisions.datasheet_claims import Claim, Sheet
from mwdlink.decisions.datasheet_model import CARD, FAMILIES, sheet_model

POSSIBLE = (
    Claim("Mn_g_per_mol", "Mn", 1.0, 0.15, calibration="absolute"),
    Claim("Mw_g_per_mol", "Mw", 1.0, 0.10, calibration="absolute"),
    Claim("Mz_g_per_mol", "Mz", 1.0, 0.20, calibration="absolute"),
    Claim("eta0_Pa_s", "eta0", 1.0, 0.15, temperature_C=190.0),
    Claim("melt_flow 2.16 kg 190 C", "melt flow", 1.0, 0.10, temperature_C=190.0, load_kg=2.16),
    Claim("melt_flow 5 kg 190 C", "melt flow", 1.0, 0.10, temperature_C=190.0, load_kg=5.0),
    Claim("melt_flow 21.6 kg 190 C", "melt flow", 1.0, 0.10, temperature_C=190.0, load_kg=21.6),
    Claim("crossover_omega_rad_per_s", "crossover omega", 1.0, 0.15, temperature_C=190.0),
    Claim("crossover_G_Pa", "crossover G", 1.0, 0.15, temperature_C=190.0),
    Claim("viscosity 0.1 rad/s 190 C", "viscosity", 1.0, 0.10, temperature_C=190.0, omega=0.1),
    Claim("viscosity 100 rad/s 190 C", "viscosity", 1.0, 0.10, temperature_C=190.0, omega=100.0),
    Claim("intrinsic_viscosity", "intrinsic viscosity", 1.0, 0.05),
    Claim("activation_energy", "activation energy", 1.0, 0.10),
)


def models() -> dict[str, object]:
    card = builtin("hdpe")
    return {k: sheet_model(card, POSSIBLE, k) for k in ("power-law", "exponential", "reptation")}


def clean(seed: int, known: dict[str, object]) -> Sheet:
    """An invented sheet whose claims are right within their tolerances."""
    rng = np.random.default_rng([seed, 66])
    while True:
        family = list(FAMILIES)[rng.integers(3)]
        kernel = list(known)[rng.integers(3)]
        z = 0.8 * rng.standard_normal((1, len(FAMILIES[family]) + len(CARD)))
        y = known[kernel].predict(z, family)[0]  # type: ignore[attr-defined]
        usable = np.flatnonzero(np.isfinite(y))
        if usable.size >= 10:
            break
    chosen = np.sort(rng.permutation(usable)[: rng.integers(5, 10)])
    claims = []
    for i in chosen:
        c = POSSIBLE[i]
        value = float(np.exp(y[i] + 0.5 * c.tolerance * rng.standard_normal()))
        claims.append(replace(c, value=value))
    return Sheet(tuple(claims), builtin("hdpe"))


def moved(sheet: Sheet, seed: int, sds: float = 4.0) -> tuple[Sheet, str] | None:
    """The sheet with one claim moved, and which; None where the others determine none."""
    rng = np.random.default_rng([seed, 67])
    before = check_datasheet(sheet)
    open_to_judge = [
        i for i, j in enumerate(before.claims) if j.verdict in ("consistent", "strained")
    ]
    if not open_to_judge:
        return None
    i = int(rng.choice(open_to_judge))
    one = before.claims[i]
    spread = np.log(one.expected.high / one.expected.low) / (2 * 1.645)
    step = sds * np.hypot(spread, 0.5 * one.tolerance) * rng.choice([-1.0, 1.0])
    claims = list(sheet.claims)
    claims[i] = replace(claims[i], value=float(one.expected.value * np.exp(step)))
    return replace(sheet, claims=tuple(claims)), claims[i].quantity


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sheets", type=int, default=200)
    parser.add_argument("--sds", type=float, default=4.0)
    a = parser.parse_args()
    known = models()
    alarms = strained = tried = named = raised = 0
    z: list[float] = []
    cannot: dict[str, list[bool]] = {}
    began = time.process_time()
    for seed in range(a.sheets):
        sheet = clean(seed, known)
        result = check_datasheet(sheet)
        alarms += result.odd_one_out is not None
        strained += any(j.verdict == "strained" for j in result.claims)
        for j in result.claims:
            cannot.setdefault(j.quantity, []).append(j.verdict == "cannot judge")
            if j.z is not None and j.verdict != "cannot judge":
                z.append(j.z)
    seconds = (time.process_time() - began) / a.sheets
    for seed in range(a.sheets):
        pair = moved(clean(seed, known), seed, a.sds)
        if pair is None:
            continue
        tried += 1
        result = check_datasheet(pair[0])
        raised += result.odd_one_out is not None
        named += result.odd_one_out == pair[1]
    print("| clean sheets | false alarms | with a strained claim | spread of z | CPU s a sheet |")
    print("|---|---|---|---|---|")
    print(f"| {a.sheets} | {alarms} ({100 * alarms / a.sheets:.1f} %) | {strained} | "
          f"{np.std(z):.2f} | {seconds:.1f} |")  # fmt: skip
    print(f"\n| claims moved by {a.sds:g} standard deviations | alarm raised | named |")
    print("|---|---|---|")
    print(f"| {tried} | {100 * raised / tried:.0f} % | {100 * named / tried:.0f} % |")
    print("\n| claim | cannot judge |")
    print("|---|---|")
    for name, marks in cannot.items():
        print(f"| {name} | {100 * np.mean(marks):.0f} % |")


if __name__ == "__main__":
    main()
