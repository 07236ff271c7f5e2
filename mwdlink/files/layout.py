"""Rows to blocks: preamble, header, units row, data, and where the next block begins.

Nothing is dropped in silence: a row below a header is data, whatever it holds, unless it stands
apart (after a blank line) as a title of the next block or a remark at the end.
"""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass, field

from mwdlink.errors import Caution, InputError
from mwdlink.files.decode import MAX_ROWS
from mwdlink.files.header_rows import (
    find_headers,
    guess_header,
    kind_of,
    next_data,
    trim,
    units_row,
)
from mwdlink.files.headers import list_headers, recognise, shorten
from mwdlink.files.numbers import looks_numeric
from mwdlink.files.split import (
    NAMES,
    Row,
    find_delimiter,
    split_lines,
)


@dataclass(frozen=True)
class Block:
    """One table of a file.

    Attributes
    ----------
    headers : tuple of str
    units : tuple of str or None
        The row of units, as wide as the headers.
    header_row : int or None
        Line of the header; None when the table has none.
    rows : list of int
        Line number of each data row.
    columns : list of list of str
        The cells by column; rows that end early have empty cells.
    preamble : tuple of str
        Comments and lines between the end of the block before and this header.
    sheet : str
        Name of the sheet, of a workbook.
    """

    headers: tuple[str, ...]
    units: tuple[str, ...] | None
    header_row: int | None
    rows: list[int]
    columns: list[list[str]]
    preamble: tuple[str, ...] = ()
    sheet: str = ""


@dataclass(frozen=True)
class Layout:
    """All tables of a file and how they were found."""

    blocks: tuple[Block, ...]
    delimiter: str
    comments: tuple[str, ...] = ()
    notes: tuple[Caution, ...] = ()


@dataclass
class _Draft:
    """A block while its rows are being collected."""

    headers: list[str]
    units: list[str] | None
    header_row: int | None
    preamble: list[str]
    data: list[Row] = field(default_factory=list)


def read_layout(
    text: str,
    path: str | None,
    *,
    omit: Collection[int] = (),
    named: Collection[str] = (),
) -> Layout:
    """The tables of a text.

    Parameters
    ----------
    text : str
    path : str or None
        For messages.
    omit : collection of int
        Line numbers left out.
    named : collection of str
        Headers the user named: a row that holds them is a header.

    Raises
    ------
    InputError
        If there is no table or a row does not fit its header.
    """
    lines = text.split("\n")
    delimiter = find_delimiter(lines)
    rows, comments = split_lines(text, delimiter, path, frozenset(omit))
    blocks = build_blocks(rows, comments, path, named=named, delimiter=delimiter)
    return Layout(tuple(blocks), NAMES[delimiter], tuple(comments.values()))


def build_blocks(
    rows: Sequence[Row | None],
    comments: dict[int, str],
    path: str | None,
    *,
    named: Collection[str] = (),
    delimiter: str = "",
    sheet: str = "",
) -> list[Block]:
    """Blocks from rows (None among them is a run of blank lines)."""
    if len(rows) > MAX_ROWS:
        raise InputError(
            f"the table has more than {MAX_ROWS} rows.", path=path, remedy="Give fewer points."
        )
    kinds = [kind_of(row) for row in rows]
    headers = find_headers(rows, kinds, comments, named, delimiter)
    if not headers:
        headers = guess_header(rows, kinds, comments, delimiter)
    if not headers:
        texts = [row for row in rows if row is not None]
        raise InputError(
            "no table was found: no row of column names with rows of numbers below it.",
            path=path,
            row=texts[0].line if texts else min(comments, default=1),
            remedy="The first row of the table must name its columns, as in: "
            "omega [rad/s], G' [Pa], G'' [Pa].",
        )
    drafts: list[_Draft] = []
    starts = sorted(headers)
    _refuse_rows_above(rows, kinds, starts[0], path)
    begin = 0
    for k, start in enumerate(starts):
        end = starts[k + 1] if k + 1 < len(starts) else len(rows)
        cells, line, from_comment = headers[start]
        head = _texts(rows[begin:start], comments, _line_before(rows, begin), line)
        first = start if from_comment else start + 1
        units, first = units_row(rows, kinds, first, len(cells))
        stop = _end_of_data(rows, kinds, first, end, is_last=k + 1 == len(starts))
        drafts += _collect(rows, kinds, first, stop, cells, units, line, head)
        begin = stop
    blocks = [_finish(d, path, sheet, delimiter) for d in drafts if d.data]
    if not blocks:
        row = headers[starts[0]][1]
        raise InputError("there is no row of data below the header.", path=path, row=row,
                         remedy="Export the table again.")  # fmt: skip
    return blocks


