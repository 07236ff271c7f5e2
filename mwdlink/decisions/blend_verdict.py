"""The verdict on measured blends, in words, with the rival explanations named."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from mwdlink.decisions.ensemble import PRIOR_EXPONENT, PRIOR_SPREAD
from mwdlink.decisions.trust import RuleError
from mwdlink.quantity import Uncertain

if TYPE_CHECKING:
    from mwdlink.decisions.blend_judge import CheckedBlend

# what two labs' sweeps of one melt differ by without anybody's fault (common practice)
ORDINARY = 0.02


def verdict_of(
    blends: Sequence[CheckedBlend],
    left_out: float,
    exponent: Uncertain,
    error: RuleError,
    rules: Sequence[Mapping[str, Any]],
    plain: Sequence[float],
    trusted: float,
) -> str:
    """Sentences: does the rule hold, which bag does not, and what else it could be.

    Parameters
    ----------
    blends : sequence of CheckedBlend
    left_out : float
        Root mean square error on left-out blends that agree [decades].
    exponent : Uncertain
    error : RuleError
    rules : sequence of mapping
        The ranking, best first.
    plain : sequence of float
        Mean of log10(predicted/measured) of each blend by double reptation [decades]: an exponent
        that is free can swallow a bias that all blends share.
    trusted : float
        Limit of trust [decades].
    """
    odd = [b for b in blends if b.agrees is False]
    unclear = [b for b in blends if b.agrees is None]
    judged = len(blends) - len(unclear)
    out: list[str] = []
    holds = left_out <= trusted
    if judged == 0:
        out.append(
            "The rheology cannot tell the fractions of these blends: the components are too alike "
            "or the sweeps too noisy."
        )
    elif not odd and holds:
        out.append(
            f"The mixing rule holds: all {judged} blends agree with their weighed fractions, and a "
            f"blend that was left out is predicted within {left_out:.2g} decades"
        )
    elif not odd:
        out.append(
            f"The rule holds only roughly: the curves are missed by {left_out:.2g} decades, and "
            "within that error the fractions agree"
        )
        out.append(_common_cause(blends, odd, plain))
    elif len(odd) <= max(1, judged // 3) and judged >= 3:
        out.append(_odd_ones(odd))
        if holds:
            out.append(
                f"The other {judged - len(odd)} blends obey the rule within {left_out:.2g} decades"
            )
        out.append(
            "The likeliest cause is a weighing or labelling error of that bag; rivals are poor "
            "mixing and degradation of that blend in compounding. Weigh, mix and measure it again"
        )
    else:
        out.append(
            f"{len(odd)} of {judged} blends disagree with their weighed fractions: no single bag "
            "is to blame"
        )
        out.append(_common_cause(blends, odd, plain))
    if error.trusted and judged:
        spans = " and ".join(f"from {low:.3g} to {high:.3g}" for low, high in error.trusted)
        out.append(
            f"The rule may be trusted {spans} rad/s "
            f"(error at most {trusted:.2g} decades in each decade of frequency)"
        )
    elif judged:
        out.append("In no decade of frequency is its error below the limit of trust")
    best = rules[0] if rules else None
    if best is not None:
        out.append(
            f"Of all rules tried, {best['kernel']} with exponent {best['exponent']:.3g} misses a "
            f"left-out blend least ({best['scatter_decades']:.2g} decades)"
        )
    if exponent.low is not None and exponent.high is not None and judged:
        if exponent.low > 2.0 or exponent.high < 2.0:
            text = (
                f"The preferred exponent {exponent.value:.3g} ({exponent.low:.3g} to "
                f"{exponent.high:.3g}) is not that of double reptation"
            )
            if abs((exponent.value or 2.0) - PRIOR_EXPONENT) > 4 * PRIOR_SPREAD:
                text += "; so far from it that it makes up for something else than mixing"
            out.append(text)
    if unclear:
        out.append(f"Not judged: {', '.join(b.name for b in unclear)}")
    return ". ".join(s.rstrip(".") for s in out) + "."


def _odd_ones(odd: Sequence[CheckedBlend]) -> str:
    parts = []
    for b in odd:
        # the component that is furthest off names the error; of two that share it, the first
        off = {n: abs((b.recovered[n].value or 0.0) - b.weighed[n]) for n in b.weighed}
        name = next(n for n in off if off[n] >= max(off.values()) - 1e-6)
        u = b.recovered[name]
        span = ""
        if u.low is not None and u.high is not None:
            span = f" ({100 * u.low:.3g} to {100 * u.high:.3g})"
        parts.append(
            f"{b.name} does not agree: {100 * b.weighed[name]:.3g} % {name} weighed, "
            f"{100 * (u.value or 0.0):.3g} %{span} by its rheology"
        )
    return "; ".join(parts)


def _common_cause(
    blends: Sequence[CheckedBlend], odd: Sequence[CheckedBlend], plain: Sequence[float]
) -> str:
    """What many blends that disagree have in common."""
    judged = [i for i, b in enumerate(blends) if b.agrees is not None]
    bias = np.asarray(plain)[judged or range(len(blends))]
    same = np.all(bias > ORDINARY) or np.all(bias < -ORDINARY)
    asked = list(odd) or [b for b in blends if b.agrees is not None]
    worse = np.mean([b.misfit for b in asked]) > 0.5 * np.mean([b.scatter for b in asked])
    if same:
        side = "less" if bias.mean() > 0 else "more"
        process = "chain scission" if bias.mean() > 0 else "crosslinking or lost short chains"
        return (
            f"All blends are {side} viscous than double reptation predicts, by "
            f"{abs(bias.mean()):.2g} decades in the mean: degradation in compounding ({process}) "
            "or a wrong rule would both do that. "
            "Run the neat components through the same extruder and measure them again: if the "
            "gap closes, it was the processing"
        )
    if worse:
        return (
            "At no fractions do the curves fit: a wrong rule for these components, or poor mixing "
            "(a powder mix that is not molecularly mixed obeys no rule). Rivals are degradation in "
            "compounding (run the neat components through the same extruder) and weighing errors"
        )
    return (
        "The curves fit, but at other fractions than weighed: weighing errors in several bags, "
        "poor mixing, degradation in compounding (run the neat components through the same "
        "extruder) or a wrong rule; a repeat of one blend from the weighing on tells them apart"
    )
