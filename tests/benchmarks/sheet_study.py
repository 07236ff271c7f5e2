"""How often a clean sheet raises a false alarm, and how often a claim that is off is named.

Run by hand; prints the tables of docs/datasheet.md:

    python tests/benchmarks/sheet_study.py --sheets 200 --first 1000

Invented sheets of linear polyethylene: a melt drawn from one of three families, a card that is off
by its own scatter, an exponent from its prior, one of three kernels (one of them not among those
fitted); five to nine claims, each off by half its tolerance times a normal number; a quarter of the
sheets quote averages on the polystyrene scale, and say so. Then claims that the others determine
are moved by so many combined standard deviations (its own and the expected one's), up or down: one
by four, on every other sheet by the other sizes too, and a second one, of another kind, by four.
An interrupt (Ctrl-C) prints what has been done by then.
"""

from __future__ import annotations

import argparse
import signal
import sys
import time
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from mwdlink.chains.polymer import builtin
from mwdlink.decisions.datasheet import check_datasheet
from mwdlink.decisions.datasheet_claims import KINDS, Claim, Sheet
from mwdlink.decisions.datasheet_families import FAMILIES, USUAL
from mwdlink.decisions.datasheet_model import CARD, SheetModel, sheet_model

M2, M5, M21 = (f"melt_flow {load} kg 190 C" for load in ("2.16", "5", "21.6"))
POSSIBLE = (
    Claim("Mn_g_per_mol", "Mn", 3e4, 0.15, calibration="absolute"),
    Claim("Mw_g_per_mol", "Mw", 1.3e5, 0.10, calibration="absolute"),
    Claim("Mz_g_per_mol", "Mz", 5e5, 0.20, calibration="absolute"),
    Claim("dispersity", "dispersity", 4.0, 0.15),
    Claim("eta0_Pa_s", "eta0", 1.0, 0.15, temperature_C=190.0),
    Claim(M2, "melt flow", 1.0, 0.10, temperature_C=190.0, load_kg=2.16),
    Claim(M5, "melt flow", 1.0, 0.10, temperature_C=190.0, load_kg=5.0),
    Claim(M21, "melt flow", 1.0, 0.10, temperature_C=190.0, load_kg=21.6),
    Claim("melt_flow 10 kg 190 C", "melt flow", 1.0, 0.10, temperature_C=190.0, load_kg=10.0,
          volume=True),
    Claim("flow_rate_ratio", "flow rate ratio", 1.0, 0.15, temperature_C=190.0, load_kg=21.6,
          second_load_kg=2.16),
    Claim("crossover_omega_rad_per_s", "crossover omega", 1.0, 0.15, temperature_C=190.0),
    Claim("crossover_G_Pa", "crossover G", 1.0, 0.15, temperature_C=190.0),
    Claim("viscosity 0.1 rad/s 190 C", "viscosity", 1.0, 0.10, temperature_C=190.0, omega=0.1),
    Claim("viscosity 10 rad/s 210 C", "viscosity", 1.0, 0.10, temperature_C=210.0, omega=10.0),
    Claim("viscosity 100 rad/s 190 C", "viscosity", 1.0, 0.10, temperature_C=190.0, omega=100.0),
    Claim("intrinsic_viscosity", "intrinsic viscosity", 1.0, 0.05),
    Claim("activation_energy", "activation energy", 1.0, 0.10),
)  # fmt: skip
# the same with averages on the polystyrene scale, about twice as high
EQUIVALENT = tuple(
    replace(c, value=2.3 * c.value, calibration="equivalent") if c.kind in ("Mn", "Mw", "Mz") else c
    for c in POSSIBLE
)


def models() -> dict[str, SheetModel]:
    card = builtin("hdpe")
    return {k: sheet_model(card, POSSIBLE, k) for k in ("power-law", "exponential", "reptation")}


def clean(seed: int, known: dict[str, SheetModel]) -> Sheet:
    """An invented sheet whose claims are right within their tolerances."""
    rng = np.random.default_rng([seed, 66])
    quoted = EQUIVALENT if rng.random() < 0.25 else POSSIBLE
    while True:
        family = USUAL[rng.integers(3)]
        kernel = list(known)[rng.integers(3)]
        z = 0.8 * rng.standard_normal((1, len(FAMILIES[family]) + len(CARD)))
        y = replace(known[kernel], claims=quoted).predict(z, family)[0]
        usable = np.flatnonzero(np.isfinite(y))
        if usable.size >= 10:
            break
    chosen = np.sort(rng.permutation(usable)[: rng.integers(5, 10)])
    claims = {}
    for i in chosen:
        c = quoted[i]
        value = float(np.exp(y[i] + 0.5 * c.tolerance * rng.standard_normal()))
        claims[c.quantity] = replace(c, value=value)
    # a sheet that has both rates, or both averages, has their quotient and not another one
    for quotient, over, under in (
        ("dispersity", "Mw_g_per_mol", "Mn_g_per_mol"),
        ("flow_rate_ratio", M21, M2),
    ):
        if {quotient, over, under} <= set(claims):
            value = claims[over].value / claims[under].value
            claims[quotient] = replace(claims[quotient], value=value)
    return Sheet(tuple(claims.values()), builtin("hdpe"))


def movable(result: Any, seed: int) -> list[int]:
    """Claims that the others determine, in a random order."""
    rng = np.random.default_rng([seed, 67])
    able = [i for i, j in enumerate(result.claims) if j.verdict in ("consistent", "strained")]
    return [able[k] for k in rng.permutation(len(able))]


