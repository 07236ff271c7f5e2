"""What may be behind claims that stand out, in words one can send to a supplier."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from mwdlink.chains.polymer import Polymer
from mwdlink.decisions.datasheet_causes import SOLID_OVER_MELT
from mwdlink.decisions.datasheet_claims import Claim, Sheet
from mwdlink.decisions.datasheet_result import Judged
from mwdlink.decisions.datasheet_search import MOST, Finding

# linear polyethylenes of dispersity 2 to 4 lie within about 0.2 of the line (derived)
BRANCHED_INDEX = 0.2
# an MFR over an MVR within this of the solid's density, and further than this from the melt's
NEAR_SOLID = 0.07
MASSES = ("Mn", "Mw", "Mz")

TYPICAL = (
    "Sheets often quote typical values rather than limits of a specification, from different lots "
    "and laboratories: asking which lot and which method each number is from is the first step."
)
STIFFER = (
    "sparse long-chain branching, a high-molar-mass tail that the averages miss, filler, or "
    "crosslinking"
)
EASIER = (
    "a plasticising or lubricating additive, visbreaking or degradation after the molar masses "
    "were measured, or moisture"
)


def spoken(quantity: str) -> str:
    """A claim's key in words."""
    plain = {
        "Mn_g_per_mol": "the number average Mn",
        "Mw_g_per_mol": "the weight average Mw",
        "Mz_g_per_mol": "the z average Mz",
        "dispersity": "the dispersity",
        "eta0_Pa_s": "the zero-shear viscosity",
        "flow_rate_ratio": "the flow rate ratio",
        "crossover_omega_rad_per_s": "the crossover frequency",
        "crossover_G_Pa": "the crossover modulus",
        "intrinsic_viscosity": "the intrinsic viscosity",
        "activation_energy": "the activation energy",
    }
    if quantity in plain:
        return plain[quantity]
    for key, words in (("melt_flow ", "the melt flow at "), ("viscosity ", "the viscosity at ")):
        if quantity.startswith(key):
            rest = quantity.removeprefix(key)
            place = rest.removesuffix(" MVR").removesuffix(" C")
            if place != rest.removesuffix(" MVR"):
                load, _, T = place.rpartition(" ")
                place = f"{load} and {T} C"
            return words + place + (" (volume rate)" if rest.endswith(" MVR") else "")
    return "the " + quantity


def unit_of(claim: Claim) -> str:
    """Unit of a claim's number, for a sentence; empty where it has none."""
    if claim.kind == "melt flow":
        return "cm3/10 min" if claim.volume else "g/10 min"
    return {
        "Mn": "g/mol",
        "Mw": "g/mol",
        "Mz": "g/mol",
        "eta0": "Pa s",
        "viscosity": "Pa s",
        "crossover omega": "rad/s",
        "crossover G": "Pa",
        "intrinsic viscosity": "dL/g",
        "activation energy": "kJ/mol",
    }.get(claim.kind, "")


def said(x: float | None) -> str:
    """A positive number to three digits, for a sentence."""
    if x is None:
        return "-"
    text = f"{x:.3g}"
    if 1e-2 <= x < 1e5:
        return f"{float(text):g}"
    return text.replace("e+0", "e").replace("e+", "e").replace("e-0", "e-")


def _listed(names: Sequence[str]) -> str:
    words = [spoken(n) for n in names]
    return words[0] if len(words) == 1 else _joined(words)


def _given(claim: Claim, one: Judged, *, brief: bool = False) -> str:
    """What is claimed and what the others lead one to expect."""
    unit = unit_of(claim)
    e = one.expected
    number = f"{said(one.claimed)}{' ' + unit if unit else ''}"
    open_to_all = e.value is None or one.verdict == "cannot judge"
    expected = "" if open_to_all else f"{said(e.value)} ({said(e.low)} to {said(e.high)})"
    if brief:
        beside = "which the others do not determine" if open_to_all else f"expected {expected}"
        return f"{spoken(claim.quantity)} ({number}; {beside})"
    text = f"{spoken(claim.quantity)} is given as {number}, "
    if open_to_all:
        return text + "which the other claims do not determine"
    return text + f"the other claims lead one to expect {expected}"


