"""The readers: a path in, a distribution or a measured curve out, or an error that says where.

All take the same options:

- `columns`: role to `header` or `header:unit`, for columns whose names are not understood;
- `omit`: line numbers left out ("3,17-19" or a collection); `omit_unreadable`: leave out rows with
  a cell that is no number. Both are said in the result's warnings;
- `decimal`: "." or ",", where the file alone does not tell;
- `block`: which table of the file (from 1), `sheet`: which sheet of a workbook.

In place of a path they take a file opened by `source.open_source` with the same options.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.files.columns import Picker
from mwdlink.files.kinds import (
    ACCEPTED,
    choose,
    is_flow,
    is_relaxation,
    is_spectrum,
    left_aside,
    no_kind,
    pickers_of,
    strength_role,
    tests,
)
from mwdlink.files.source import Source, open_source
from mwdlink.measurement.sweep import FlowCurve, RelaxationCurve, Sweep, exact_mean

if TYPE_CHECKING:
    from mwdlink.chains.distribution import Distribution
    from mwdlink.relaxation.spectrum import Spectrum

MIN_POINTS = 3


def read_distribution(
    path: Any,
    *,
    columns: Mapping[str, Any] | None = None,
    omit: Any = (),
    omit_unreadable: bool = False,
    calibration: str = "unstated",
    label: str | None = None,
    decimal: str | None = None,
    block: int | None = None,
    sheet: str | None = None,
) -> Distribution:
    """A molar-mass distribution from a table.

    Parameters
    ----------
    path : str or Path
    calibration : str
        `absolute`, `universal`, `equivalent` or `unstated`.
    label : str, optional
        Default: the file's name.

    Returns
    -------
    Distribution

    Raises
    ------
    InputError
        If the file cannot be used: where, and what to do.
    """
    from mwdlink.files import gpc

    source = open_source(path, columns=columns, omit=omit, sheet=sheet)
    pickers = pickers_of(source, columns, decimal)
    picker = choose(pickers, [p for p in pickers if gpc.is_distribution(p)], block,
                     "distribution")  # fmt: skip
    label = source.label if label is None else label
    found = gpc.read(picker, omit_unreadable=omit_unreadable, calibration=calibration, label=label)
    return _with_warnings(found, source.notes, tuple(picker.notes))


def read_sweep(
    path: Any,
    *,
    columns: Mapping[str, Any] | None = None,
    omit: Any = (),
    omit_unreadable: bool = False,
    temperature_C: float | None = None,
    label: str | None = None,
    same_temperature: float = 1.0,
    decimal: str | None = None,
    block: int | None = None,
    sheet: str | None = None,
) -> Sweep:
    """One frequency sweep from a table.

    Parameters
    ----------
    path : str or Path
    temperature_C : float, optional
        [C] The sweep's temperature where the file does not state one; of several sweeps in the
        file, the one at this temperature is returned.
    same_temperature : float
        [K] Steps closer than this are one temperature.

    Returns
    -------
    Sweep

    Raises
    ------
    InputError
        If the file cannot be used, or holds several sweeps and nothing says which.
    """
    sweeps = read_sweeps(
        path,
        columns=columns,
        omit=omit,
        omit_unreadable=omit_unreadable,
        temperature_C=temperature_C,
        label=label,
        same_temperature=same_temperature,
        decimal=decimal,
        block=block,
        sheet=sheet,
    )
    if len(sweeps) > 1 and temperature_C is not None:
        near = [
            s
            for s in sweeps
            if s.temperature_C is not None
            and abs(s.temperature_C - temperature_C) <= same_temperature
        ]
        if not near:
            raise InputError(
                f"none of the {len(sweeps)} sweeps in the file is at {temperature_C:g} C; they "
                f"are {_listed(sweeps)}.",
                path=sweeps[0].path,
                remedy="Give the temperature of one of them, or make one curve of them with "
                "`mwdlink master`.",
            )
        sweeps = near
    if len(sweeps) == 1:
        return sweeps[0]
    first = [int(np.min(s.rows)) for s in sweeps]  # type: ignore[arg-type]
    if str(sweeps[0].path).lower().endswith((".xlsx", ".xlsm")) and len(set(first)) < len(first):
        # a row that comes twice is of two sheets
        remedy = "Name the sheet with --sheet, or make one curve of them with `mwdlink master`."
    else:
        remedy = (
            "Give the temperature of the one wanted, leave the others' rows out with --omit, "
            "or make one curve of them with `mwdlink master`."
        )
    at = "" if temperature_C is None else f" at {temperature_C:g} C"
    raise InputError(
        f"the file holds {len(sweeps)} sweeps{at} ({_listed(sweeps)}).",
        path=sweeps[0].path,
        row=first[1],
        remedy=remedy,
    )


def _listed(sweeps: Sequence[Sweep]) -> str:
    shown = "; ".join(
        f"{_celsius(s)} with {len(s)} points from row {int(np.min(s.rows))}"  # type: ignore[arg-type]
        for s in sweeps[:6]
    )
    return shown + ("; ..." if len(sweeps) > 6 else "")


def _celsius(sweep: Sweep) -> str:
    return "no temperature" if sweep.temperature_C is None else f"{sweep.temperature_C:.4g} C"


def read_sweeps(
    path: Any,
    *,
    columns: Mapping[str, Any] | None = None,
    omit: Any = (),
    omit_unreadable: bool = False,
    temperature_C: float | None = None,
    label: str | None = None,
    same_temperature: float = 1.0,
    decimal: str | None = None,
    block: int | None = None,
    sheet: str | None = None,
) -> list[Sweep]:
    """All frequency sweeps of a file: by its temperature column, its blocks, or both.

    Returns
    -------
    list of Sweep
        In the order of the file. Repeats at one temperature stay apart; pieces at one temperature
        (within `same_temperature`) over different frequencies are joined.
    """
    from mwdlink.files import sweeps as make

    source = open_source(path, columns=columns, omit=omit, sheet=sheet)
    pickers = pickers_of(source, columns, decimal)
    suited = [p for p in pickers if make.is_sweep(p)]
    if block is not None or not suited:
        suited = [choose(pickers, suited, block, "sweep")]
    aside = left_aside(pickers, suited, "sweep")
    segments = []
    for picker in suited:
        segments += make.read_segments(
            picker,
            omit_unreadable=omit_unreadable,
            same_temperature=same_temperature,
            temperature_C=temperature_C,
        )
    segments = make.join_segments(segments, same_temperature)
    label = source.label if label is None else label
    found = [make.finish(s, source.path, label) for s in segments]
    if len(found) > 1:
        found = [s.with_(label=f"{label} {_celsius(s)}") if s.temperature_C is not None else s
                 for s in found]  # fmt: skip
    return [
        s.with_(
            warnings=merge_cautions(source.notes, aside, s.warnings),
            comments=(*(c for c in source.layout.comments if c not in s.comments), *s.comments),
        )
        for s in found
    ]


def read_relaxation(
    path: Any,
    *,
    columns: Mapping[str, Any] | None = None,
    omit: Any = (),
    omit_unreadable: bool = False,
    temperature_C: float | None = None,
    label: str | None = None,
    decimal: str | None = None,
    block: int | None = None,
    sheet: str | None = None,
) -> RelaxationCurve:
    """A relaxation modulus from a table with `t [s]` and `G [Pa]`."""
    source = open_source(path, columns=columns, omit=omit, sheet=sheet)
    pickers = pickers_of(source, columns, decimal)
    picker = choose(pickers, [p for p in pickers if is_relaxation(p)], block, "relaxation curve")
    return _curve(  # type: ignore[return-value]
        RelaxationCurve, picker, ("t", "G"), source, omit_unreadable, temperature_C, label
    )


def read_flow_curve(
    path: Any,
    *,
    columns: Mapping[str, Any] | None = None,
    omit: Any = (),
    omit_unreadable: bool = False,
    temperature_C: float | None = None,
    label: str | None = None,
    decimal: str | None = None,
    block: int | None = None,
    sheet: str | None = None,
) -> FlowCurve:
    """A steady flow curve from a table with `rate [1/s]` and `eta [Pa s]`."""
    source = open_source(path, columns=columns, omit=omit, sheet=sheet)
    pickers = pickers_of(source, columns, decimal)
    picker = choose(pickers, [p for p in pickers if is_flow(p)], block, "flow curve")
    return _curve(  # type: ignore[return-value]
        FlowCurve, picker, ("rate", "eta"), source, omit_unreadable, temperature_C, label
    )


def read_spectrum(
    path: Any,
    *,
    columns: Mapping[str, Any] | None = None,
    omit: Any = (),
    omit_unreadable: bool = False,
    decimal: str | None = None,
    block: int | None = None,
    sheet: str | None = None,
) -> Spectrum:
    """A discrete relaxation spectrum from a table with `tau [s]` and `g [Pa]`."""
    from mwdlink.relaxation.spectrum import Spectrum

    source = open_source(path, columns=columns, omit=omit, sheet=sheet)
    pickers = pickers_of(source, columns, decimal)
    picker = choose(pickers, [p for p in pickers if is_spectrum(p)], block, "spectrum")
    strength = strength_role(picker)
    needed = [picker.need("tau", ACCEPTED["spectrum"]),
              picker.need(strength, ACCEPTED["spectrum"])]  # fmt: skip
    values, rows = picker.read(needed, positive=("tau",), omit_unreadable=omit_unreadable)
    tau, g = values["tau"], values[strength]
    bad = np.flatnonzero(g < 0)
    if bad.size:
        raise InputError(
            f"a strength of {g[bad[0]]:g} Pa is below zero.",
            path=source.path,
            row=int(rows[bad[0]]),
            column=needed[1].header,
            remedy="A spectrum of a melt has positive modes only.",
        )
    order = np.argsort(tau, kind="stable")
    tau, g = tau[order], g[order]
    start = np.flatnonzero(np.concatenate([[True], np.diff(tau) > 0]))
    # modes of one time add up
    try:
        return Spectrum(tau[start], np.add.reduceat(g, start))
    except InputError as error:
        raise _placed(error, source.path, picker.block.header_row) from None


def read_any(path: Any, **options: Any) -> Any:
    """Whatever the table is: a Distribution, Sweep, RelaxationCurve, FlowCurve or Spectrum.

    Several sweeps in one file come back as a list. Options that a kind does not know are left
    aside (`calibration` for a sweep, say).

    Raises
    ------
    InputError
        If the columns are those of no kind.
    """
    import inspect

    look = {k: options[k] for k in ("columns", "omit", "sheet") if k in options}
    source = open_source(path, **look)
    kind = find_kind(source, **look)
    reader = _READERS[kind]
    known = inspect.signature(reader).parameters
    found = reader(source, **{k: v for k, v in options.items() if k in known})
    return found[0] if isinstance(found, list) and len(found) == 1 else found


def find_kind(
    path: Any, *, columns: Mapping[str, Any] | None = None, omit: Any = (), sheet: str | None = None
) -> str:
    """What kind of table a file holds.

    Returns
    -------
    str
        "distribution", "sweep", "relaxation curve", "flow curve" or "spectrum".
    """
    source = open_source(path, columns=columns, omit=omit, sheet=sheet)
    pickers = pickers_of(source, columns, None)
    for kind, test in tests().items():
        if any(test(p) for p in pickers):
            return kind
    raise no_kind(pickers, "table", " | ".join(f"{k}: {v}" for k, v in ACCEPTED.items()))


_READERS: dict[str, Callable[..., Any]] = {
    "distribution": read_distribution,
    "sweep": read_sweeps,
    "relaxation curve": read_relaxation,
    "flow curve": read_flow_curve,
    "spectrum": read_spectrum,
}


def _curve(
    kind: type[RelaxationCurve] | type[FlowCurve],
    picker: Picker,
    roles: tuple[str, str],
    source: Source,
    omit_unreadable: bool,
    temperature_C: float | None,
    label: str | None,
) -> RelaxationCurve | FlowCurve:
    from mwdlink.files.temperature import celsius, preamble_temperature

    accepted = ACCEPTED["relaxation curve" if kind is RelaxationCurve else "flow curve"]
    needed = [picker.need(role, accepted) for role in roles]
    positive = set(roles)
    for role in ("sigma", "T"):
        column = picker.take(role)
        if column is not None and picker.has_cells(column):
            needed.append(column)
    if "sigma" in {c.role for c in needed}:
        positive.add("sigma")
    values, rows = picker.read(needed, positive=positive, omit_unreadable=omit_unreadable)
    place: dict[str, Any] = {"path": source.path, "row": int(rows[0])}
    temperature = temperature_C
    if "T" in values:
        column = next(c for c in needed if c.role == "T")
        t = celsius(picker, column, values["T"], rows)
        if np.ptp(t) > 2.0:
            raise InputError(
                f"the temperature runs from {t.min():g} to {t.max():g} C in one curve.",
                column=column.header,
                remedy="Keep the rows of one temperature, or leave the others out with --omit.",
                **place,
            )
        temperature = exact_mean(t)
    else:
        stated = preamble_temperature(picker)
        temperature = stated if stated is not None else temperature
    curve = kind.from_arrays(
        values[roles[0]],
        values[roles[1]],
        sigma=values.get("sigma"),
        temperature_C=temperature,
        label=source.label if label is None else label,
        rows=rows,
        path=source.path,
        warnings=merge_cautions(source.notes, picker.notes),
        comments=(*source.layout.comments, *picker.block.preamble),
    )
    if len(curve) < MIN_POINTS:
        raise InputError(
            f"{len(curve)} {'point is' if len(curve) == 1 else 'points are'} too few for a curve; "
            f"it needs at least {MIN_POINTS}.",
            remedy="Give the whole curve.",
            **place,
        )
    return curve


def _placed(error: InputError, path: str, row: int | None) -> InputError:
    """The same error with the place filled in."""
    return InputError(
        error.message,
        path=error.path or path,
        row=error.row if error.row is not None else row,
        column=error.column,
        remedy=error.remedy or "Check the table.",
    )


def _with_warnings(found: Any, *groups: tuple[Caution, ...]) -> Any:
    from dataclasses import replace

    return replace(found, warnings=merge_cautions(*groups, found.warnings))
