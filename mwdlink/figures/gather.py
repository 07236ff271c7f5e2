"""Which pictures a result has: chosen by its command from the tables and keys it carries."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from mwdlink.figures import decay, master, moduli, style
from mwdlink.figures.gather_decisions import (
    add_batch,
    add_blend,
    add_blendcheck,
    add_calibrate,
    add_datasheet,
    add_tail,
)
from mwdlink.figures.picture import Picture
from mwdlink.figures.shelf import (
    Record,
    Shelf,
    Tables,
    add_choices,
    add_curves,
    add_distribution,
    add_fit,
    add_spectrum,
)
from mwdlink.figures.words import value_of


def _predict(shelf: Shelf) -> None:
    add_distribution(shelf)
    add_curves(shelf)
    add_choices(shelf)


def _invert(shelf: Shelf) -> None:
    add_distribution(shelf)
    add_fit(shelf)
    add_choices(shelf)


def _spectrum_command(shelf: Shelf) -> None:
    add_spectrum(shelf)
    add_fit(shelf)
    _drift(shelf)


def _master(shelf: Shelf) -> None:
    table, shifts = shelf.table("master.csv"), shelf.table("shifts.csv")
    reference = value_of(shelf.record.get("reference_C"))
    if table is not None:
        superposition = shelf.record.get("superposition")
        shelf.add(
            "master",
            "Master curve",
            table,
            lambda: master.plot_master(table, reference_C=reference),
            lambda: master.describe_master(table, superposition),
        )
    if shifts is not None:
        shift = shelf.record.get("shift")
        shelf.add(
            "shifts",
            "Shift factors",
            shifts,
            lambda: master.plot_shifts(shifts, reference_C=reference, shift=shift),
            lambda: master.describe_shifts(shifts, shift),
        )
    angles = shelf.table("phase_angle.csv")
    table = table if angles is None else angles
    if table is not None:
        curves = master.by_temperature(table)
        shelf.add(
            "phase-angle",
            "Phase angle against complex modulus",
            table,
            lambda: moduli.plot_phase_angle(curves),
            lambda: moduli.describe_phase_angle(curves),
        )


def _rest(shelf: Shelf) -> None:
    table = shelf.table("rest.csv")
    if table is not None:
        rest = shelf.record.get("rest") or []
        shelf.add(
            "rest",
            "Stress left while waiting",
            table,
            lambda: decay.plot_rest(table, rest=rest),
            lambda: decay.describe_rest(rest),
        )


def _consistency(shelf: Shelf) -> None:
    add_fit(shelf, "residuals.csv")


def _drift(shelf: Shelf) -> None:
    table = shelf.table("drift.csv")
    if table is not None:
        shelf.add(
            "drift",
            "Change between the sweeps before and after",
            table,
            lambda: moduli.plot_drift(table),
            lambda: moduli.describe_drift(table),
        )


_BY_COMMAND: dict[str, Callable[[Shelf], None]] = {
    "predict": _predict,
    "invert": _invert,
    "spectrum": _spectrum_command,
    "master": _master,
    "rest": _rest,
    "blend": add_blend,
    "blendcheck": add_blendcheck,
    "tail": add_tail,
    "datasheet": add_datasheet,
    "calibrate": add_calibrate,
    "batch": add_batch,
    "consistency": _consistency,
    "drift": _drift,
}


def pictures_of(command: str, record: Record, tables: Tables) -> dict[str, Picture]:
    """The pictures of a command's record and tables, the most important first."""
    shelf = Shelf({**record, "command": command}, tables)
    draw = _BY_COMMAND.get(command)
    if draw is not None:
        with style.context():
            draw(shelf)
    return shelf.pictures


def figures_for(result: Any) -> dict[str, Picture]:
    """All pictures of a result, by name.

    Parameters
    ----------
    result : Result
        Anything with `command`, `to_dict()` and `tables()`.
    """
    return pictures_of(result.command, result.to_dict(), result.tables())
