"""A molar-mass distribution from a block's columns: which axis of M, which curve of weight."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from mwdlink.errors import Caution, InputError
from mwdlink.files.columns import Picker
from mwdlink.files.headers import Column

if TYPE_CHECKING:
    from mwdlink.chains.distribution import Distribution

# role of the value column -> kind of `Distribution.from_table`; in order of preference
KINDS = {
    "dW/dlog10M": "dW/dlog10M",
    "dW/dlogM": "dW/dlog10M",
    "dW/dlnM": "dW/dlnM",
    "dW/dM": "dW/dM",
    "cumulative W": "cumulative",
    "slice weight": "slice_weight",
    "dN/dlog10M": "dN/dlog10M",
    "dN/dlogM": "dN/dlog10M",
    "dN/dlnM": "dN/dlnM",
    "dN/dM": "dN/dM",
    "slice number": "slice_number",
}
AXES = ("M", "log10 M", "log M", "ln M")
ACCEPTED_AXES = "M [g/mol], log10 M, ln M"
ACCEPTED_VALUES = "dW/dlog10M, dW/dlnM, dW/dM, cumulative W, slice weight, " + (
    "dN/dlog10M, dN/dlnM, dN/dM, slice number"
)
LN10 = math.log(10.0)
# no chain is heavier: a larger number means the column is something else
_HEAVIEST = 1e10
_LIGHTEST_TOP = 100.0
# two curves of one file may differ by this in mean log10 M before neither is trusted
_SAME_MEAN = 0.1


def is_distribution(picker: Picker) -> bool:
    """Whether a block has an axis of M and some curve of weight, ambiguous names included."""
    return any(picker.has(r) for r in AXES) and (
        any(picker.has(r) for r in KINDS) or bool(_bare(picker))
    )


def _bare(picker: Picker) -> list[int]:
    """Columns called w or W (or weight fraction): which derivative is meant is not said."""
    found = [i for i, _ in picker.found.get("W?", [])]
    for i, unit in picker.found.get("omega", []):
        if unit is None and picker.block.headers[i].strip() == "w":
            found.append(i)
    return sorted(found)


def read(picker: Picker, *, omit_unreadable: bool, calibration: str, label: str) -> Distribution:
    """The distribution of a block.

    Raises
    ------
    InputError
        If columns are missing or ambiguous, or cells cannot be used.
    """
    axes = _axes(picker)
    curves = _curves(picker)
    axis, curve = axes[0], curves[0]
    values, rows = picker.read(
        [axis, curve],
        positive=(axis.role,) if axis.role == "M" else (),
        omit_unreadable=omit_unreadable,
    )
    mass = _molar_mass(picker, axis, values[axis.role], rows)
    _agree_axes(picker, axis, axes[1:], mass, rows)
    if curve.role in ("dW/dlogM", "dN/dlogM"):
        picker.notes.append(
            Caution(
                "log_taken_as_log10",
                f"{curve.header!r} was read as per log10 M.",
            )
        )
    if KINDS[curve.role].startswith("slice"):
        _check_steps(picker, rows)
    found = _build(picker, mass, values[curve.role], curve, calibration, label)
    for other in curves[1:]:
        _compare(picker, other, curve, mass, rows, found)
    return found


def _axes(picker: Picker) -> list[Column]:
    """The axis to use first, then the others the file has."""
    named = [r for r in AXES if r in picker.chosen]
    if named:
        picker.drop(*AXES)
    roles = named or [r for r in AXES if picker.has(r)]
    columns = [c for r in roles if (c := picker.take(r)) is not None]
    filled = [c for c in columns if picker.has_cells(c)]
    if not columns:
        raise picker.missing("M", ACCEPTED_AXES)
    return filled or columns


def _curves(picker: Picker) -> list[Column]:
    """The curve to use first, then the others the file has."""
    named = [r for r in KINDS if r in picker.chosen]
    if len(named) > 1:
        raise InputError(
            f"two curves were named: {named[0]} and {named[1]}.",
            path=picker.source.path,
            column=named[1],
            remedy="Name one.",
        )
    roles = named or [r for r in KINDS if picker.has(r)]
    columns = [c for r in roles if (c := picker.take(r)) is not None]
    filled = [c for c in columns if picker.has_cells(c)]
    if columns:
        return filled or columns
    bare = _bare(picker)
    if bare:
        header = picker.block.headers[bare[0]]
        raise InputError(
            f"{header!r} may be dW/dlog10M, dW/dlnM, dW/dM, a cumulative or a slice weight.",
            path=picker.source.path,
            row=picker.block.header_row,
            column=header,
            remedy=f'Say which: --column "dW/dlog10M={header}", --column "dW/dlnM={header}", '
            f'--column "dW/dM={header}", --column "cumulative W={header}" or '
            f'--column "slice weight={header}".',
        )
    raise picker.missing("dW/dlog10M", ACCEPTED_VALUES)


def _molar_mass(picker: Picker, axis: Column, values: np.ndarray, rows: np.ndarray) -> np.ndarray:
    """M [g/mol] from the axis as the file gives it."""
    place: dict[str, Any] = {"path": picker.source.path, "column": axis.header}
    if axis.role == "M":
        mass = values
    else:
        # the unit sits inside the logarithm, so it multiplies M and not the logarithm
        factor = float(axis.conversion.convert(np.array(1.0)))
        exponent = (values / factor) / (LN10 if axis.role == "ln M" else 1.0)
        if np.max(exponent) > math.log10(_HEAVIEST):
            k = int(np.argmax(exponent))
            hint = (
                f'If it is ln M, give --column "ln M={axis.header}"; if it is M itself, '
                f'--column "M={axis.header}".'
            )
            raise InputError(
                f"{values[k] / factor:g} as {axis.role} means a molar mass of "
                f"1e{exponent[k]:.0f} g/mol.",
                row=int(rows[k]),
                remedy=hint,
                **place,
            )
        if np.min(exponent) < -300:
            k = int(np.argmin(exponent))
            raise InputError(
                f"{values[k] / factor:g} as {axis.role} means no molar mass.",
                row=int(rows[k]),
                remedy="Correct the value, or leave the row out with --omit.",
                **place,
            )
        mass = 10.0**exponent * factor
        if axis.role == "log M":
            picker.notes.append(
                Caution("log_taken_as_log10", f"{axis.header!r} was read as log10 M.")
            )
    k = int(np.argmax(mass))
    if mass[k] > _HEAVIEST:
        raise InputError(
            f"a molar mass of {mass[k]:.3g} g/mol is beyond any chain.",
            row=int(rows[k]),
            remedy="Check the unit of the column.",
            **place,
        )
    if mass[k] < _LIGHTEST_TOP:
        raise InputError(
            f"the largest molar mass is {mass[k]:.3g} g/mol: this is no polymer.",
            row=int(rows[k]),
            remedy="If the column is a logarithm, or in kg/mol, say so: "
            f'--column "log10 M={axis.header}" or --column "M={axis.header}:kg/mol".',
            **place,
        )
    return mass


def _agree_axes(
    picker: Picker, axis: Column, others: list[Column], mass: np.ndarray, rows: np.ndarray
) -> None:
    keep = np.isin(np.array(picker.block.rows), rows)
    for other in others:
        raw = picker.peek(other)
        if raw is None:
            continue
        factor = float(other.conversion.convert(np.array(1.0)))
        raw = raw[keep]
        x = np.log10(mass)
        if other.role == "M":
            good = raw > 0
            off = np.where(good, np.abs(np.log10(np.where(good, raw, 1.0)) - x), np.inf)
        else:
            bases = {"log10 M": (1.0,), "log M": (1.0, LN10), "ln M": (LN10,)}[other.role]
            given = raw / factor
            off = np.min([np.abs(given / base + math.log10(factor) - x) for base in bases], axis=0)
        if np.median(off) > 0.01:
            k = int(np.argmax(off))
            raise InputError(
                f"{axis.header!r} and {other.header!r} do not agree: "
                f"M is {mass[k]:.5g} g/mol by the first.",
                path=picker.source.path,
                row=int(rows[k]),
                column=other.header,
                remedy=f'Name the right one: --column "{axis.role}={axis.header}".',
            )


def _check_steps(picker: Picker, rows: np.ndarray) -> None:
    """Slices count alike only if they are equally wide in elution volume or time."""
    if len(picker.found.get("elution", ())) != 1:
        return
    column = picker.take("elution")
    elution = None if column is None else picker.peek(column)
    if column is None or elution is None:
        return
    step = np.abs(np.diff(elution[np.isin(np.array(picker.block.rows), rows)]))
    middle = float(np.median(step)) if step.size else 0.0
    if middle > 0 and float(np.max(np.abs(step / middle - 1))) > 0.05:
        picker.notes.append(
            Caution(
                "slices_unequal",
                f"The steps in {column.header!r} are not equal; each row was counted as one slice "
                "of equal width.",
            )
        )


def _build(
    picker: Picker,
    mass: np.ndarray,
    values: np.ndarray,
    curve: Column,
    calibration: str,
    label: str,
) -> Distribution:
    from mwdlink.chains.distribution import Distribution

    try:
        with np.errstate(all="ignore"):
            return Distribution.from_table(
                mass, values, kind=KINDS[curve.role], calibration=calibration, label=label
            )
    except InputError as error:
        raise InputError(
            error.message,
            path=picker.source.path,
            row=error.row if error.row is not None else picker.block.rows[0],
            column=error.column or curve.header,
            remedy=error.remedy or "Check the column and what it is said to be.",
        ) from None


def _compare(
    picker: Picker,
    other: Column,
    used: Column,
    mass: np.ndarray,
    rows: np.ndarray,
    found: Distribution,
) -> None:
    """A second curve in the file: said if it agrees, refused if it does not."""
    values = picker.peek(other)
    if values is None:
        picker.notes.append(
            Caution("column_left_aside", f"The column {other.header!r} was left aside.")
        )
        return
    values = values[np.isin(np.array(picker.block.rows), rows)]
    remedy = (
        f'Name the one to use: --column "{used.role}={used.header}" or '
        f'--column "{other.role}={other.header}".'
    )
    try:
        second = _build(picker, mass, values, other, "absolute", "")
    except InputError:
        second = None
    if second is not None:
        x = float(found.mass @ np.log10(found.molar_mass))
        y = float(second.mass @ np.log10(second.molar_mass))
        if abs(x - y) <= _SAME_MEAN:
            picker.notes.append(
                Caution(
                    "several_curves",
                    f"{used.header!r} was used; {other.header!r} agrees with it.",
                )
            )
            return
    raise InputError(
        f"{used.header!r} and {other.header!r} are two curves that do not agree.",
        path=picker.source.path,
        row=picker.block.header_row,
        column=other.header,
        remedy=remedy,
    )