def moved(sheet: Sheet, result: Any, i: int, sds: float) -> Sheet:
    """The sheet with claim i moved away from what the others lead one to expect."""
    rng = np.random.default_rng([i, int(abs(sds) * 100), len(sheet.claims)])
    one = result.claims[i]
    spread = np.log(one.expected.high / one.expected.low) / (2 * 1.645)
    step = sds * np.hypot(spread, 0.5 * one.tolerance) * rng.choice([-1.0, 1.0])
    claims = list(sheet.claims)
    claims[i] = replace(claims[i], value=float(one.expected.value * np.exp(step)))
    return replace(sheet, claims=tuple(claims))


def seen(sheet: Sheet, i: int) -> dict[str, Any]:
    """What the check says of a sheet whose claim i was moved."""
    r = check_datasheet(sheet)
    name = sheet.claims[i].quantity
    others = [j for j in r.claims if j.quantity != name and j.quantity not in r.rivals]
    return {
        "kind": sheet.claims[i].kind,
        "alarm": r.odd_one_out is not None,
        "named": r.odd_one_out == name,
        "among": name == r.odd_one_out or name in r.also_off or name in r.rivals,
        "blamed": sum(j.verdict == "inconsistent" for j in others),
    }


def study(seeds: Sequence[int], sizes: Sequence[float]) -> tuple[dict[str, Any], dict[float, list]]:
    known = models()
    plain: dict[str, Any] = {"alarms": [], "strained": 0, "indices": 0, "z": [], "count": 0}
    judged: dict[str, list[str]] = defaultdict(list)
    hits: dict[float, list[dict[str, Any]]] = defaultdict(list)
    for count, seed in enumerate(seeds, 1):
        try:
            _one(seed, count, known, sizes, plain, judged, hits)
        except KeyboardInterrupt:
            break
        plain["count"] = count
        if count % 20 == 0:
            print(f"{count} sheets, {len(plain['alarms'])} alarms", file=sys.stderr, flush=True)
    plain["judged"] = judged
    return plain, hits


def _one(
    seed: int,
    count: int,
    known: dict[str, SheetModel],
    sizes: Sequence[float],
    plain: dict[str, Any],
    judged: dict[str, list[str]],
    hits: dict[float, list[dict[str, Any]]],
) -> None:
    """One clean sheet, and the same with claims moved."""
    sheet = clean(seed, known)
    result = check_datasheet(sheet)
    if result.odd_one_out is not None:
        plain["alarms"].append(seed)
    plain["strained"] += any(j.verdict == "strained" for j in result.claims)
    plain["indices"] += any("branching index" in text for text in result.explanations)
    for c, j in zip(sheet.claims, result.claims, strict=True):
        judged[c.kind].append(j.verdict)
        if j.z is not None and j.verdict != "cannot judge":
            plain["z"].append(j.z)
    able = movable(result, seed)
    wanted = [s for s in sizes if s == 4.0 or count % 2]
    for size in wanted if able else ():
        hits[size].append(seen(moved(sheet, result, able[0], size), able[0]))
    kinds = [sheet.claims[i].kind for i in able]
    second = next((i for i, k in zip(able, kinds, strict=True) if k != kinds[0]), None)
    if second is not None and 4.0 in sizes:
        hits[4.0].append(seen(moved(sheet, result, second, 4.0), second))


def share(marks: Sequence[bool]) -> str:
    return f"{sum(marks)} of {len(marks)} ({100 * np.mean(marks):.0f} %)" if marks else "-"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sheets", type=int, default=200)
    parser.add_argument("--first", type=int, default=0, help="first seed")
    parser.add_argument("--sizes", default="3,4,6,10", help="in combined standard deviations")
    a = parser.parse_args()
    # a job in the background ignores interrupts unless told otherwise
    signal.signal(signal.SIGINT, signal.default_int_handler)
    sizes = [float(s) for s in a.sizes.split(",")]
    began = time.process_time()
    plain, hits = study(range(a.first, a.first + a.sheets), sizes)
    spent = time.process_time() - began
    n, alarms = plain["count"], plain["alarms"]
    print("| clean sheets | false alarms | with a strained claim | spread of z |")
    print("|---|---|---|---|")
    print(f"| {n} | {len(alarms)} ({100 * len(alarms) / n:.1f} %) | {plain['strained']} | "
          f"{np.std(plain['z']):.2f} |")  # fmt: skip
    print(f"\nalarms at seeds {alarms}; a branching index mentioned in {plain['indices']}")
    print("\n| moved by | alarm raised | named as the odd one out | named, or a suspect | "
          "others called inconsistent, a sheet |")  # fmt: skip
    print("|---|---|---|---|---|")
    for size, rows in sorted(hits.items()):
        print(f"| {size:g} | {share([r['alarm'] for r in rows])} | "
              f"{share([r['named'] for r in rows])} | {share([r['among'] for r in rows])} | "
              f"{np.mean([r['blamed'] for r in rows]):.2f} |")  # fmt: skip
    print("\n| claim | on clean sheets | cannot judge | strained | inconsistent | "
          "moved by 4 or more | named |")  # fmt: skip
    print("|---|---|---|---|---|---|---|")
    for kind in KINDS:
        verdicts = plain["judged"].get(kind, [])
        rows = [r for size, group in hits.items() if size >= 4 for r in group if r["kind"] == kind]
        counts = [verdicts.count(v) for v in ("cannot judge", "strained", "inconsistent")]
        print(f"| {kind} | {len(verdicts)} | {counts[0]} | {counts[1]} | {counts[2]} | "
              f"{len(rows)} | {share([r['named'] for r in rows])} |")  # fmt: skip
    print(f"\n{spent:.0f} s of processor time", file=sys.stderr)


if __name__ == "__main__":
    main()