def verdict_of(
    claims: Sequence[Claim], judged: Sequence[Judged], named: Sequence[int], finding: Finding
) -> str:
    """The verdict in one to four sentences."""
    if named:
        return _disagreement(claims, judged, named, finding)
    strained = [j.quantity for j in judged if j.verdict == "strained"]
    open_ones = [j.quantity for j in judged if j.verdict == "cannot judge"]
    if len(open_ones) == len(judged):
        return "The claims do not determine each other: nothing can be said about the sheet."
    few = 2 * len(open_ones) > len(judged)
    text = "What can be judged of the sheet" if few else "The sheet"
    text += " hangs together within its tolerances"
    if strained:
        text += f", though {_listed(strained)} " + ("lies" if len(strained) == 1 else "lie")
        text += " near the edge of what the others allow"
    text += "."
    if open_ones:
        text += f" {_upper(_listed(open_ones))} cannot be judged from the others."
    return text


def _disagreement(
    claims: Sequence[Claim], judged: Sequence[Judged], named: Sequence[int], finding: Finding
) -> str:
    alone = _given(claims[named[0]], judged[named[0]])
    if not finding.rest_agrees:
        return (
            f"The claims do not hang together, and leaving out up to {MOST} of them does not mend "
            "it: which of them are off cannot be told from the sheet alone. What stands out most: "
            f"{alone}."
        )
    suspects = [*named, *finding.rivals]
    given = [_given(claims[i], judged[i], brief=True) for i in suspects]
    rest = len(claims) > len(suspects)
    if finding.rivals:
        count = "Two" if len(suspects) == 2 else "Some"
        text = f"{count} claims contradict each other: {_joined(given)}."
        if len(named) == 1:
            text += " Any one of them may be off" if len(suspects) > 2 else " Either may be off"
            text += ": without it the rest hangs together" if rest else ""
        else:
            text += f" {_number(len(named))} of them are off"
        return text + ". Which, cannot be told from the sheet alone."
    end = " The rest hangs together." if len(claims) - len(named) > 1 else ""
    if len(named) == 1:
        return f"One claim does not fit the others: {alone}.{end}"
    return f"{_number(len(named))} claims do not fit the others: {_joined(given)}.{end}"


def _number(count: int) -> str:
    return {2: "Two", 3: "Three", 4: "Four"}.get(count, str(count))


def _joined(words: Sequence[str]) -> str:
    return ", ".join(words[:-1]) + " and " + words[-1]


def explain(
    sheet: Sheet,
    claims: Sequence[Claim],
    judged: Sequence[Judged],
    named: Sequence[int],
    finding: Finding,
    fits: Mapping[int, Sequence[str]],
    dependent: Sequence[int],
    index: float | None,
    card: Polymer,
) -> tuple[str, ...]:
    """Sentences on what may be behind it; none for a sheet that hangs together.

    Parameters
    ----------
    sheet : Sheet
    claims, judged : sequences
    named : sequence of int
        Claims that do not belong, the one that stands out most first.
    finding : Finding
    fits : mapping
        Claim -> causes that bring its number in line.
    dependent : sequence of int
        Claims that follow from others on the sheet.
    index : float or None
        Branching index of the claimed viscosities.
    card : Polymer
    """
    out: list[str] = []
    if finding.causes:
        out.append("All claims would fit each other " + "; or ".join(finding.causes) + ".")
    several = len(named) + len(finding.rivals) > 1
    for i in (*named, *finding.rivals):
        if fits.get(i) and not finding.causes:
            subject = _upper(spoken(claims[i].quantity)) if several else "It"
            out.append(f"{subject} would fit " + "; or ".join(fits[i]) + ".")
    # an activation energy that is merely strained still speaks for or against branches
    energy = [i for i, c in enumerate(claims) if c.kind == "activation energy" and named]
    for i in dict.fromkeys((*named, *finding.rivals, *energy)):
        text = by_nature(claims[i], judged[i])
        if text and finding.rivals:
            text = f"{_upper(spoken(claims[i].quantity))}: {text[:1].lower()}{text[1:]}"
        if text and text not in out:
            out.append(text)
    for i in dependent:
        if judged[i].verdict in ("strained", "inconsistent") and named:
            out.append(
                f"{_upper(spoken(claims[i].quantity))} is the quotient of two numbers of the "
                "sheet and goes with them."
            )
    out += _order(claims)
    out += _densities(claims, card)
    if index is not None and index > BRANCHED_INDEX and sheet.branching != "some":
        out.append(
            f"Zero-shear and intrinsic viscosity together give a branching index of {index:.2f}, "
            "where linear polyethylene gives 0: long-chain branches raise it, and so does a "
            "viscosity that was extrapolated."
        )
    if named or any(j.verdict == "strained" for j in judged):
        out.append(TYPICAL)
    return tuple(out)


