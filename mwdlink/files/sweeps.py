"""Frequency sweeps from a block's columns: which columns, which temperature, which steps."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.files.columns import Picker
from mwdlink.files.headers import Column
from mwdlink.files.numbers import read_number
from mwdlink.files.source import rows_text
from mwdlink.files.temperature import celsius, preamble_temperature, split_steps, wobble
from mwdlink.files.units import find_unit
from mwdlink.measurement.sweep import Sweep, exact_mean

ACCEPTED = (
    "omega [rad/s] or f [Hz]; G' [Pa] and G'' [Pa], or |eta*| [Pa s] with tan delta or "
    "delta [deg|rad], or eta' and eta''"
)
MIN_POINTS = 3
# two ways to the same modulus may differ by this (natural logarithm, median)
_AGREE = 0.05

# the pairs of columns that give both moduli, in order of preference
_ROUTES = (
    ("G'", "G''"),
    ("|eta*|", "tan delta"),
    ("|eta*|", "delta"),
    ("|G*|", "tan delta"),
    ("|G*|", "delta"),
    ("eta'", "eta''"),
    ("G'", "tan delta"),
    ("G''", "tan delta"),
    ("G'", "delta"),
    ("G''", "delta"),
)


def is_sweep(picker: Picker) -> bool:
    """Whether a block has a frequency and some pair of columns that gives both moduli."""
    return any(picker.has(r) for r in ("omega", "f", "frequency")) and any(
        picker.has(a) and picker.has(b) for a, b in _ROUTES
    )


@dataclass
class Segment:
    """Points of one temperature in the order of the file."""

    temperature: float | None
    columns: dict[str, np.ndarray]
    rows: np.ndarray
    warnings: tuple[Caution, ...]
    comments: tuple[str, ...]


def read_segments(
    picker: Picker,
    *,
    omit_unreadable: bool,
    same_temperature: float,
    temperature_C: float | None,
) -> list[Segment]:
    """The block's points in inner units, split where the temperature changes.

    Raises
    ------
    InputError
        If columns are missing or cells cannot be used.
    """
    frequency = _frequency(picker)
    first, second = _route(picker)
    needed: list[Column] = [frequency, first, second]
    positive = {c.role for c in needed}
    for role in ("sigma'", "sigma''"):
        column = picker.take(role)
        if column is not None and picker.has_cells(column):
            needed.append(column)
            positive.add(role)
    temperature = picker.take("T")
    if temperature is not None and picker.has_cells(temperature):
        needed.append(temperature)
    values, rows = picker.read(needed, positive=positive, omit_unreadable=omit_unreadable)
    if rows.size < MIN_POINTS:
        raise InputError(
            f"{rows.size} {'point is' if rows.size == 1 else 'points are'} too few for a sweep; "
            f"it needs at least {MIN_POINTS}.",
            path=picker.source.path,
            row=int(rows[0]) if rows.size else picker.block.header_row,
            remedy="Give the whole sweep.",
        )
    _agree_frequencies(picker, frequency, values[frequency.role], rows)
    omega = values[frequency.role]
    storage, loss = _moduli(picker, first, second, values, omega, rows)
    columns = {"omega": omega, "storage": storage, "loss": loss}
    _check_sigmas(picker, needed, values, rows, columns)
    _optional(picker, rows, columns)
    _cross_check(picker, (first.role, second.role), rows, columns)
    t = None
    if temperature is not None and "T" in values:
        t = celsius(picker, temperature, values["T"], rows)
    stated = None if t is not None else preamble_temperature(picker)
    parts = [] if t is None else split_steps(picker, t, rows, same_temperature)
    notes = tuple(picker.notes)
    comments = tuple(picker.block.preamble)
    if t is None:
        where = stated if stated is not None else temperature_C
        return [Segment(where, columns, rows, notes, comments)]
    return [
        Segment(
            exact_mean(t[part]),
            {k: v[part] for k, v in columns.items()},
            rows[part],
            (*notes, *wobble(t[part])),
            comments,
        )
        for part in parts
    ]


def _frequency(picker: Picker) -> Column:
    if any(role in picker.chosen for role in ("omega", "f", "frequency")):
        picker.drop("omega", "f", "frequency")
    for role in ("omega", "f", "frequency"):
        if role not in picker.chosen and len(picker.found.get(role, ())) > 1:
            _split_by_unit(picker, role)
        column = picker.take(role)
        if column is not None:
            return column
    raise picker.missing("omega", ACCEPTED)


def _split_by_unit(picker: Picker, role: str) -> None:
    """`Frequency [Hz]` and `Frequency [rad/s]` side by side are no contradiction."""
    claims = picker.found[role]
    radians = [c for c in claims if c[1] and find_unit(c[1], "frequency") in ("rad/s", "mrad/s")]
    if len(radians) == 1:
        rest = [c for c in claims if c is not radians[0]]
        picker.found[role] = radians
        if role != "f":
            picker.found["f"] = picker.found.get("f", []) + rest


def _route(picker: Picker) -> tuple[Column, Column]:
    ranked = sorted(
        (pair for pair in _ROUTES if all(picker.has(r) for r in pair)),
        key=lambda pair: -sum(r in picker.chosen for r in pair),
    )
    for a, b in ranked:
        first, second = picker.take(a), picker.take(b)
        if first is None or second is None:
            continue
        # a column that is there but empty throughout is no route
        if len(ranked) > 1 and not (picker.has_cells(first) and picker.has_cells(second)):
            continue
        return first, second
    for pair in ranked:
        return picker.need(pair[0], ACCEPTED), picker.need(pair[1], ACCEPTED)
    if picker.has("G'") or picker.has("G''"):
        raise picker.missing("G''" if picker.has("G'") else "G'", ACCEPTED)
    raise picker.missing("G'", ACCEPTED)


def _moduli(
    picker: Picker,
    first: Column,
    second: Column,
    values: dict[str, np.ndarray],
    omega: np.ndarray,
    rows: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """G' and G'' [Pa] from whichever pair the file gives."""
    a, b = values[first.role], values[second.role]
    pair = (first.role, second.role)
    if pair == ("G'", "G''"):
        return a, b
    if pair == ("eta'", "eta''"):
        return b * omega, a * omega
    if second.role == "delta":
        b = np.tan(_radians(picker, second, b, rows))
    # b is tan delta from here on
    if first.role == "G'":
        return a, a * b
    if first.role == "G''":
        return a / b, a
    magnitude = a * omega if first.role == "|eta*|" else a
    cosine = 1.0 / np.hypot(1.0, b)
    return magnitude * cosine, magnitude * cosine * b


