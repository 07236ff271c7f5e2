"""`check_datasheet`: do the numbers on a supplier's sheet hang together?"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from scipy.stats import norm

from mwdlink.chains.polymer import Polymer, builtin
from mwdlink.decisions.branching_signs import LCBI_POLYMERS, LCBI_TEMPERATURE, branching_index
from mwdlink.decisions.datasheet_causes import shadows, tried
from mwdlink.decisions.datasheet_claims import Claim, Sheet
from mwdlink.decisions.datasheet_fit import Expected, claim_sigma, expect, model_sigma
from mwdlink.decisions.datasheet_model import SheetModel, sheet_model
from mwdlink.decisions.datasheet_result import DataSheet, Judged
from mwdlink.decisions.datasheet_search import MOST, Finding, find, follows
from mwdlink.decisions.datasheet_words import explain, unit_of, verdict_of
from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.quantity import Uncertain, quantiles
from mwdlink.relaxation.kernels import get_kernel

STRAINED, INCONSISTENT = 2.0, 3.25
# others that leave a factor of more than 2.5 open (90 %) do not determine a claim
OPEN = float(np.log(2.5) / (2 * 1.645))
LEVEL = 0.9
# the realistic kernel, and the one furthest from it: what they differ by is what one does not know
KERNELS = ("power-law", "exponential")


def check_datasheet(
    sheet: Sheet,
    polymer: Polymer | str | None = None,
    *,
    kernels: Sequence[str] | None = None,
    seed: int = 0,
) -> DataSheet:
    """Hold every claim against what all the others lead one to expect.

    Parameters
    ----------
    sheet : Sheet
        See `mwdlink.files.sheet.read_sheet`, or build one from `Claim`s.
    polymer : Polymer or str, optional
        Instead of the one the sheet names.
    kernels : sequence of str, optional
        Default `power-law` and `exponential`, weighed by evidence.
    seed : int

    Returns
    -------
    DataSheet
        Where a claim stands out, the others are judged by each other without it.

    Raises
    ------
    InputError
        If no polymer is named or fewer than two claims are left to compare.
    """
    card = polymer if polymer is not None else sheet.polymer
    if card is None:
        raise InputError("the sheet names no polymer.", remedy='Add polymer = "hdpe" or --polymer.')
    if isinstance(card, str):
        card = builtin(card)
    melt = card.melt(card.temperature_C)
    names = tuple(kernels) if kernels else KERNELS
    for name in names:
        get_kernel(name, melt)
    usable, notes = _usable(sheet, card)
    if len(usable) < 2:
        lost = " ".join(n.text for n in notes if n.code == "claim_not_used")
        raise InputError(
            f"the sheet has {len(usable)} claim{'' if len(usable) == 1 else 's'} that can be "
            f"compared.{' ' if lost else ''}{lost}",
            path=sheet.paths[0] if sheet.paths else None,
            remedy="At least two are needed: an average or a viscosity with a melt flow rate, say.",
        )
    models = [sheet_model(card, usable, k) for k in names]
    n = len(usable)
    counted = np.ones(n)
    dependent = follows(usable)
    counted[list(dependent)] = 0.0
    *left_out, everything = expect(models, n, np.vstack([_one_left_out(counted), counted]), seed)
    judged = _judged(usable, left_out)
    first = judged
    fits: dict[int, tuple[str, ...]] = {}
    for least in range(1, MOST + 1):
        finding = find(
            models,
            usable,
            [j.verdict == "inconsistent" for j in first],
            [e.cost for e in left_out],
            everything.cost,
            counted,
            least,
        )
        if not finding.named:
            break
        judged, fits, more = _again(models, usable, card, first, finding, counted, seed)
        if not more or not finding.rest_agrees:
            break
    rivals = {i: s for i, s in finding.rivals.items() if judged[i].verdict != "consistent"}
    finding = replace(finding, rivals=rivals)
    named = sorted(finding.named, key=lambda i: -abs(judged[i].z or 0.0))
    odd = usable[named[0]].quantity if named else None
    index = _branching_index(sheet, card)
    return DataSheet(
        claims=judged,
        odd_one_out=odd,
        also_off=tuple(usable[i].quantity for i in named[1:]),
        rivals=tuple(usable[i].quantity for i in finding.rivals),
        verdict=verdict_of(usable, judged, named, finding),
        explanations=explain(sheet, usable, judged, named, finding, fits, dependent, index, card),
        branching_index=index,
        model={"kernels": list(names), "exponent": "2.0 +- 0.2", "rouse": True,
               "families": list(models[0].families)},
        warnings=merge_cautions(sheet.warnings, melt.warnings, notes),
    )  # fmt: skip


def _one_left_out(counted: np.ndarray) -> np.ndarray:
    """A row for each claim, without it, shape (n, n)."""
    return np.tile(counted, (counted.size, 1)) * (1.0 - np.eye(counted.size))


def _usable(sheet: Sheet, card: Polymer) -> tuple[tuple[Claim, ...], tuple[Caution, ...]]:
    """Claims the card can speak of, at a stated temperature."""
    out: list[Claim] = []
    notes: list[Caution] = []
    hoops = card.get("mark_houwink.K_dL_per_g")
    shift = card.shift
    for c in sheet.claims:
        reason = ""
        if c.kind == "intrinsic viscosity" and hoops is None:
            reason = "the card has no Mark-Houwink constants"
        elif c.kind == "activation energy" and shift is None:
            reason = "the card has no shift law"
        elif c.kind == "activation energy" and shift is not None and shift.kind != "arrhenius":
            # 100 to 160 kJ/mol within 40 K for polystyrene: without its temperature it says little
            reason = f"that of {card.name} depends on the temperature, which a sheet does not say"
        elif c.temperature_C is not None and abs(c.temperature_C - card.temperature_C) > 0.1:
            if shift is None:
                reason = f"the card has no shift law to {c.temperature_C:g} C"
            else:
                notes.extend(shift.check(c.temperature_C, card.name))
        needs = c.kind in ("eta0", "viscosity", "melt flow", "flow rate ratio") or (
            c.kind.startswith("crossover")
        )
        if not reason and needs and c.temperature_C is None:
            notes.append(
                Caution(
                    "temperature_assumed",
                    f"{c.quantity}: no temperature is stated; {card.temperature_C:g} C was taken.",
                )
            )
            c = replace(c, temperature_C=card.temperature_C)
        if reason:
            notes.append(Caution("claim_not_used", f"{c.quantity} was left out: {reason}."))
        else:
            out.append(c)
    guessed = [c.quantity for c in out if not c.tolerance_given]
    if guessed:
        notes.append(
            Caution(
                "tolerance_assumed",
                "No tolerance is stated for " + ", ".join(guessed) + "; a usual one was taken.",
            )
        )
    if sheet.branching == "some":
        notes.append(
            Caution(
                "branching_stated",
                "The sheet says that the chains are branched: everything here holds for linear "
                "chains, and differences are to be expected.",
            )
        )
    return tuple(out), tuple(notes)


def _again(
    models: Sequence[SheetModel],
    claims: Sequence[Claim],
    card: Polymer,
    judged: Sequence[Judged],
    finding: Finding,
    counted: np.ndarray,
    seed: int,
) -> tuple[tuple[Judged, ...], dict[int, tuple[str, ...]], bool]:
    """All claims judged without those that do not belong, which would lead them astray.

    Returns
    -------
    judged : tuple of Judged
        A rival is judged by what is left without it and with the claim it contradicts.
    fits : dict
        Claim -> causes that would bring its number in line.
    more : bool
        Whether others still stand out, so that more claims must be off.
    """
    suspects = [*finding.named, *finding.rivals]
    quantities = (*claims, *shadows([claims[i] for i in suspects], card))
    rows = _one_left_out(counted)
    rows[:, list(finding.named)] = 0.0
    others = _one_left_out(counted)[list(finding.rivals)]
    for row, left in zip(others, finding.rivals.values(), strict=True):
        row[list(left)] = 0.0
    wider = [replace(m, claims=quantities) for m in models]
    expected = list(expect(wider, len(claims), np.vstack([rows, others]), seed))
    again = list(_judged(claims, expected[: len(claims)]))
    more = any(
        j.verdict == "inconsistent" and counted[i] > 0 and i not in finding.named
        for i, j in enumerate(again)
    )
    if not finding.rest_agrees:
        # no few claims explain it: each against all the others is all one can say
        again = [again[i] if i in finding.named else j for i, j in enumerate(judged)]
    for k, i in enumerate(finding.rivals):
        expected[i] = expected[len(claims) + k]
        again[i] = _judged(claims, expected[: len(claims)])[i]
        if again[i].verdict in ("consistent", "strained"):
            again[i] = judged[i]
    fits = {i: tried(claims[i], i, quantities, expected[i]) for i in suspects}
    return tuple(again), fits, more


def _judged(claims: Sequence[Claim], left_out: Sequence[Expected]) -> tuple[Judged, ...]:
    own, model = claim_sigma(claims), model_sigma(claims)
    out = []
    for i, c in enumerate(claims):
        mean, spread = left_out[i].mean_and_spread(i)
        if not np.isfinite(mean):
            nothing = Uncertain(None, None, None, LEVEL, "assumed")
            out.append(
                Judged(c.quantity, c.value, c.tolerance, nothing, None, "cannot judge", unit_of(c))
            )
            continue
        spread = float(np.hypot(spread, model[i]))
        z = float((np.log(c.value) - mean) / np.hypot(own[i], spread))
        undetermined = spread > OPEN
        if undetermined and abs(z) < INCONSISTENT:
            verdict = "cannot judge"
        elif abs(z) < STRAINED:
            verdict = "consistent"
        else:
            verdict = "strained" if abs(z) < INCONSISTENT else "inconsistent"
        out.append(
            Judged(
                c.quantity,
                c.value,
                c.tolerance,
                _interval(left_out[i], i, mean, spread, model[i], undetermined),
                z,
                verdict,
                unit_of(c),
            )
        )
    return tuple(out)


def _interval(
    e: Expected, i: int, mean: float, spread: float, extra: float, undetermined: bool
) -> Uncertain:
    y, w = e.values[:, i], e.weights
    good = np.isfinite(y)
    reach = float(norm.ppf((1 + LEVEL) / 2))
    low, high = mean - reach * spread, mean + reach * spread
    if 1.0 / np.sum((w[good] / w[good].sum()) ** 2) > 30 and extra == 0.0:
        low, high = quantiles(y[good], [(1 - LEVEL) / 2, (1 + LEVEL) / 2], w[good])
    status = "assumed" if undetermined else "resolved"
    return Uncertain(
        float(np.exp(mean)),
        float(np.exp(min(low, mean))),
        float(np.exp(max(high, mean))),
        LEVEL,
        status,
    )


def _branching_index(sheet: Sheet, card: Polymer) -> float | None:
    """LCBI of the claimed viscosities: of polyethylene, carried to 190 C by the card."""
    eta0 = next((c for c in sheet.claims if c.kind == "eta0"), None)
    iv = next((c for c in sheet.claims if c.kind == "intrinsic viscosity"), None)
    if eta0 is None or iv is None or card.name.lower() not in LCBI_POLYMERS:
        return None
    T = card.temperature_C if eta0.temperature_C is None else eta0.temperature_C
    factor = 1.0
    if abs(T - LCBI_TEMPERATURE) > 0.5:
        if card.shift is None:
            return None
        factor = float(card.shift.factor(LCBI_TEMPERATURE, T))
    return float(branching_index(eta0.value * factor, iv.value))
