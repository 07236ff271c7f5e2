"""Units as tables write them, and the factor to the unit used inside.

A unit is looked up exactly first, then without regard to case where that is unambiguous: `KPA` is
kPa, but `mpa` could be millipascal or megapascal and is refused.
"""

from __future__ import annotations

import math
import re
import unicodedata
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

# kind of quantity -> unit as written (normal form, see `normal_unit`) -> factor to the inner unit.
# The first entry of each is the inner unit.
UNITS: dict[str, dict[str, float]] = {
    "frequency": {
        "rad/s": 1.0,
        "Hz": 2 * math.pi,
        "mrad/s": 1e-3,
        "krad/s": 1e3,
        "mHz": 2e-3 * math.pi,
        "kHz": 2e3 * math.pi,
        "1/s": 1.0,  # refused for anything but a column named omega (see headers.py)
        "radian/s": 1.0,
        "radians/s": 1.0,
        "rad/sec": 1.0,
        "rad/min": 1 / 60,
        "rpm": 2 * math.pi / 60,
        "cycles/s": 2 * math.pi,
    },
    "rate": {"1/s": 1.0, "1/sec": 1.0, "1/min": 1 / 60, "/s": 1.0},
    "modulus": {
        "Pa": 1.0,
        "kPa": 1e3,
        "MPa": 1e6,
        "GPa": 1e9,
        "mPa": 1e-3,
        "hPa": 1e2,
        "N/m2": 1.0,
        "N/m^2": 1.0,
        "N/mm2": 1e6,
        "N/mm^2": 1e6,
        "dyn/cm2": 0.1,
        "dyn/cm^2": 0.1,
        "dyne/cm2": 0.1,
        "dyne/cm^2": 0.1,
        "bar": 1e5,
        "psi": 6894.757293168361,
        "pascal": 1.0,
    },
    "viscosity": {
        "Pa s": 1.0,
        "kPa s": 1e3,
        "MPa s": 1e6,
        "mPa s": 1e-3,
        "Pas": 1.0,
        "kPas": 1e3,
        "MPas": 1e6,
        "mPas": 1e-3,
        "Pa sec": 1.0,
        "N s/m2": 1.0,
        "N s/m^2": 1.0,
        "P": 0.1,
        "poise": 0.1,
        "cP": 1e-3,
    },
    "molar mass": {
        "g/mol": 1.0,
        "kg/mol": 1e3,
        "Mg/mol": 1e6,
        "Da": 1.0,
        "kDa": 1e3,
        "MDa": 1e6,
        "g/mole": 1.0,
        "kg/mole": 1e3,
        "kg/kmol": 1.0,
        "Dalton": 1.0,
        "Daltons": 1.0,
        "amu": 1.0,
        "u": 1.0,
    },
    "time": {
        "s": 1.0,
        "ms": 1e-3,
        "us": 1e-6,
        "min": 60.0,
        "h": 3600.0,
        "sec": 1.0,
        "second": 1.0,
        "seconds": 1.0,
        "minutes": 60.0,
    },
    "temperature": {
        "C": 1.0,
        "K": 1.0,
        "F": 1.0,
        "degC": 1.0,
        "deg C": 1.0,
        "degK": 1.0,
        "degF": 1.0,
        "deg F": 1.0,
        "Celsius": 1.0,
        "Kelvin": 1.0,
    },
    "angle": {
        "rad": 1.0,
        "deg": math.pi / 180,
        "degree": math.pi / 180,
        "degrees": math.pi / 180,
        "mrad": 1e-3,
        "radian": 1.0,
        "radians": 1.0,
    },
    "fraction": {"-": 1.0, "%": 0.01, "1": 1.0, "wt%": 0.01, "percent": 0.01, "mol%": 0.01},
    "number": {"-": 1.0, "1": 1.0},
    "torque": {
        "N m": 1.0,
        "mN m": 1e-3,
        "uN m": 1e-6,
        "nN m": 1e-9,
        "Nm": 1.0,
        "mNm": 1e-3,
        "uNm": 1e-6,
        "nNm": 1e-9,
        "N cm": 1e-2,
        "Ncm": 1e-2,
        "g cm": 9.80665e-5,
        "gf cm": 9.80665e-5,
    },
    "any": {},
}
INNER = {kind: next(iter(table), "") for kind, table in UNITS.items()}
# what a value column of a GPC table may carry in its header besides nothing
UNITS["signal"] = UNITS["fraction"] | {
    "a.u.": 1.0, "au": 1.0, "arb": 1.0, "mV": 1.0, "V": 1.0, "mAU": 1.0, "uV": 1.0,
    "mol/g": 1.0, "1/(g/mol)": 1.0,
}  # fmt: skip
INNER["signal"] = "-"
EMPTY = ("", "-", "1", "none", "--", "—", "–", "n/a", "/")