def _radians(picker: Picker, column: Column, delta: np.ndarray, rows: np.ndarray) -> np.ndarray:
    right = 0.5 * math.pi
    if column.assumed:
        if not np.max(delta) > right:
            raise InputError(
                "a phase angle without a unit, never above 1.57, may be in degrees or radians.",
                path=picker.source.path,
                row=picker.block.header_row,
                column=column.header,
                remedy=f'Give --column "delta={column.header}:deg" or :rad.',
            )
        delta = np.radians(delta)
        picker.notes[:] = [n for n in picker.notes if n.code != "unit_assumed"] + [
            Caution("unit_assumed", f"No unit is given; {column.header!r} was taken in degrees.")
        ]
    bad = np.flatnonzero(~(delta < right * (1 - 1e-9)))
    if bad.size:
        raise InputError(
            f"a phase angle of {np.degrees(delta[bad[0]]):g} degrees leaves no positive G'"
            + (f" ({bad.size} such rows)." if bad.size > 1 else "."),
            path=picker.source.path,
            row=int(rows[bad[0]]),
            column=column.header,
            remedy="Leave these rows out (--omit), or check the unit of the angle.",
        )
    return delta


def _check_sigmas(
    picker: Picker,
    needed: Sequence[Column],
    values: dict[str, np.ndarray],
    rows: np.ndarray,
    columns: dict[str, np.ndarray],
) -> None:
    for role, name in (("sigma'", "sigma_storage"), ("sigma''", "sigma_loss")):
        if role not in values:
            continue
        column = next(c for c in needed if c.role == role)
        bad = np.flatnonzero(values[role] > 1.0)
        if bad.size:
            raise InputError(
                f"a relative error of {values[role][bad[0]]:g} is more than the value itself.",
                path=picker.source.path,
                row=int(rows[bad[0]]),
                column=column.header,
                remedy="Give it as a fraction, or write its unit, [%].",
            )
        columns[name] = values[role]


def _optional(picker: Picker, rows: np.ndarray, columns: dict[str, np.ndarray]) -> None:
    """Strain and torque, where they can be had without doubt; nothing rests on them."""
    keep = np.isin(np.array(picker.block.rows), rows)
    for role in ("strain", "torque"):
        try:
            column = picker.take(role)
        except InputError:
            picker.notes.append(_aside(role, "its unit or its name is not clear"))
            continue
        if column is None or not picker.has_cells(column):
            continue
        if column.assumed:
            picker.notes.append(_aside(column.header, "it has no unit"))
            continue
        part = [c for c, k in zip(picker.block.columns[column.index], keep, strict=True) if k]
        mark = "," if any("," in c and "." not in c for c in part) else "."
        read = [read_number(c, mark) for c in part]
        if any(r is None for r in read):
            picker.notes.append(_aside(column.header, "some of its cells are no numbers"))
            continue
        raw = np.array([r[0] for r in read if r is not None])
        columns[role] = column.conversion.convert(raw)


def _aside(header: str, why: str) -> Caution:
    return Caution("column_left_aside", f"The column {header!r} was left aside: {why}.")


