"""Sheets of an .xlsx workbook as rows of cells (optional: needs pandas with openpyxl)."""

from __future__ import annotations

import importlib.util
import io
import math
import zipfile
from collections.abc import Iterator
from typing import Any

from mwdlink.errors import InputError
from mwdlink.files.decode import MAX_BYTES
from mwdlink.files.split import MAX_COLUMNS, Row


def read_sheets(
    path: str, data: bytes, sheet: str | None, omit: frozenset[int]
) -> Iterator[tuple[str, list[Row | None]]]:
    """Title and rows of each sheet (or of the one named).

    Raises
    ------
    InputError
        If openpyxl is missing, the file is damaged, or the sheet does not exist.
    """
    _refuse_bomb(path, data)
    if importlib.util.find_spec("openpyxl") is None:
        raise InputError(
            "reading .xlsx needs the optional package openpyxl.",
            path=path,
            remedy="Install it (pip install openpyxl), or save the sheet as CSV.",
        )
    import pandas as pd

    try:
        frames = pd.read_excel(
            io.BytesIO(data), sheet_name=None, header=None, dtype=object, engine="openpyxl",
            na_filter=False,
        )  # fmt: skip
    except Exception as error:
        # openpyxl raises whatever its XML and zip layers raise on a damaged file
        raise InputError(
            f"the workbook cannot be read ({type(error).__name__}).",
            path=path,
            remedy="Save it again, or save the sheet as CSV.",
        ) from None
    if sheet is not None and sheet not in frames:
        raise InputError(
            f"there is no sheet {sheet!r}.",
            path=path,
            remedy=f"The sheets are {', '.join(map(repr, frames))}.",
        )
    for title, frame in frames.items():
        if sheet is not None and title != sheet:
            continue
        if frame.shape[1] > MAX_COLUMNS:
            raise InputError(
                f"the sheet {title!r} has {frame.shape[1]} columns, more than {MAX_COLUMNS}.",
                path=path,
                remedy="Give the columns that are needed.",
            )
        rows: list[Row | None] = []
        for number, values in enumerate(frame.itertuples(index=False, name=None), start=1):
            cells = [_cell(v) for v in values]
            if number in omit or (cells and cells[0].startswith("#")):
                continue
            if not any(cells):
                if rows and rows[-1] is not None:
                    rows.append(None)
                continue
            rows.append(Row(number, cells, "\t".join(cells)))
        yield str(title), rows


def _cell(value: Any) -> str:
    """A cell as text that gives the same number back."""
    if value is None or isinstance(value, bool):
        return "" if value is None else str(value)
    if isinstance(value, float):
        return repr(value) if math.isfinite(value) else ""
    return str(value).replace("\n", " ").strip()


def _refuse_bomb(path: str, data: bytes) -> None:
    """A small archive can unpack to any size."""
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as archive:
            size = sum(item.file_size for item in archive.infolist())
    except (zipfile.BadZipFile, ValueError, OSError, RuntimeError, NotImplementedError):
        raise InputError(
            "the workbook is damaged.", path=path, remedy="Save it again, or as CSV."
        ) from None
    if size > MAX_BYTES:
        raise InputError(
            f"the workbook unpacks to {size / 1e6:.0f} MB.", path=path,
            remedy="Give the table alone, as CSV.",
        )  # fmt: skip
