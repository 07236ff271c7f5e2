"""Reading an input whose kind the command leaves to the file."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

# readers by kind of table; a measurement may lack its temperature, a GPC its calibration
_READERS = {
    "distribution": ("read_distribution", "calibration"),
    "sweep": ("read_sweep", "temperature_C"),
    "relaxation curve": ("read_relaxation", "temperature_C"),
    "flow curve": ("read_flow_curve", "temperature_C"),
}

MEASURED = ("sweep", "relaxation curve", "flow curve")


def read_one(
    path: Path,
    kinds: Sequence[str],
    reading: dict[str, Any],
    *,
    temperature_C: float | None = None,
    calibration: str = "unstated",
    where: str = "",
) -> Any:
    """The table of a file, if it is of one of the kinds.

    Parameters
    ----------
    path : Path
    kinds : sequence of str
        Of "distribution", "sweep", "relaxation curve", "flow curve".
    reading : dict
        Options of the readers.
    temperature_C : float, optional
        [C] Of a measurement whose table does not say.
    calibration : str
        Of a distribution.
    where : str
        Which of several inputs it is, for the message (" first").

    Raises
    ------
    InputError
        If the file cannot be used, or holds a table of another kind.
    """
    from mwdlink.errors import InputError
    from mwdlink.files import tables

    look = {name: reading[name] for name in ("columns", "omit", "sheet")}
    kind = tables.find_kind(path, **look)
    if kind not in kinds:
        raise InputError(
            f"the table is a {kind}.",
            path=str(path),
            remedy=f"This command takes a {' or a '.join(kinds)}{where}.",
        )
    reader, extra = _READERS[kind]
    value = {"calibration": calibration, "temperature_C": temperature_C}[extra]
    return getattr(tables, reader)(path, **{extra: value}, **reading)