def _agree_frequencies(picker: Picker, used: Column, omega: np.ndarray, rows: np.ndarray) -> None:
    """A second frequency column must say the same; where it does not, neither can be trusted."""
    if used.chosen:
        return
    for role in ("f", "frequency", "omega"):
        if role == used.role:
            continue
        try:
            column = picker.take(role)
        except InputError:
            continue
        if column is None:
            continue
        other = picker.peek(column)
        if other is None:
            continue
        other = other[np.isin(np.array(picker.block.rows), rows)]
        bad = np.flatnonzero(~(np.abs(other / omega - 1) < 0.02))
        if bad.size > omega.size // 2:
            k = int(bad[0])
            raise InputError(
                f"{used.header!r} and {column.header!r} do not agree: {omega[k]:g} and "
                f"{other[k]:g} rad/s.",
                path=picker.source.path,
                row=int(rows[k]),
                column=column.header,
                remedy=f'Name the right one: --column "{used.role}={used.header}".',
            )


def _cross_check(
    picker: Picker, pair: tuple[str, str], rows: np.ndarray, columns: dict[str, np.ndarray]
) -> None:
    """Say so where a further column of the file contradicts the moduli read.

    A viscosity column is kept beside the moduli, for the check of their units.
    """
    keep = np.isin(np.array(picker.block.rows), rows)
    magnitude = np.hypot(columns["storage"], columns["loss"])
    expected = {
        "|eta*|": magnitude / columns["omega"],
        "|G*|": magnitude,
        "tan delta": columns["loss"] / columns["storage"],
    }
    for role, value in expected.items():
        if role in pair or not picker.has(role):
            continue
        try:
            column = picker.take(role)
        except InputError:
            continue
        other = None if column is None else picker.peek(column)
        if other is None or column is None:
            continue
        other = other[keep]
        if not np.all(other > 0):
            continue
        if role == "|eta*|" and np.all(np.isfinite(other)):
            columns["stated_viscosity"] = other
        off = float(np.median(np.abs(np.log(other / value))))
        if off > _AGREE:
            picker.notes.append(
                Caution(
                    "columns_disagree",
                    f"{column.header!r} does not follow from the moduli read: it is off by a "
                    f"factor of {math.exp(off):.3g} (median). Check the units of both.",
                )
            )


def join_segments(segments: list[Segment], same: float) -> list[Segment]:
    """Pieces of one temperature that complete each other become one; repeats stay apart.

    Steps at 189.8 and 190.1 C that cover different frequencies are one sweep; a second sweep over
    the same frequencies (before and after, say) is not.
    """
    out: list[Segment] = []
    for segment in segments:
        for held in out:
            if _same_step(held, segment, same):
                _append(held, segment)
                break
        else:
            out.append(segment)
    return out


def _same_step(a: Segment, b: Segment, same: float) -> bool:
    if (a.temperature is None) != (b.temperature is None):
        return False
    if a.temperature is not None and b.temperature is not None:
        if abs(a.temperature - b.temperature) > same:
            return False
    # the viscosity beside the moduli is a witness only: pieces with and without it belong together
    if (set(a.columns) ^ set(b.columns)) - {"stated_viscosity"}:
        return False
    x, y = np.log(a.columns["omega"]), np.log(b.columns["omega"])
    # complete each other: the ranges meet at most, or a few points fall between the others
    if max(x.min(), y.min()) >= min(x.max(), y.max()) - 1e-4:
        return True
    few, many = (x, y) if x.size < y.size else (y, x)
    return few.size < MIN_POINTS and not any(np.min(np.abs(many - v)) < 1e-4 for v in few)


def _append(held: Segment, more: Segment) -> None:
    n, m = held.rows.size, more.rows.size
    if held.temperature is not None and more.temperature is not None:
        if abs(held.temperature - more.temperature) > 1e-9:
            note = Caution(
                "temperatures_joined",
                f"Steps at {held.temperature:.6g} and {more.temperature:.6g} C were taken as one "
                "temperature.",
            )
            held.warnings = merge_cautions(held.warnings, (note,))
            held.temperature = (n * held.temperature + m * more.temperature) / (n + m)
    held.columns = {
        k: np.concatenate([v, more.columns[k]])
        for k, v in held.columns.items()
        if k in more.columns
    }
    held.rows = np.concatenate([held.rows, more.rows])
    held.warnings = merge_cautions(held.warnings, more.warnings)
    held.comments = (*held.comments, *(c for c in more.comments if c not in held.comments))


def finish(segment: Segment, path: str, label: str) -> Sweep:
    """The segment as a sweep: sorted, repeats merged, and refused when too little is left."""
    columns: dict[str, Any] = dict(segment.columns)
    sweep = Sweep.from_arrays(
        **columns,
        rows=segment.rows,
        temperature_C=segment.temperature,
        label=label,
        path=path,
        warnings=segment.warnings,
        comments=segment.comments,
    )
    if len(sweep) < MIN_POINTS:
        what = (
            "all rows have the same frequency"
            if len(sweep) == 1 and segment.rows.size > 1
            else f"{len(sweep)} different frequencies are too few for a sweep"
        )
        raise InputError(
            f"{what} ({rows_text(segment.rows, 4)}).",
            path=path,
            row=int(segment.rows[0]),
            column="omega",
            remedy=f"A frequency sweep needs at least {MIN_POINTS} frequencies at one temperature.",
        )
    return sweep
