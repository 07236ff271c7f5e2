"""`check_datasheet`: do the numbers on a supplier's sheet hang together?"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from scipy.stats import norm

from mwdlink.chains.polymer import Polymer, builtin
from mwdlink.decisions.branching_signs import branching_index
from mwdlink.decisions.datasheet_claims import Claim, Sheet
from mwdlink.decisions.datasheet_fit import Expected, claim_sigma, expect, model_sigma
from mwdlink.decisions.datasheet_model import FAMILIES, sheet_model
from mwdlink.decisions.datasheet_result import DataSheet, Judged
from mwdlink.decisions.datasheet_words import explain, shadows, verdict_of
from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.quantity import Uncertain, quantiles
from mwdlink.relaxation.kernels import get_kernel

STRAINED, INCONSISTENT = 2.0, 3.25
# others that leave a factor of more than 2.5 open (90 %) do not determine a claim
OPEN = float(np.log(2.5) / (2 * 1.645))
# two claims are told apart when leaving out the one leaves this much less misfit than the other
TELL_APART = 4.0
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
        raise InputError(
            f"the sheet has {len(usable)} claim{'' if len(usable) == 1 else 's'} that can be "
            "compared.",
            path=sheet.paths[0] if sheet.paths else None,
            remedy="At least two are needed: an average or a viscosity with a melt flow rate, say.",
        )
    extra = shadows(usable, card)
    quantities = (*usable, *extra)
    models = [sheet_model(card, quantities, k) for k in names]
    _, left_out = expect(models, len(usable), seed)
    judged = _judged(usable, left_out)
    odd, rivals = _odd_one_out(judged, left_out)
    if odd is not None and len(usable) > 2:
        judged = _without(odd, rivals, usable, card, names, judged, seed)
    index = _branching_index(sheet)
    words = explain(sheet, judged, odd, rivals, index, quantities, left_out, card)
    return DataSheet(
        claims=judged,
        odd_one_out=odd,
        verdict=verdict_of(judged, odd, rivals),
        explanations=words,
        branching_index=index,
        model={"kernels": list(names), "exponent": "2.0 +- 0.2", "rouse": True,
               "families": list(FAMILIES)},
        warnings=merge_cautions(sheet.warnings, melt.warnings, notes),
    )  # fmt: skip


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


def _without(
    odd: str,
    rivals: Sequence[str],
    claims: Sequence[Claim],
    card: Polymer,
    kernels: Sequence[str],
    judged: Sequence[Judged],
    seed: int,
) -> tuple[Judged, ...]:
    """The other claims judged again without the one that stands out, which leads them astray."""
    kept = [c for c in claims if c.quantity != odd]
    models = [sheet_model(card, kept, k) for k in kernels]
    again = {j.quantity: j for j in _judged(kept, expect(models, len(kept), seed)[1])}
    return tuple(
        j if j.quantity == odd or j.quantity in rivals else again[j.quantity] for j in judged
    )


def _judged(claims: Sequence[Claim], left_out: Sequence[Expected]) -> tuple[Judged, ...]:
    own, model = claim_sigma(claims), model_sigma(claims)
    out = []
    for i, c in enumerate(claims):
        mean, spread = left_out[i].mean_and_spread(i)
        if not np.isfinite(mean):
            nothing = Uncertain(None, None, None, LEVEL, "assumed")
            out.append(Judged(c.quantity, c.value, c.tolerance, nothing, None, "cannot judge"))
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


def _odd_one_out(
    judged: Sequence[Judged], left_out: Sequence[Expected]
) -> tuple[str | None, tuple[str, ...]]:
    """The claim without which all the others agree best, and others that come close to that."""
    marked = sorted(
        (e.cost, j.quantity)
        for j, e in zip(judged, left_out, strict=True)
        if j.verdict == "inconsistent"
    )
    if not marked:
        return None, ()
    least, first = marked[0]
    return first, tuple(name for cost, name in marked[1:] if cost < least + TELL_APART)


def _branching_index(sheet: Sheet) -> float | None:
    """LCBI of the claimed viscosities, where the sheet has both under the index's conditions."""
    eta0 = next((c for c in sheet.claims if c.kind == "eta0"), None)
    iv = next((c for c in sheet.claims if c.kind == "intrinsic viscosity"), None)
    if eta0 is None or iv is None or abs((eta0.temperature_C or 190.0) - 190.0) > 0.5:
        return None
    return float(branching_index(eta0.value, iv.value))