def _refuse_rows_above(
    rows: Sequence[Row | None], kinds: Sequence[str], start: int, path: str | None
) -> None:
    """Rows like those of the table above its header: the order of the lines is broken."""
    below = next_data(rows, kinds, start)
    pattern = None if below is None else _pattern(rows[below])
    if pattern is None or pattern.count("n") < 2:
        return
    lost = [row.line for row in rows[:start] if row is not None and _pattern(row) == pattern]
    if lost:
        raise InputError(
            f"there are rows of numbers above the header ({len(lost)} of them).",
            path=path,
            row=lost[0],
            remedy="Put the header above the numbers, or leave these rows out with --omit.",
        )


def _pattern(row: Row | None) -> str:
    """What stands in each cell: a number, a text, nothing."""
    cells = [] if row is None else trim(row.cells)
    return "".join(" " if not c else "n" if looks_numeric(c) else "t" for c in cells)


def _line_before(rows: Sequence[Row | None], begin: int) -> int:
    for i in range(min(begin, len(rows)) - 1, -1, -1):
        row = rows[i]
        if row is not None:
            return row.line
    return 0


def _texts(
    rows: Sequence[Row | None], comments: dict[int, str], after: int, before: int
) -> list[str]:
    """Preamble: rows and comments between two lines, in order."""
    found = {row.line: row.text.strip() for row in rows if row is not None}
    if comments:
        found |= {n: text for n, text in comments.items() if after < n < before}
    return [found[n] for n in sorted(found)]


def _data_like(row: Row, pattern: Row) -> bool:
    """Whether a row starts as the block's first data row does: with a number or with a text."""

    def starts(r: Row) -> bool:
        return looks_numeric(next((c for c in r.cells if c), ""))

    return starts(row) == starts(pattern)


def _end_of_data(
    rows: Sequence[Row | None], kinds: Sequence[str], first: int, end: int, *, is_last: bool
) -> int:
    """Where the data of a block end: titles of the next block or remarks stand behind a blank."""
    pattern = next((rows[i] for i in range(first, end) if kinds[i] == "data"), None)
    stop = end
    if pattern is None:
        return stop
    # back over everything that is no data row
    i = end
    while i > first:
        row = rows[i - 1]
        if (
            row is not None
            and kinds[i - 1] == "data"
            and (_data_like(row, pattern) and len(trim(row.cells)) >= 2)
        ):
            break
        i -= 1
    blank = next((j for j in range(i, end) if kinds[j] == "blank"), None)
    if blank is not None:
        return blank
    if is_last:
        return end
    # no blank line: texts right above a header are its title, if they are short of cells
    width = len(trim(pattern.cells))
    j = i
    while j < end and not (kinds[j] == "text" and len(trim(rows[j].cells)) < width):  # type: ignore[union-attr]
        j += 1
    return j


