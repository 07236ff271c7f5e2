"""A supplier's sheet as data: what is claimed, how closely, and under which conditions."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from mwdlink.errors import Caution

# relative half-widths, taken as two standard deviations, where the sheet names none: what sheets of
# this kind usually allow (common practice; the repeatability of ISO 1133 and ISO 16014 is of this
# order, recalled)
DEFAULT_TOLERANCE = {
    "Mn": 0.15,
    "Mw": 0.10,
    "Mz": 0.20,
    "dispersity": 0.15,
    "eta0": 0.15,
    "melt flow": 0.10,
    "flow rate ratio": 0.15,
    "crossover omega": 0.15,
    "crossover G": 0.15,
    "viscosity": 0.10,
    "intrinsic viscosity": 0.05,
    "activation energy": 0.10,
}
KINDS = tuple(DEFAULT_TOLERANCE)


@dataclass(frozen=True)
class Claim:
    """One number of a sheet.

    Attributes
    ----------
    quantity : str
        The claim's key, with its conditions where there may be several.
    kind : str
        One of `KINDS`.
    value : float
        In the unit that the key names; melt flow in g/10 min or cm3/10 min.
    tolerance : float
        Relative half-width, two standard deviations [-].
    tolerance_given : bool
    temperature_C : float or None
        Of the test; None where the quantity has none or the sheet is silent.
    load_kg, second_load_kg : float or None
        Of a melt flow rate or a ratio of two (first over second).
    omega : float or None
        [rad/s]
    volume : bool
        A melt volume rate.
    calibration : str
        Of an average: `absolute`, `universal`, `equivalent` or `unstated`.
    """

    quantity: str
    kind: str
    value: float
    tolerance: float
    tolerance_given: bool = True
    temperature_C: float | None = None
    load_kg: float | None = None
    second_load_kg: float | None = None
    omega: float | None = None
    volume: bool = False
    calibration: str = "unstated"


@dataclass(frozen=True)
class Sheet:
    """A sheet's claims.

    Attributes
    ----------
    claims : tuple of Claim
    polymer : Polymer or None
    branching : str or None
        What the sheet says of long-chain branching: `none`, `some`, or nothing.
    paths : tuple of str
        Files it was read from.
    label : str
    warnings : tuple of Caution
    """

    claims: tuple[Claim, ...]
    polymer: Any = None
    branching: str | None = None
    paths: tuple[str, ...] = ()
    label: str = ""
    warnings: tuple[Caution, ...] = field(default=())
