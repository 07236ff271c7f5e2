"""The temperature of a table: from a column, from a line above it, and where its steps begin."""

from __future__ import annotations

import re
from typing import Any

import numpy as np

from mwdlink.errors import Caution, InputError
from mwdlink.files.columns import Picker
from mwdlink.files.headers import Column, recognise
from mwdlink.files.numbers import read_number
from mwdlink.files.units import conversion, find_unit

# above this a bare temperature cannot be told between C and K
_SURELY_C = 250.0
# a wobble below this is not worth a word [K]
_NOTED = 0.2
_MOST_STEPS = 2000


def celsius(picker: Picker, column: Column, t: np.ndarray, rows: np.ndarray) -> np.ndarray:
    """The temperatures [C], checked; refused where a missing unit leaves doubt."""
    bad = np.flatnonzero(~((t > -273.15) & (t < 2000)))
    place: dict[str, Any] = {"path": picker.source.path, "column": column.header}
    if bad.size:
        raise InputError(
            f"a temperature of {t[bad[0]]:g} C is impossible.",
            row=int(rows[bad[0]]),
            remedy="Write its unit into the header, [C] or [K].",
            **place,
        )
    if column.assumed and np.max(t) > _SURELY_C:
        raise InputError(
            f"a temperature of {np.max(t):g} without a unit may be in C or K.",
            row=int(rows[np.argmax(t)]),
            remedy=f'Write its unit into the header, or give --column "T={column.header}:C".',
            **place,
        )
    return t


def preamble_temperature(picker: Picker) -> float | None:
    """A temperature stated above the table, as in `Temperature: 190 C`."""
    found: list[tuple[float, str]] = []
    for line in picker.block.preamble:
        value = parse_temperature(line)
        if value is not None:
            found.append((value, line))
    different = {round(value, 6) for value, _ in found}
    if len(different) != 1:
        return None
    value, line = found[-1]
    picker.notes.append(
        Caution(
            "temperature_from_preamble",
            f"The temperature, {value:g} C, was taken from the line {line.strip()[:80]!r}.",
        )
    )
    return value


def parse_temperature(line: str) -> float | None:
    """The temperature [C] a preamble line states, or None.

    The line must be a name of the temperature, then a number, then perhaps a unit (which may also
    stand with the name). Without a unit only values that cannot be kelvin count.
    """
    if len(line) > 200:
        return None
    match = re.fullmatch(
        r"[\"'\s]*(?P<name>[^\d:=;,\t\"]*?(?:\[[^\]]*\]|\([^)]*\))?)\"?\s*[:=;,\t ]\s*\"?"
        r"(?P<value>[+\-−]?\d+(?:[.,]\d+)?)\"?\s*[;,\t ]?\s*\"?(?P<unit>[^\d;,\t\"]*?)[\";,\t\s]*",
        line.strip(),
    )
    if match is None:
        return None
    name = recognise(match["name"].strip())
    if name is None or name.role != "T":
        return None
    number = read_number(match["value"], "," if "," in match["value"] else ".")
    if number is None:
        return None
    given = match["unit"].strip() or (name.unit or "")
    if given:
        unit = find_unit(given, "temperature")
        if unit is None:
            return None
        value = float(conversion(unit, "temperature").convert(np.array(number[0])))
    elif number[0] < _SURELY_C:
        value = number[0]
    else:
        return None
    return value if -273.15 < value < 2000 else None


def split_steps(picker: Picker, t: np.ndarray, rows: np.ndarray, same: float) -> list[np.ndarray]:
    """Index arrays of the runs of one temperature, in the order of the file."""
    order = np.argsort(t, kind="stable")
    gaps = np.diff(t[order]) > same
    group = np.empty(t.size, dtype=int)
    group[order] = np.concatenate([[0], np.cumsum(gaps)])
    for g in range(int(group.max()) + 1):
        spread = t[group == g]
        if np.ptp(spread) > 2 * same:
            k = int(np.flatnonzero(group == g)[0])
            raise InputError(
                f"the temperature runs from {spread.min():g} to {spread.max():g} C without a step: "
                "a ramp is no sweep.",
                path=picker.source.path,
                row=int(rows[k]),
                column="T",
                remedy="Give sweeps at constant temperature, or take more as one with "
                "--same-temperature.",
            )
    cuts = np.flatnonzero(np.diff(group) != 0) + 1
    if cuts.size > _MOST_STEPS:
        raise InputError(
            f"the temperature changes {cuts.size} times.",
            path=picker.source.path,
            row=int(rows[cuts[0]]),
            column="T",
            remedy="Order the rows by temperature.",
        )
    return [p for p in np.split(np.arange(t.size), cuts) if p.size]


def wobble(t: np.ndarray) -> tuple[Caution, ...]:
    """What is said of the temperatures within one step."""
    if np.ptp(t) <= _NOTED:
        return ()
    text = f"Rows at {t.min():.6g} to {t.max():.6g} C were taken as one temperature."
    return (Caution("temperatures_joined", text),)
