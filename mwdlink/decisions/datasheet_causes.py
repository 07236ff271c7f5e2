"""Causes that can be tried on the numbers: a unit, a load, a temperature, a scale of averages.

For one claim the quantity under the other conditions is predicted beside the claims ("shadows").
For a cause that several claims share, all of them are read that way at once.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np

from mwdlink.chains.polymer import Polymer
from mwdlink.decisions.datasheet_claims import Claim
from mwdlink.decisions.datasheet_fit import Expected
from mwdlink.decisions.datasheet_model import SheetModel

# loads and temperatures in use for melt flow (ISO 1133-1 and ASTM D1238, recalled)
LOADS = (1.2, 2.16, 3.8, 5.0, 10.0, 21.6)
TEMPERATURES = (150.0, 190.0, 200.0, 230.0, 260.0)
# another cause fits when it brings the claim within this many standard deviations
FITS = 1.5
# solid over melt density of polyolefins, about (common practice)
SOLID_OVER_MELT = 1.25
AVERAGES = ("Mn", "Mw", "Mz")
POWERS = (1e-3, 1e-2, 0.1, 10.0, 100.0, 1e3)
CYCLE = float(2.0 * np.pi)
# number printed over number in the key's unit, and what it would have been printed in
UNITS: dict[str, dict[float, str]] = {
    "Mn": {1e-3: "kg/mol"},
    "Mw": {1e-3: "kg/mol"},
    "Mz": {1e-3: "kg/mol"},
    "eta0": {10.0: "poise", 1e3: "mPa s", 1e-3: "kPa s"},
    "viscosity": {10.0: "poise", 1e3: "mPa s", 1e-3: "kPa s"},
    "melt flow": {0.1: "g/min or cm3/min"},
    "crossover omega": {1 / CYCLE: "Hz"},
    "crossover G": {10.0: "dyn/cm2", 1e-3: "kPa"},
    "intrinsic viscosity": {0.1: "L/g", 100.0: "mL/g"},
    "activation energy": {1 / 4.184: "kcal/mol"},
}


@dataclass(frozen=True, eq=False)
class Cause:
    """One cause that several claims share.

    Attributes
    ----------
    text : str
        "if ..."
    members : tuple of int
        Claims it touches.
    shift : ndarray of shape (n,)
        To add to ln of each claim's number, to undo it.
    """

    text: str
    members: tuple[int, ...]
    shift: np.ndarray


def slip(factor: float, kind: str, where: str = "") -> str:
    """A slip of units in words."""
    unit = UNITS.get(kind, {}).get(factor)
    beside = f" (the number would be one in {unit})" if unit else ""
    return f"if a unit had slipped by a factor {factor:.3g}{where}{beside}"


def shadows(claims: Sequence[Claim], card: Polymer) -> tuple[Claim, ...]:
    """Quantities under other conditions, named so that the words can find them again."""
    out: list[Claim] = []
    for c in claims:
        if c.kind == "melt flow":
            for load in LOADS:
                if abs(load - float(c.load_kg or 0)) > 0.01:
                    out.append(replace(c, quantity=f"{c.quantity}|load {load:g} kg", load_kg=load))
            out.append(replace(c, quantity=f"{c.quantity}|volume", volume=not c.volume))
        if c.kind in ("melt flow", "eta0", "viscosity", "crossover omega"):
            for T in _temperatures(c, card):
                out.append(replace(c, quantity=f"{c.quantity}|at {T:g} C", temperature_C=T))
        if c.kind == "viscosity":
            out.append(replace(c, quantity=f"{c.quantity}|hertz", omega=float(c.omega) * CYCLE))  # type: ignore[arg-type]
        if c.kind in AVERAGES:
            other = "absolute" if c.calibration == "equivalent" else "equivalent"
            out.append(replace(c, quantity=f"{c.quantity}|{other}", calibration=other))
            for average in AVERAGES:
                if average != c.kind:
                    out.append(replace(c, quantity=f"{c.quantity}|{average}", kind=average))
    return tuple(out)


def _temperatures(c: Claim, card: Polymer) -> list[float]:
    if card.shift is None or c.temperature_C is None:
        return []
    low, high = card.shift.reach_C
    return [
        T for T in TEMPERATURES if low - 30 <= T <= high + 30 and abs(T - c.temperature_C) > 1.0
    ]


def tried(claim: Claim, i: int, quantities: Sequence[Claim], expected: Expected) -> tuple[str, ...]:
    """Causes that bring one number in line with what the others lead to expect, the best first.

    Parameters
    ----------
    claim : Claim
    i : int
        Its column.
    quantities : sequence of Claim
        Of all columns, shadows among them.
    expected : Expected
        From the claims that it does not fit.
    """
    found: list[tuple[float, str]] = []
    mean, spread = expected.mean_and_spread(i)
    width = float(np.hypot(spread, 0.5 * claim.tolerance))
    gap = float(np.log(claim.value)) - mean
    for factor in dict.fromkeys((*UNITS.get(claim.kind, {}), *POWERS)):
        distance = abs(gap - np.log(factor)) / width
        # a gap that the uncertainties nearly span needs no slip of units
        if distance < FITS and abs(gap) > 2.5 * width:
            found.append((distance, slip(factor, claim.kind)))
    for k, other in enumerate(quantities):
        if not other.quantity.startswith(f"{claim.quantity}|"):
            continue
        centre, scatter = expected.mean_and_spread(k)
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
    return tuple(text for _, text in sorted(found)[:3])


def _said(what: str, claim: Claim) -> str:
    if what.startswith("load "):
        return f"if it had been measured at {what.removeprefix('load ')}"
    if what.startswith("at "):
        return f"if it had been measured {what}"
    if what == "volume":
        mass, volume = "a mass rate in g/10 min", "a volume rate in cm3/10 min"
        return f"if it were {mass if claim.volume else volume}"
    if what == "hertz":
        return "if the frequency were in Hz"
    if what == "equivalent":
        return "if the average were relative to polystyrene standards"
    if what == "absolute":
        return "if the average were absolute, not relative to polystyrene"
    words = {"Mn": "number", "Mw": "weight", "Mz": "z"}
    return f"if it were the {words[what]} average"


def shared_causes(
    models: Sequence[SheetModel], claims: Sequence[Claim], *, temperatures: bool
) -> Iterator[tuple[Sequence[SheetModel], list[Cause]]]:
    """Causes that two or more claims share, in batches that need the same models.

    Parameters
    ----------
    models, claims : sequences
    temperatures : bool
        Other test temperatures, which take longer; else all other causes.

    Yields
    ------
    models : sequence of SheetModel
        With the claims read that way.
    causes : list of Cause
    """
    n = len(claims)

    def of(*kinds: str) -> list[int]:
        return [i for i, c in enumerate(claims) if c.kind in kinds]

    def moved(members: Sequence[int], by: float, text: str) -> list[Cause]:
        shift = np.zeros(n)
        shift[list(members)] = by
        return [Cause(text, tuple(members), shift)] if len(members) > 1 else []

    def exchanged(one: int, other: int) -> list[Cause]:
        shift = np.zeros(n)
        shift[one] = np.log(claims[other].value / claims[one].value)
        shift[other] = -shift[one]
        text = f"if {claims[one].kind} and {claims[other].kind} had been exchanged"
        return [Cause(text, (one, other), shift)]

    def read(members: Sequence[int], **changed: object) -> list[SheetModel]:
        other = tuple(
            replace(c, **changed) if i in members else c  # type: ignore[arg-type]
            for i, c in enumerate(claims)
        )
        return [replace(m, claims=other) for m in models]

    nothing = np.zeros(n)
    if not temperatures:
        units = []
        for kinds, factors in (
            (AVERAGES, (1e-3, 1e3)),
            (("eta0", "viscosity"), (10.0, 1e3, 1e-3, 0.1)),
            (("melt flow",), (0.1, 10.0)),
        ):
            members = of(*kinds)
            for f in factors:
                text = slip(f, kinds[0], " in all of them")
                units += moved(members, -float(np.log(f)), text)
        for first, second in combinations(of(*AVERAGES), 2):
            units += exchanged(first, second)
        if units:
            yield models, units
        for now, other in (("", "equivalent"), ("equivalent", "absolute")):
            members = [
                i for i in of(*AVERAGES) if (claims[i].calibration == "equivalent") == bool(now)
            ]
            if len(members) > 1:
                text = (
                    "if all averages were relative to polystyrene standards"
                    if other == "equivalent"
                    else "if all averages were absolute, not relative to polystyrene"
                )
                yield (
                    read(members, calibration=other),
                    [Cause(text, tuple(members), nothing)],
                )
        for volume in (False, True):
            members = [i for i in of("melt flow") if claims[i].volume == volume]
            if len(members) > 1:
                kind = "mass rates in g/10 min" if volume else "volume rates in cm3/10 min"
                yield (
                    read(members, volume=not volume),
                    [Cause(f"if all melt flows were {kind}", tuple(members), nothing)],
                )
        return
    tests: tuple[tuple[tuple[str, ...], str], ...] = (
        (("melt flow",), "all melt flows"),
        (("eta0", "viscosity", "crossover omega"), "all viscosities and the crossover"),
        (("melt flow", "eta0", "viscosity", "crossover omega"), "all numbers of the melt"),
    )
    for those, named in tests:
        members = of(*those)
        held = {claims[i].temperature_C for i in members}
        kinds_met = {claims[i].kind for i in members}
        if len(members) < 2 or len(held) != 1 or (len(those) == 4 and len(kinds_met) < 2):
            continue
        for T in _temperatures(claims[members[0]], models[0].polymer):
            yield (
                read(members, temperature_C=T),
                [Cause(f"if {named} had been measured at {T:g} C", tuple(members), nothing)],
            )
