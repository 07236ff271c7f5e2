"""Where the header of a table stands among its rows, and the row of units below it."""

from __future__ import annotations

from collections.abc import Collection, Sequence

from mwdlink.files.headers import count_known
from mwdlink.files.numbers import looks_numeric
from mwdlink.files.split import Row, split_header
from mwdlink.files.units import is_any_unit, is_empty

# cells of text tried as headers before a file is given up: a book is no table
_MAX_TRIED = 200_000


def kind_of(row: Row | None) -> str:
    """'blank', 'data' (some number in it) or 'text' (no number)."""
    if row is None:
        return "blank"
    for cell in row.cells:
        if cell and looks_numeric(cell):
            return "data"
    return "text"


def find_headers(
    rows: Sequence[Row | None],
    kinds: Sequence[str],
    comments: dict[int, str],
    named: Collection[str],
    delimiter: str,
) -> dict[int, tuple[list[str], int, bool]]:
    """Position of each header row -> (cells, line, whether it stands in a comment)."""
    wanted = {n.strip().casefold() for n in named}
    found: dict[int, tuple[list[str], int, bool]] = {}
    tried = 0
    for i, row in enumerate(rows):
        if row is None or kinds[i] != "text" or tried > _MAX_TRIED:
            continue
        below = next_data(rows, kinds, i)
        if below is None:
            continue
        cells = trim(split_header(row.text, delimiter, len(trim(rows[below].cells)))  # type: ignore[union-attr]
                      if delimiter == " " else row.cells)  # fmt: skip
        tried += len(cells)
        have = {c.strip().casefold() for c in cells}
        if (
            count_known(cells) >= 2
            or (wanted and wanted <= have)
            or (len(wanted & have) + count_known(cells) >= 2 and wanted & have)
        ):
            found[i] = (cells, row.line, False)
    if not found:
        found = _header_in_comment(rows, kinds, comments, delimiter)
    return found


def next_data(rows: Sequence[Row | None], kinds: Sequence[str], i: int) -> int | None:
    """The first row of numbers at most four rows of text below a header."""
    texts = 0
    for j in range(i + 1, min(i + 12, len(rows))):
        if kinds[j] == "data":
            return j
        texts += kinds[j] == "text"
        if texts > 4:
            return None
    return None


def _header_in_comment(
    rows: Sequence[Row | None], kinds: Sequence[str], comments: dict[int, str], delimiter: str
) -> dict[int, tuple[list[str], int, bool]]:
    """Some programs write the header behind a comment mark, right above the data."""
    first = next((i for i, kind in enumerate(kinds) if kind == "data"), None)
    if first is None:
        return {}
    row = rows[first]
    width = len(trim(row.cells))  # type: ignore[union-attr]
    above = [n for n in sorted(comments) if n < row.line]  # type: ignore[union-attr]
    for number in reversed(above[-6:]):
        for mark in (delimiter, "\t", ";", ",", "|", " "):
            cells = trim(split_header(comments[number], mark, width))
            if len(cells) == width and count_known(cells) >= 2:
                return {first: (cells, number, True)}
    return {}


def guess_header(
    rows: Sequence[Row | None], kinds: Sequence[str], comments: dict[int, str], delimiter: str
) -> dict[int, tuple[list[str], int, bool]]:
    """No known name anywhere: the last row of text above the longest run of numbers."""
    best, start, length = None, 0, 0
    for i, kind in enumerate([*kinds, "end"]):
        if kind == "data":
            if length == 0:
                start = i
            length += 1
        elif kind in ("text", "end") and length:
            if best is None or length > best[1]:
                best = (start, length)
            length = 0
    if best is None:
        return {}
    start = best[0]
    width = len(trim(rows[start].cells))  # type: ignore[union-attr]
    for i in range(start - 1, max(-1, start - 8), -1):
        row = rows[i]
        if row is None or kinds[i] != "text":
            continue
        cells = trim(split_header(row.text, delimiter, width) if delimiter == " " else row.cells)
        if len(cells) >= 2 and not _is_units(cells):
            return {i: (cells, row.line, False)}
    if width < 2:
        return {}
    return {start: ([f"#{n + 1}" for n in range(width)], 0, True)}


def trim(cells: Sequence[str]) -> list[str]:
    """Without the empty cells at the end."""
    out = list(cells)
    while out and not out[-1]:
        out.pop()
    return out


def _is_units(cells: Sequence[str]) -> bool:
    """Whether a row of cells is a row of units: mostly known ones, none a column name with unit."""
    given = [c for c in cells if c]
    known = sum(1 for c in given if is_any_unit(c))
    real = sum(1 for c in given if not is_empty(c) and is_any_unit(c))
    bracketed = sum(1 for c in given if c[0] in "[(" and c[-1] in "])")
    return bool(given) and (real >= 1 or bracketed >= 2) and 2 * (known + bracketed) >= len(given)


def units_row(
    rows: Sequence[Row | None], kinds: Sequence[str], first: int, width: int
) -> tuple[list[str] | None, int]:
    """The row of units below a header, if there is one, and where the data begin."""
    i = first
    while i < len(rows) and kinds[i] == "blank":
        i += 1
    if i >= len(rows):
        return None, first
    row = rows[i]
    cells = trim(row.cells)  # type: ignore[union-attr]
    text_only = kinds[i] == "text" or all(is_empty(c) or not looks_numeric(c) for c in cells)
    if text_only and len(cells) <= width and _is_units(cells) and count_known(cells) < 2:
        return cells + [""] * (width - len(cells)), i + 1
    return None, first