def _collect(
    rows: Sequence[Row | None],
    kinds: Sequence[str],
    first: int,
    stop: int,
    cells: list[str],
    units: list[str] | None,
    line: int,
    head: list[str],
) -> list[_Draft]:
    """Data rows under one header; a title after a blank line, or a restart, opens a new block."""
    drafts = [_Draft(cells, units, line or None, head)]
    abscissa = _find_abscissa(cells)
    pattern = next((rows[j] for j in range(first, stop) if _pattern(rows[j]).count("n") >= 2), None)
    i = first
    while i < stop:
        row = rows[i]
        if row is not None:
            drafts[-1].data.append(row)
            i += 1
            continue
        j = i + 1
        title: list[str] = []
        while j < stop and (rows[j] is None or _is_title(rows[j], pattern, len(cells))):
            if rows[j] is not None:
                title.append(rows[j].text.strip())  # type: ignore[union-attr]
            j += 1
        if j < stop and drafts[-1].data and (title or _restarts(rows[j], drafts[-1], abscissa)):  # type: ignore[arg-type]
            drafts.append(_Draft(cells, units, line or None, title))
        elif title:
            # a title above the first row, or texts after the last one
            drafts[-1].preamble = [*drafts[-1].preamble, *title]
        i = j
    return drafts


def _is_title(row: Row | None, pattern: Row | None, width: int) -> bool:
    """A line between blocks: words in the first cell, and fewer cells than a row of the table."""
    if row is None or pattern is None:
        return False
    return len(trim(row.cells)) < min(width, 3) and not _data_like(row, pattern)


def _restarts(row: Row, draft: _Draft, abscissa: int | None) -> bool:
    """Whether a row after a blank line begins again at the abscissa the block began with."""
    if abscissa is None or len(draft.data) < 3:
        return False
    old = [r.cells[abscissa] for r in draft.data if abscissa < len(r.cells)]
    new = row.cells[abscissa] if abscissa < len(row.cells) else ""
    # an abscissa that repeats within the block anyway says nothing
    return bool(old) and looks_numeric(new) and new == old[0] and len(set(old)) == len(old)


def _find_abscissa(headers: Sequence[str]) -> int | None:
    """The column that orders the rows, if one is recognised."""
    for i, header in enumerate(headers):
        match = recognise(header)
        if match is not None and match.role in _ABSCISSAE:
            return i
    return None


_ABSCISSAE = ("omega", "f", "frequency", "rate", "tau", "M", "log10 M", "log M", "ln M", "t")


def _finish(draft: _Draft, path: str | None, sheet: str, delimiter: str) -> Block:
    width = len(draft.headers)
    rows = [row.line for row in draft.data]
    over = [row for row in draft.data if len(row.cells) > width and any(row.cells[width:])]
    if over:
        row = over[0]
        hint = (
            "If the numbers have decimal commas, separate the cells by semicolons or tabs."
            if delimiter == "," and len(over) > len(draft.data) // 2
            else f"Name every column, and check row {row.line}."
        )
        raise InputError(
            f"{len(trim(row.cells))} cells under {width} column names "
            f"({list_headers(draft.headers)})"
            + (f", and so in {len(over)} rows." if len(over) > 1 else "."),
            path=path,
            row=row.line,
            column=shorten(row.cells[width]),
            remedy=hint,
        )
    padded = [
        row.cells[:width] if len(row.cells) >= width
        else row.cells + [""] * (width - len(row.cells))
        for row in draft.data
    ]  # fmt: skip
    columns = [list(column) for column in zip(*padded, strict=True)]
    headers = tuple(h.replace("\n", " ") for h in draft.headers)
    units = None if draft.units is None else tuple(draft.units)
    return Block(headers, units, draft.header_row, rows, columns, tuple(draft.preamble), sheet)


def unit_of(block: Block, index: int) -> str | None:
    """What the units row says of a column; None where there is no such row or it is silent."""
    if block.units is None or not block.units[index].strip():
        return None
    return block.units[index]


def known_columns(block: Block) -> dict[int, tuple[str, str | None]]:
    """Position -> (role, unit text) of the columns of a block that are recognised."""
    out = {}
    for i, header in enumerate(block.headers):
        match = recognise(header)
        if match is not None:
            out[i] = (match.role, match.unit)
    return out
