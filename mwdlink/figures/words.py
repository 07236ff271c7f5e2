"""Numbers as words for descriptions and labels: three figures, no false precision."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

_SUPER = str.maketrans("0123456789-", "⁰¹²³⁴⁵⁶⁷⁸⁹⁻")


def number(x: Any, digits: int = 3) -> str:
    """A number for people: 0.0123, 12.3, 12 300, 1.23×10⁶."""
    if x is None or isinstance(x, bool):
        return "not known" if x is None else ("yes" if x else "no")
    try:
        value = float(x)
    except (TypeError, ValueError):
        return str(x)
    if not math.isfinite(value):
        return "not known"
    if value == 0:
        return "0"
    sign = "−" if value < 0 else ""
    size = abs(value)
    rounded = float(f"{size:.{digits - 1}e}")
    exponent = math.floor(math.log10(rounded))
    if -3 <= exponent < 5:
        if exponent >= digits - 1:
            whole = f"{rounded:.0f}"
            if len(whole) > 4:
                whole = f"{whole[:-3]}\u202f{whole[-3:]}"
            return sign + whole
        return f"{sign}{rounded:.{digits - 1 - exponent}f}"
    mantissa = rounded / 10.0**exponent
    return f"{sign}{mantissa:.{digits - 1}f}×10{str(exponent).translate(_SUPER)}"


def short(x: Any, digits: int = 3) -> str:
    """The same without trailing noughts, for limits, settings and other round numbers."""
    text = number(x, digits)
    head, times, tail = text.partition("×")
    if "." in head:
        head = head.rstrip("0").rstrip(".")
    return f"{head}{times}{tail}"


def upper_first(text: str) -> str:
    """The text with a capital at its start, the rest as it is."""
    return text[:1].upper() + text[1:]


def percent(x: Any, digits: int = 2) -> str:
    """A share as weight percent."""
    return "not known" if x is None else f"{short(100.0 * float(x), max(digits, 2))} %"


UNITS = (
    ("_g_per_10min", "g/10min"),
    ("_cm3_per_10min", "cm3/10min"),
    ("_kJ_per_mol", "kJ/mol"),
    ("_rad_per_s", "rad/s"),
    ("_g_per_mol", "g/mol"),
    ("_kg_per_m3", "kg/m3"),
    ("_dL_per_g", "dL/g"),
    ("_decades", "decades"),
    ("_per_Pa", "1/Pa"),
    ("_per_K", "1/K"),
    ("_per_s", "1/s"),
    ("_Pa_s", "Pa s"),
    ("_Pa", "Pa"),
    ("_kg", "kg"),
    ("_C", "C"),
    ("_K", "K"),
    ("_s", "s"),
)


def split_unit(key: str) -> tuple[str, str]:
    """Name and unit of a JSON key: `eta0_Pa_s` is (eta0, Pa s)."""
    for suffix, unit in UNITS:
        if key.endswith(suffix) and len(key) > len(suffix):
            return key.removesuffix(suffix), unit
    return key, ""


def value_of(x: Any) -> float | None:
    """The central number of a plain number or an uncertain quantity in JSON form."""
    if isinstance(x, Mapping):
        x = x.get("value")
    return None if x is None or isinstance(x, (bool, str)) else float(x)


def interval_of(x: Any) -> tuple[float, float] | None:
    """The interval of an uncertain quantity in JSON form, if it has one."""
    if isinstance(x, Mapping) and x.get("low") is not None and x.get("high") is not None:
        return float(x["low"]), float(x["high"])
    return None


def with_interval(x: Any, unit: str = "") -> str:
    """`1.20×10⁵ (1.10×10⁵ to 1.30×10⁵) g/mol`, or with `at least`, `at most`, `assumed`."""
    value = value_of(x)
    text = number(value)
    between = interval_of(x)
    if between is not None:
        text += f" ({number(between[0])} to {number(between[1])})"
    if unit:
        text += f" {unit}"
    status = x.get("status") if isinstance(x, Mapping) else None
    if status == "lower_bound":
        return f"at least {text}"
    if status == "upper_bound":
        return f"at most {text}"
    if status == "assumed":
        return f"{text}, assumed"
    return text


def listed(parts: list[str]) -> str:
    """`a`, `a and b`, `a, b and c`."""
    if len(parts) < 2:
        return "".join(parts)
    return f"{', '.join(parts[:-1])} and {parts[-1]}"


def plural(n: int, word: str) -> str:
    return f"{n} {word}" if n == 1 else f"{n} {word}s"
