"""Finding columns in a result's tables by the words of their headers.

The picture functions work on tables as they are written to disk, whatever class made them. A
header is a name and, in brackets, a unit: `G' low [Pa]`. Names are matched exactly first, then
with case, blanks and underscores ignored (never by a part of a word).
"""

from __future__ import annotations

import re
from typing import TYPE_CHECKING, Any

import numpy as np

from mwdlink.errors import ModelError

if TYPE_CHECKING:
    from pandas import DataFrame


class Absent(ModelError):
    """A picture was asked for whose columns the table does not have."""


_UNIT = re.compile(r"\s*\[[^\]]*\]\s*$")


def bare(header: str) -> str:
    """The header without its unit."""
    return _UNIT.sub("", str(header)).strip()


def _loose(name: str) -> str:
    return re.sub(r"[\s_]+", " ", bare(name)).strip().casefold()


def find(table: DataFrame | None, *names: str) -> str | None:
    """Header of the first of the names the table has.

    Parameters
    ----------
    table : DataFrame or None
    *names : str
        Names without units, the most wanted first.
    """
    if table is None:
        return None
    headers = [str(h) for h in table.columns]
    exact: dict[str, str] = {}
    for h in headers:
        exact.setdefault(bare(h), h)
    for name in names:
        if name in exact:
            return exact[name]
    loose: dict[str, list[str]] = {}
    for h in headers:
        loose.setdefault(_loose(h), []).append(h)
    for name in names:
        hits = loose.get(_loose(name), [])
        if len(hits) == 1:
            return hits[0]
    return None


def numbers(table: DataFrame | None, *names: str) -> np.ndarray | None:
    """The column as floats, or None where the table has none of the names or no number in it."""
    header = find(table, *names)
    if header is None or table is None:
        return None
    try:
        values = np.asarray(table[header], dtype=float)
    except (TypeError, ValueError):
        return None
    return values if np.isfinite(values).any() else None


def words(table: DataFrame | None, *names: str) -> list[str] | None:
    """The column as text."""
    header = find(table, *names)
    if header is None or table is None:
        return None
    return ["" if v is None or v != v else str(v) for v in table[header]]


def band(table: DataFrame | None, *names: str) -> tuple[np.ndarray, np.ndarray] | None:
    """Low and high columns beside a quantity, or None where they are absent or empty."""
    for name in names:
        low = numbers(table, f"{name} low", f"low {name}")
        high = numbers(table, f"{name} high", f"high {name}")
        if low is not None and high is not None:
            return low, high
    return None


def unit(header: str) -> str:
    """The unit in a header, without its brackets."""
    match = re.search(r"\[([^\]]*)\]\s*$", str(header))
    return match[1] if match else ""


def positive(*arrays: Any) -> np.ndarray:
    """Where all the arrays are finite and above zero: what a log axis can show."""
    good = np.ones(np.shape(arrays[0]), dtype=bool)
    for a in arrays:
        with np.errstate(invalid="ignore"):
            good &= np.isfinite(a) & (np.asarray(a) > 0)
    return good
