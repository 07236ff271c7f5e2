"""What may be behind a claim that stands out, in words one can send to a supplier.

Some causes can be tried on the numbers: a unit slip, another load or temperature, averages
relative to polystyrene. For these the quantity under the other conditions is predicted beside the
claims ("shadows") and compared.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from mwdlink.chains.polymer import Polymer
from mwdlink.decisions.datasheet_claims import Claim, Sheet
from mwdlink.decisions.datasheet_fit import Expected
from mwdlink.decisions.datasheet_result import Judged

LOADS = (2.16, 5.0, 10.0, 21.6)
TEMPERATURES = (150.0, 190.0, 200.0, 230.0, 260.0)
# another cause fits when it brings the claim within this many standard deviations
FITS = 1.5
SLIPS = (1e-3, 1e-2, 0.1, 10.0, 100.0, 1e3)
# solid over melt density of polyolefins, about (common practice)
SOLID_OVER_MELT = 1.25
# linear polyethylenes of dispersity 2 to 4 lie within about 0.2 of the line (derived)
BRANCHED_INDEX = 0.2


def shadows(claims: Sequence[Claim], card: Polymer) -> tuple[Claim, ...]:
    """Quantities under other conditions, named so that the words can find them again."""
    out: list[Claim] = []
    for c in claims:
        if c.kind == "melt flow":
            for load in LOADS:
                if abs(load - float(c.load_kg or 0)) > 0.01:
                    out.append(replace(c, quantity=f"{c.quantity}|load {load:g} kg", load_kg=load))
            out.append(replace(c, quantity=f"{c.quantity}|volume", volume=not c.volume))
        if (
            c.kind in ("melt flow", "eta0", "viscosity", "crossover omega")
            and card.shift is not None
        ):
            low, high = card.shift.reach_C
            for T in TEMPERATURES:
                if low - 30 <= T <= high + 30 and abs(T - float(c.temperature_C or T)) > 1.0:
                    out.append(replace(c, quantity=f"{c.quantity}|at {T:g} C", temperature_C=T))
        if c.kind in ("Mn", "Mw", "Mz"):
            if c.calibration != "equivalent":
                out.append(
                    replace(c, quantity=f"{c.quantity}|equivalent", calibration="equivalent")
                )
            for other in ("Mn", "Mw", "Mz"):
                if other != c.kind:
                    out.append(replace(c, quantity=f"{c.quantity}|{other}", kind=other))
    return tuple(out)


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
    if quantity.startswith("melt_flow"):
        return "the melt flow at" + quantity.removeprefix("melt_flow")
    return "the " + quantity


def _listed(names: Sequence[str]) -> str:
    words = [spoken(n) for n in names]
    return words[0] if len(words) == 1 else ", ".join(words[:-1]) + " and " + words[-1]


def verdict_of(judged: Sequence[Judged], odd: str | None, rivals: Sequence[str]) -> str:
    """The verdict in one or two sentences."""
    strained = [j.quantity for j in judged if j.verdict == "strained"]
    open_ones = [j for j in judged if j.verdict == "cannot judge"]
    if odd is not None:
        one = next(j for j in judged if j.quantity == odd)
        expected = one.expected.value or float("nan")
        text = (
            f"One claim does not fit the others: {spoken(odd)} is given as {one.claimed:.3g}, the "
            f"other claims lead one to expect {expected:.3g} ({one.expected.low:.3g} to "
            f"{one.expected.high:.3g})."
        )
        if rivals:
            text += (
                f" The same disagreement shows in {_listed(rivals)}; which of them is off cannot "
                "be told from the sheet alone."
            )
        return text
    if len(open_ones) == len(judged):
        return "The claims do not determine each other: nothing can be said about the sheet."
    text = "The sheet hangs together within its tolerances"
    if strained:
        text += f", though {_listed(strained)} " + ("lies" if len(strained) == 1 else "lie")
        text += " near the edge of what the others allow"
    return text + "."


def explain(
    sheet: Sheet,
    judged: Sequence[Judged],
    odd: str | None,
    rivals: Sequence[str],
    index: float | None,
    quantities: Sequence[Claim],
    left_out: Sequence[Expected],
    card: Polymer,
) -> tuple[str, ...]:
    """Sentences on what may be behind it; none for a sheet that hangs together."""
    by_name = {j.quantity: j for j in judged}
    out: list[str] = []
    if odd is not None:
        names = [c.quantity for c in quantities]
        i = names.index(odd)
        claim, one = quantities[i], by_name[odd]
        tried = _tried(claim, one, i, quantities, left_out[i])
        if tried:
            out.append("It would fit " + "; or ".join(tried) + ".")
        out.extend(_by_nature(claim, one, judged, card))
    if index is not None and index > BRANCHED_INDEX and sheet.branching != "some":
        out.append(
            f"Zero-shear and intrinsic viscosity together give a branching index of {index:.2f}, "
            "where linear polyethylene gives 0: long-chain branches raise it, and so does a "
            "viscosity that was extrapolated."
        )
    if odd is not None or any(j.verdict == "strained" for j in judged):
        out.append(
            "Sheets often quote typical values rather than limits of a specification, from "
            "different lots and laboratories: asking which lot and which method each number is "
            "from is the first step."
        )
    return tuple(out)


def _tried(
    claim: Claim, one: Judged, i: int, quantities: Sequence[Claim], left_out: Expected
) -> list[str]:
    """Causes that bring the number in line, the best first."""
    found: list[tuple[float, str]] = []
    mean, spread = left_out.mean_and_spread(i)
    width = float(np.hypot(spread, 0.5 * claim.tolerance))
    gap = float(np.log(claim.value)) - mean
    for slip in SLIPS:
        distance = abs(gap - np.log(slip)) / width
        if distance < FITS and abs(gap) > 1.5:
            found.append((distance, f"if a unit had slipped by a factor {slip:g}"))
    for k, other in enumerate(quantities):
        if not other.quantity.startswith(f"{claim.quantity}|"):
            continue
        centre, scatter = left_out.mean_and_spread(k)
        if not np.isfinite(centre):
            continue
        distance = abs(np.log(claim.value) - centre) / np.hypot(scatter, 0.5 * claim.tolerance)
        if distance < FITS:
            found.append((float(distance) + 0.2, _said(other.quantity.split("|")[1], claim)))
    if claim.kind == "melt flow":
        for factor in (SOLID_OVER_MELT, 1 / SOLID_OVER_MELT):
            if abs(gap - np.log(factor)) / width < FITS and width < 0.09:
                found.append(
                    (
                        abs(gap - np.log(factor)) / width + 0.4,
                        "if mass and volume rate had been converted with the solid's density",
                    )
                )
    return [text for _, text in sorted(found)[:3]]


def _said(what: str, claim: Claim) -> str:
    if what.startswith("load "):
        return f"if it had been measured at {what.removeprefix('load ')}"
    if what.startswith("at "):
        return f"if it had been measured {what}"
    if what == "volume":
        mass, volume = "a mass rate in g/10 min", "a volume rate in cm3/10 min"
        return f"if it were {mass if claim.volume else volume}"
    if what == "equivalent":
        return "if the average were relative to polystyrene standards"
    words = {"Mn": "number", "Mw": "weight", "Mz": "z"}
    return f"if it were the {words[what]} average"


def _by_nature(claim: Claim, one: Judged, judged: Sequence[Judged], card: Polymer) -> list[str]:
    """Causes in the material that would push this number this way."""
    high = (one.z or 0) > 0
    if claim.kind in ("eta0", "viscosity") and high:
        return [
            "A higher low-shear viscosity than the molar masses suggest is what sparse long-chain "
            "branching, a high-molar-mass tail that the averages miss, or a filler would give."
        ]
    if claim.kind in ("eta0", "viscosity"):
        return [
            "A lower low-shear viscosity than expected is what highly branched chains, a "
            "plasticising additive or degradation in the test would give."
        ]
    if claim.kind == "melt flow" and high:
        return [
            "A higher melt flow than expected is what a processing aid or lubricant, visbreaking "
            "after the molar masses were measured, or moisture would give."
        ]
    if claim.kind == "melt flow":
        return [
            "A lower melt flow than expected is what filler, crosslinking in the test or a "
            "high-molar-mass tail would give."
        ]
    if claim.kind == "flow rate ratio":
        return [
            "A flow rate ratio off the others is what branching (more) or visbreaking (less) "
            "would give, or rates from two different lots."
        ]
    if claim.kind == "activation energy" and high:
        return ["A higher activation energy than the linear polymer's speaks for branches."]
    if claim.kind in ("Mn", "Mw", "Mz", "dispersity"):
        return [
            "Averages depend on calibration, baseline and integration limits: it is worth asking "
            "whether the masses are absolute, universal or relative to standards."
        ]
    return []
