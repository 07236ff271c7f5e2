"""A table file opened: fingerprint, encoding, blocks; and which rows the user left out."""

from __future__ import annotations

import os
import re
from collections.abc import Collection, Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from mwdlink.errors import Caution, InputError
from mwdlink.files.decode import decode, read_bytes
from mwdlink.files.layout import Block, Layout, build_blocks, read_layout


@dataclass(frozen=True)
class Source:
    """An opened file.

    Attributes
    ----------
    path : str
    sha256 : str
        Of the raw bytes.
    encoding : str
    layout : Layout
        Its blocks.
    notes : tuple of Caution
        What reading had to assume so far.
    """

    path: str
    sha256: str
    encoding: str
    layout: Layout
    notes: tuple[Caution, ...]

    @property
    def label(self) -> str:
        """The file's name without its ending."""
        return Path(self.path).stem


def open_source(
    path: Any,
    *,
    columns: Mapping[str, Any] | None = None,
    omit: Any = (),
    sheet: str | None = None,
) -> Source:
    """Read a file into blocks of cells.

    Parameters
    ----------
    path : str, Path or Source
        CSV, TSV or the like, or .xlsx. An opened file is returned as it is.
    columns : mapping, optional
        Role to `header[:unit]` (see `headers.find_chosen`); the headers help to find the table.
    omit : collection of int, or str such as "3,17-19"
        Line numbers to leave out.
    sheet : str, optional
        The sheet of a workbook; else all that hold a table.
    """
    if isinstance(path, Source):
        return path
    name = os.fspath(path) if isinstance(path, (str, os.PathLike)) else str(path)
    data, digest = read_bytes(name)
    left_out = parse_rows(omit)
    named = _named_headers(columns)
    notes: tuple[Caution, ...] = ()
    if data.startswith(b"PK\x03\x04") and b"xl/" in data:
        layout, total = _workbook(name, data, left_out, named, sheet)
        encoding = "workbook"
    else:
        text = decode(data, name)
        # what follows the last line's end is no line
        total = text.text.removesuffix("\n").count("\n") + 1
        layout = read_layout(text.text, name, omit=left_out, named=named)
        encoding, notes = text.encoding, text.notes
    if left_out:
        beyond = sorted(row for row in left_out if row > total)
        if beyond:
            raise InputError(
                f"row {beyond[0]} is to be left out, but the file has {total} rows.",
                path=name,
                row=beyond[0],
                remedy="Rows are counted as a text editor does, from 1, comments included.",
            )
        counted = "1 row" if len(left_out) == 1 else f"{len(left_out)} rows"
        note = Caution(
            "rows_left_out", f"Left out as asked: {rows_text(left_out)} ({counted})."
        )
        notes = (*notes, note)
    return Source(name, digest, encoding, layout, (*notes, *layout.notes))


def _named_headers(columns: Mapping[str, Any] | None) -> list[str]:
    named = []
    for value in (columns or {}).values():
        header = value[0] if isinstance(value, (tuple, list)) else str(value)
        named.append(header)
        if ":" in header:
            named.append(header.rpartition(":")[0])
    return [n for n in named if n and not n.startswith("#")]


def parse_rows(rows: Any) -> frozenset[int]:
    """Row numbers from a collection of int or a text such as "3,17-19".

    Raises
    ------
    InputError
        If the text is no list of rows.
    """
    if rows is None:
        return frozenset()
    if not isinstance(rows, str):
        found = frozenset(int(r) for r in rows)
        if any(r < 1 for r in found):
            raise InputError("rows are counted from 1.", remedy="Give their line numbers.")
        return found
    out: set[int] = set()
    for part in re.split(r"[,;\s]+", rows.strip()):
        if not part:
            continue
        match = re.fullmatch(r"(\d{1,9})(?:-(\d{1,9}))?", part)
        low = int(match.group(1)) if match else 0
        high = int(match.group(2) or low) if match else -1
        if match is None or low < 1 or high < low or high - low > 5_000_000:
            raise InputError(
                f"{part!r} is no row or range of rows.", remedy="Give rows as in 3,17-19."
            )
        out.update(range(low, high + 1))
    return frozenset(out)


def rows_text(rows: Iterable[int], most: int = 12) -> str:
    """Row numbers in words: "rows 3, 17-19"; long lists are cut with their count."""
    ordered = sorted(set(rows))
    spans: list[list[int]] = []
    for row in ordered:
        if spans and row == spans[-1][1] + 1:
            spans[-1][1] = row
        else:
            spans.append([row, row])
    shown = [f"{a}" if a == b else f"{a}-{b}" for a, b in spans]
    word = "row" if len(ordered) == 1 else "rows"
    if len(shown) > most:
        return f"{word} {', '.join(shown[:most])} and others"
    return f"{word} {', '.join(shown)}"


def rows_option(rows: Iterable[int]) -> str:
    """Row numbers as `--omit` takes them."""
    return rows_text(rows, most=10_000).split(" ", 1)[1].replace(" ", "")


def _workbook(
    path: str,
    data: bytes,
    omit: Collection[int],
    named: Collection[str],
    sheet: str | None,
) -> tuple[Layout, int]:
    from mwdlink.files.workbook import read_sheets

    blocks: list[Block] = []
    first: InputError | None = None
    total = 0
    for title, rows in read_sheets(path, data, sheet, frozenset(omit)):
        total = max(total, max((row.line for row in rows if row is not None), default=0))
        try:
            blocks += build_blocks(rows, {}, path, named=named, delimiter="\t", sheet=title)
        except InputError as error:
            first = first or error
    if not blocks:
        raise first or InputError("the workbook holds no table.", path=path)
    return Layout(tuple(blocks), "sheet"), total
