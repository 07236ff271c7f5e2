"""Cells to numbers: decimal marks, thousands separators, and cells that are no number.

The decimal mark is decided once for a table, from the cells that can only be read one way; where
no cell decides, or cells contradict each other, the table is refused rather than guessed.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from mwdlink.errors import Caution, InputError

# thousands separators besides the mark that is not the decimal one
_GAPS = " \u00a0\u202f\u2009'\u2019"
_GROUP_GAPS = re.compile(rf"[+-]?[1-9]\d{{0,2}}(?:[{_GAPS}]\d{{3}})+(?:[.,]\d*)?", re.ASCII)
_POWER = r"(?:[eEdD][+-]?\d+)?"
_PLAIN = {
    ".": re.compile(rf"[+-]?(?:\d+(?:\.\d*)?|\.\d+){_POWER}", re.ASCII),
    ",": re.compile(rf"[+-]?(?:\d+(?:,\d*)?|,\d+){_POWER}", re.ASCII),
}
# 1,234 and 1,234,567.8: groups of three split by the mark that is not decimal
_GROUPED = {
    ".": re.compile(r"[+-]?[1-9]\d{0,2}(?:,\d{3})+(?:\.\d*)?", re.ASCII),
    ",": re.compile(r"[+-]?[1-9]\d{0,2}(?:\.\d{3})+(?:,\d*)?", re.ASCII),
}
# what nearly all cells look like
_USUAL = re.compile(r"[+-]?\d{1,30}(?:[.,]\d{0,20})?(?:[eE][+-]?\d{1,3})?", re.ASCII).fullmatch
_SIMPLE = frozenset("0123456789.+-eE")
_MINUS = str.maketrans({"−": "-", "–": "-", "\ufeff": None, "\u200b": None})


@dataclass(frozen=True)
class Numbers:
    """A column as numbers.

    Attributes
    ----------
    values : ndarray of shape (n,)
        NaN where a cell is no number.
    bad : ndarray of int
        Positions of the cells that are no finite number (empty ones too).
    grouped : str
        The first cell from which thousands separators were taken, else "".
    """

    values: np.ndarray
    bad: np.ndarray
    grouped: str = ""


def looks_numeric(cell: str, *, gaps: bool = True) -> bool:
    """Whether a cell is a number under either decimal mark."""
    if _USUAL(cell):
        return True
    cell = cell.strip()
    if not cell or len(cell) > 60:
        return False
    if cell[0] not in "0123456789.,+-−–":
        return False
    cell = cell.translate(_MINUS)
    return bool(
        _PLAIN["."].fullmatch(cell)
        or _PLAIN[","].fullmatch(cell)
        or _GROUPED["."].fullmatch(cell)
        or _GROUPED[","].fullmatch(cell)
        or (gaps and _GROUP_GAPS.fullmatch(cell))
    )


def read_number(cell: str, decimal: str) -> tuple[float, bool] | None:
    """One cell as (number, whether thousands separators were taken out); None if it is none."""
    cell = cell.strip().translate(_MINUS)
    if len(cell) > 60:
        return None
    grouped = False
    if _PLAIN[decimal].fullmatch(cell) is None:
        if _GROUP_GAPS.fullmatch(cell):
            cell = re.sub(f"[{_GAPS}]", "", cell)
        elif _GROUPED[decimal].fullmatch(cell):
            cell = cell.replace("," if decimal == "." else ".", "")
        else:
            return None
        grouped = True
        if _PLAIN[decimal].fullmatch(cell) is None:
            return None
    value = float(cell.replace(",", ".").replace("d", "e").replace("D", "e"))
    return (value, grouped) if np.isfinite(value) else None


def to_numbers(cells: Sequence[str], decimal: str) -> Numbers:
    """A column of cells as numbers.

    Parameters
    ----------
    cells : sequence of str of length n
    decimal : str
        "." or ",".
    """
    joined = "\n".join(cells)
    if decimal == "," and "," in joined and "." not in joined:
        joined = joined.replace(",", ".")
        simple: Sequence[str] = joined.split("\n")
    else:
        simple = cells
    # float() alone would take "nan", "1_000" and digits of other scripts
    if (decimal == "." or simple is not cells) and set(joined) - {"\n"} <= _SIMPLE:
        try:
            values = np.array([float(c) for c in simple])
        except ValueError:
            pass
        else:
            if np.all(np.isfinite(values)):
                return Numbers(values, np.empty(0, dtype=int))
    values = np.full(len(cells), np.nan)
    bad = []
    grouped = ""
    for i, cell in enumerate(cells):
        number = read_number(cell, decimal)
        if number is None:
            bad.append(i)
            continue
        values[i] = number[0]
        if number[1] and not grouped:
            grouped = cell.strip()
    return Numbers(values, np.array(bad, dtype=int), grouped)


# two marks in one cell
_TWICE = re.compile(r"[.,][^.,\n]*[.,]")


def _evidence(cell: str) -> str:
    """'.' or ',' where the cell can be read with that decimal mark only, else ''; '?' if open."""
    cell = cell.strip().translate(_MINUS)
    if _GROUP_GAPS.fullmatch(cell):
        cell = re.sub(f"[{_GAPS}]", "", cell)
    able = [m for m in ".," if _PLAIN[m].fullmatch(cell) or _GROUPED[m].fullmatch(cell)]
    if len(able) == 1:
        return able[0]
    return "?" if len(able) == 2 and ("," in cell or "." in cell) else ""


def find_decimal(
    columns: Sequence[Sequence[str]],
    rows: Sequence[int],
    path: str | None,
    *,
    given: str | None = None,
) -> str:
    """The decimal mark of a table.

    Parameters
    ----------
    columns : sequence of sequence of str
        The cells of its columns.
    rows : sequence of int
        Their rows in the file.
    given : {".", ","}, optional
        What the user says; nothing is examined then.

    Raises
    ------
    InputError
        If the cells contradict each other or none decides.
    """
    if given is not None:
        if given not in (".", ","):
            raise InputError(f"{given!r} is no decimal mark.", remedy="Give '.' or ','.")
        return given
    points = commas = several = False
    for column in columns:
        joined = "\n".join(column)
        points |= "." in joined
        commas |= "," in joined
        several |= _TWICE.search(joined) is not None
    if not commas and not several:
        return "."
    if not points and not several:
        for column in columns:
            if any("," in cell and _evidence(cell) == "," for cell in column):
                return ","
    seen: dict[str, tuple[int, str]] = {}
    count = {".": 0, ",": 0}
    open_comma: tuple[int, str] | None = None
    for row, cell in (pair for column in columns for pair in zip(rows, column, strict=True)):
        if "," not in cell and "." not in cell:
            continue
        mark = _evidence(cell)
        if mark in count:
            count[mark] += 1
            seen.setdefault(mark, (row, cell))
        elif mark == "?" and "," in cell and open_comma is None:
            open_comma = (row, cell)
    if count["."] and count[","]:
        rare = "," if count[","] <= count["."] else "."
        other = "." if rare == "," else ","
        row, cell = seen[rare]
        raise InputError(
            f"{cell.strip()!r} is written with a decimal {_WORD[rare]}, "
            f"{seen[other][1].strip()!r} in row {seen[other][0]} with a decimal {_WORD[other]}.",
            path=path,
            row=row,
            remedy="Use one decimal mark throughout the table.",
        )
    if count[","]:
        return ","
    if count["."] or open_comma is None:
        return "."
    row, cell = open_comma
    raise InputError(
        f"{cell.strip()!r} may be {cell.strip().replace(',', '.')} or "
        f"{cell.strip().replace(',', '')}, and no other number of the table tells which.",
        path=path,
        row=row,
        remedy="Write the numbers without thousands separators, with a decimal point.",
    )


_WORD = {",": "comma", ".": "point"}


def grouped_note(header: str, cell: str, decimal: str) -> Caution:
    """What is said when thousands separators were taken out."""
    number = read_number(cell, decimal)
    value = f"{number[0]:.12g}" if number else "?"
    return Caution(
        "thousands_separators",
        f"Thousands separators were taken out in {header!r}: {cell!r} was read as {value}.",
    )