def _order(claims: Sequence[Claim]) -> list[str]:
    """Averages that stand in an order that no distribution has."""
    out = []
    averages = {c.kind: c for c in claims if c.kind in MASSES}
    for low, high in (("Mn", "Mw"), ("Mw", "Mz")):
        if low not in averages or high not in averages:
            continue
        a, b = averages[low], averages[high]
        if a.calibration == b.calibration and a.value > b.value:
            out.append(
                f"{_upper(spoken(a.quantity))} is above {spoken(b.quantity)}, which no "
                "distribution allows: the two may have been exchanged."
            )
    return out


def _densities(claims: Sequence[Claim], card: Polymer) -> list[str]:
    """Mass over volume rate of one load is a density: the melt's, if both are of one test."""
    out = []
    rates = [c for c in claims if c.kind == "melt flow"]
    for mass in (c for c in rates if not c.volume):
        for volume in (c for c in rates if c.volume):
            same = abs(float(mass.load_kg or 0) - float(volume.load_kg or 0)) < 0.01
            if not same or mass.temperature_C != volume.temperature_C:
                continue
            melt = card.density(mass.temperature_C) / 1000.0
            found = mass.value / volume.value
            if abs(np.log(found / (SOLID_OVER_MELT * melt))) < NEAR_SOLID:
                out.append(
                    f"Mass over volume rate at {mass.load_kg:g} kg gives a density of {found:.3g} "
                    f"g/cm3, about the solid's; the melt's is {melt:.3g} g/cm3. One of the two may "
                    "have been converted with the solid's density."
                )
    return out


def by_nature(claim: Claim, one: Judged) -> str:
    """Causes in the material or the method that would push this number this way."""
    if one.z is None or one.verdict in ("consistent", "cannot judge"):
        return ""
    high = one.z > 0
    if claim.kind in ("eta0", "viscosity"):
        if high:
            return (
                "A higher low-shear viscosity than the other numbers suggest is what "
                f"{STIFFER} would give."
            )
        return (
            "A lower low-shear viscosity than the other numbers suggest is what highly branched "
            f"chains, {EASIER} would give."
        )
    if claim.kind == "melt flow":
        cause = EASIER if high else STIFFER
        return (
            f"A {'higher' if high else 'lower'} melt flow than the other numbers suggest is what "
            f"{cause} would give."
        )
    if claim.kind == "flow rate ratio":
        if high:
            return (
                "A higher flow rate ratio than the other numbers suggest is what long-chain "
                "branching or a broader distribution would give, or rates from two lots."
            )
        return (
            "A lower flow rate ratio than the other numbers suggest is what visbreaking, which "
            "narrows the distribution, would give, or rates from two lots."
        )
    if claim.kind == "crossover omega":
        return (
            f"A crossover at a {'higher' if high else 'lower'} frequency than the other numbers "
            f"suggest is what {EASIER if high else STIFFER} would give."
        )
    if claim.kind == "crossover G":
        return (
            "The crossover modulus goes with the breadth of the distribution "
            f"({'narrower' if high else 'broader'} here): visbreaking narrows it, blending and "
            "long-chain branching broaden it."
        )
    if claim.kind == "activation energy":
        if high:
            return (
                "A higher activation energy than the linear polymer's is what long-chain "
                "branching or comonomer would give."
            )
        return (
            "A lower activation energy than the linear polymer's is what crosslinking during the "
            "test, or temperatures that the sample did not reach, would give."
        )
    if claim.kind == "intrinsic viscosity":
        if high:
            return (
                "A higher intrinsic viscosity than the other numbers suggest points to another "
                "solvent or temperature, or to the melt having changed after it was measured."
            )
        return (
            "A lower intrinsic viscosity than the other numbers suggest is what long-chain "
            "branching (coils are smaller) or gel lost in filtering would give."
        )
    if claim.kind in ("dispersity", "Mn"):
        return (
            f"{_upper(spoken(claim.quantity))} hangs on the GPC's baseline, its integration limits "
            "and its calibration: it is worth asking for them, and whether the masses are "
            "absolute, universal or relative to standards."
        )
    return (
        f"{'Higher' if high else 'Lower'} molar masses than the other numbers suggest: averages "
        "depend on calibration, baseline and integration limits, and it is worth asking whether "
        "they are absolute, universal or relative to standards. Read the other way round, the melt "
        f"flows {'more' if high else 'less'} easily than these masses suggest, which "
        f"{EASIER if high else STIFFER} would give."
    )


def _upper(text: str) -> str:
    return text[:1].upper() + text[1:]
