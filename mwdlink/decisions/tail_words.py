"""The words of a tail's answer: sentence, advice, and what the data cannot say."""

from __future__ import annotations

from collections.abc import Collection, Sequence

from mwdlink.inversion.joint_explain import Explanation
from mwdlink.quantity import Uncertain

EXPLAINED = {
    "tail": "a tail of long chains that the GPC does not show",
    "time law": "no tail, with the card's time law as it comes out",
    "gpc baseline": "a baseline error of the GPC",
    "gpc calibration": "a calibration error of the GPC",
    "branching": "long-chain branching (or anything else that relaxes slowly)",
    "second phase": "an elastic second phase (gel, filler)",
    "none": "nothing: GPC and card are right as they stand",
}


def percent(x: float | None, digits: int = 2) -> str:
    """A weight fraction as wt% with two significant digits and no more than two decimals."""
    if x is None:
        return "?"
    v = 100.0 * x
    if v == 0 or abs(v) < 0.005:
        return "0"
    return f"{v:.1f}" if abs(v) >= 10 else f"{v:.2f}"


def span(u: Uncertain) -> str:
    return f"{percent(u.value)} wt% ({percent(u.low)} to {percent(u.high)})"


def mass(m: float) -> str:
    """A molar mass in three figures."""
    return f"{m:.3g} g/mol"


def answer(
    found: bool,
    beyond: float,
    fraction: Uncertain,
    excess: Uncertain,
    limit: float | None,
    at_most: float | None,
) -> str:
    """The answer in one sentence."""
    if found:
        return (
            f"A tail the GPC does not show: {span(excess)} beyond {mass(beyond)} in excess of the "
            f"GPC curve's own continuation, {span(fraction)} in all."
        )
    text = (
        f"No tail found: less than {percent(at_most)} wt% lies beyond {mass(beyond)}, "
        f"and what lies there ({percent(fraction.value)} wt%) is what the GPC's curve goes on to"
    )
    if limit is not None:
        text += f"; these data would show a tail from about {percent(limit)} wt%"
    else:
        text += "; no small tail would stand out from that reliably"
    return text + "."


def reservation(codes: Collection[str]) -> str:
    """Why the weight beyond is assumed and not measured, from the codes of the cautions."""
    if "kernel_doubted" in codes:
        return "Assumed, not measured: the data speak for another kernel than the one asked for."
    if "priors_strained" in codes:
        return "Assumed, not measured: GPC and sweep do not agree within what is known of them."
    return (
        "Assumed, not measured: chains of that length are slower than the sweep, which sees them "
        "as stress that has not relaxed but not how long they are."
    )


def advice(
    found: bool,
    explanations: Sequence[Explanation],
    reach: float,
    beyond: float,
    omega_min: float,
    needed: float | None,
) -> tuple[str, ...]:
    """What to measure to tell the explanations apart.

    Parameters
    ----------
    reach : float
        Highest molar mass the sweep can follow [g/mol].
    needed : float or None
        Frequency down to which a sweep would have to go to follow twice `beyond` [rad/s].
    """
    out = []
    if needed is not None and reach < 2.0 * beyond:
        out.append(
            f"The sweep ends at {omega_min:.2g} rad/s and follows chains up to {mass(reach)}: "
            f"measure down to {needed:.1g} rad/s (or creep and recovery, or a warmer sweep shifted "
            f"to this temperature) to follow chains of {mass(2.0 * beyond)}."
        )
    support = {e.name: e.support for e in explanations}
    slow = support.get("tail", 0.0) + support.get("branching", 0.0)
    if found or slow > 0.3:
        out.append(
            "One temperature cannot tell long linear chains from long-chain branches: measure a "
            "second sweep at least 20 K away. A higher activation energy than the linear polymer's "
            "and curves that do not superpose at low frequency speak for branching, and so does a "
            "phase angle that dips when plotted against |G*|."
        )
        out.append(
            "GPC with a light-scattering detector sees the high end far better than concentration "
            "alone, and with a viscometer it shows branching as well."
        )
    if support.get("second phase", 0.0) > 0.1:
        out.append(
            "Look for gels or filler (hot filtration, ash): a second phase would raise G' at the "
            "lowest frequencies; a smaller strain amplitude would raise it further."
        )
    if support.get("gpc calibration", 0.0) > 0.2:
        out.append(
            "Check the GPC's calibration with a known linear reference: a factor on its molar "
            "masses explains the pair as well."
        )
    if support.get("gpc baseline", 0.0) > 0.2:
        out.append(
            "Redraw the GPC's baseline, or inject twice the amount: a baseline error explains the "
            "pair as well."
        )
    if support.get("time law", 0.0) > 0.5 and not found:
        out.append(
            "The pair agrees once the time law's factor is left free; a card calibrated with "
            "samples of your own would settle it."
        )
    return tuple(out)