_PLAIN_M = ("min", "minutes")
_BRACKETS = {"[": "]", "(": ")", "{": "}", "<": ">"}


def normal_unit(text: str) -> str:
    """A unit in its normal form: plain letters, one space for products, one slash for quotients."""
    s = text.strip().replace("º", "°").replace("℃", "°C").replace("℉", "°F")
    s = unicodedata.normalize("NFKC", s)
    while len(s) > 1 and _BRACKETS.get(s[0]) == s[-1]:
        s = s[1:-1].strip()
    s = s.replace("−", "-").replace("\N{GREEK SMALL LETTER MU}", "u").replace("**", "^")
    s = re.sub(r"°\s*(?=[CFK]$)", "", s)
    s = re.sub(r"^°$", "deg", s)
    if s not in ("a.u.",):
        s = re.sub(r"\s*[·⋅∙•*.]\s*", " ", s).strip()
    s = re.sub(r"\s+per\s+", "/", s)
    s = re.sub(r"\s*/\s*", "/", s)
    s = re.sub(r"([A-Za-z]+)\s*\^?\s*\(?-1\)?(?![\d.])", r"/\1", s)
    s = re.sub(r"\s*\^?-2\b", "^-2", s)
    s = re.sub(r"N m\^-2", "N/m2", s)
    s = re.sub(r"\s*/\s*", "/", s)
    if s.startswith("/"):
        s = "1" + s
    inner = re.fullmatch(r"([^()]+)/\(([^()]+)\)", s)
    if inner and "/" not in inner.group(2) and " " not in inner.group(2):
        s = f"{inner.group(1)}/{inner.group(2)}"
    return re.sub(r"\s+", " ", s).strip()


def find_unit(text: str, kind: str) -> str | None:
    """The unit of this kind that a text names, as written in `UNITS`; None when unknown."""
    table = UNITS[kind]
    unit = normal_unit(text)
    if unit in table:
        return unit
    same = [u for u in table if u.lower() == unit.lower()]
    # milli and mega differ by case alone
    same = [u for u in same if u[0] not in "mM" or u in _PLAIN_M]
    if same and len({table[u] for u in same}) == 1:
        return same[0]
    return None


def is_empty(text: str) -> bool:
    """Whether a unit's text says that there is none: nothing, a dash, a one, in brackets or not."""
    return text.strip().strip("[](){} ") in EMPTY


def is_any_unit(text: str) -> bool:
    """Whether a cell could stand in a row of units."""
    return is_empty(text) or any(find_unit(text, kind) for kind in UNITS)


@dataclass(frozen=True)
class Conversion:
    """How the numbers of a column become inner numbers.

    Attributes
    ----------
    unit : str
        The unit read; `inner` the one used inside.
    convert : callable
        ndarray -> ndarray.
    trivial : bool
        Whether nothing changes.
    """

    unit: str
    inner: str
    convert: Callable[[np.ndarray], np.ndarray]
    trivial: bool


def conversion(unit: str, kind: str) -> Conversion:
    """The conversion from a unit found by `find_unit`."""
    inner = INNER[kind]
    if kind == "temperature":
        letter = unit.replace("deg", "").strip()[:1]
        if letter == "K":
            return Conversion("K", inner, lambda x: x - 273.15, False)
        if letter == "F":
            return Conversion("F", inner, lambda x: (x - 32.0) / 1.8, False)
        return Conversion("C", inner, lambda x: x, True)
    factor = UNITS[kind][unit]
    if factor == 1.0:
        return Conversion(unit, inner, lambda x: x, True)
    return Conversion(unit, inner, lambda x: x * factor, False)
