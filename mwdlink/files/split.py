"""Lines to rows of cells: the delimiter, quotes, comments, blank lines."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Callable, Iterable, Sequence
from typing import NamedTuple

from mwdlink.errors import InputError
from mwdlink.files.headers import count_known
from mwdlink.files.numbers import looks_numeric

MAX_COLUMNS = 1000
DELIMITERS = ("\t", ";", ",", "|", " ")
NAMES = {"\t": "tab", ";": "semicolon", ",": "comma", "|": "bar", " ": "spaces"}
# lines looked at to find the delimiter: the head, and some of the middle
_SAMPLE = 600
_MAX_QUOTED_LINES = 8


class Row(NamedTuple):
    """One line of a table.

    Attributes
    ----------
    line : int
        Its number in the file, from 1.
    cells : list of str
        Without surrounding blanks and quotes; trailing empty cells are kept.
    text : str
        The line itself (of a sheet: the cells joined).
    """

    line: int
    cells: list[str]
    text: str = ""


def split_quoted(line: str, delimiter: str) -> tuple[list[str], bool]:
    """Cells of a line with quotes, and whether a quote is left open.

    A quote opens only at the start of a cell: the second one in `G"` is a double prime.
    """
    cells: list[str] = []
    position = 0
    size = len(line)
    while True:
        start = position
        while start < size and line[start] == " ":
            start += 1
        if start < size and line[start] == '"':
            out = []
            position = start + 1
            while True:
                close = line.find('"', position)
                if close < 0:
                    return [*cells, line[start:]], True
                out.append(line[position:close])
                if line[close + 1 : close + 2] == '"':
                    out.append('"')
                    position = close + 2
                    continue
                position = close + 1
                break
            end = line.find(delimiter, position)
            tail = line[position : size if end < 0 else end]
            # text after the closing quote stays where it is: a damaged cell must show as such
            cells.append("".join(out) + tail if tail.strip() else "".join(out))
        else:
            end = line.find(delimiter, position)
            cells.append(line[position : size if end < 0 else end])
        if end < 0:
            return cells, False
        position = end + 1


def splitter(delimiter: str) -> Callable[[str], list[str]]:
    """A function from a line without line breaks to its cells."""
    if delimiter == " ":

        def spaces(line: str) -> list[str]:
            if '"' in line:
                compact = re.sub(r"\s+", " ", line.strip())
                cells, unclosed = split_quoted(compact, " ")
                if not unclosed:
                    return [c.strip() for c in cells]
            return line.split()

        return spaces

    def marks(line: str) -> list[str]:
        if '"' in line:
            cells, unclosed = split_quoted(line, delimiter)
            if not unclosed:
                return [c.strip() for c in cells]
        return [c.strip() for c in line.split(delimiter)]

    return marks


def is_comment(line: str) -> bool:
    """Whether a line is a comment."""
    return line.lstrip(' \t"').startswith("#")


def find_delimiter(lines: Sequence[str]) -> str:
    """The delimiter under which most of the table's lines are rows of numbers.

    Parameters
    ----------
    lines : sequence of str
        All lines of the file.

    Returns
    -------
    str
        One of `DELIMITERS`; a blank stands for any run of blanks.
    """
    for line in lines[:3]:
        told = re.fullmatch(r"\s*\"?sep=(.)\"?\s*[;,]*\s*", line)
        if told and told.group(1) in DELIMITERS:
            return told.group(1)
    sample = [s for s in lines[:_SAMPLE] if s.strip() and not is_comment(s)]
    if len(lines) > 2 * _SAMPLE:
        middle = len(lines) // 2
        sample += [s for s in lines[middle : middle + _SAMPLE // 4] if s.strip()]
    scores = {}
    for delimiter in DELIMITERS:
        if delimiter == " " or any(delimiter in s for s in sample):
            scores[delimiter] = _score(sample, delimiter)
    # a mark under which header and rows fit beats blanks, which may also part thousands
    sure = {d: s for d, s in scores.items() if d != " " and s[0] and s[2] > 0.6} or scores
    return max(sure, key=lambda d: sure[d][:2])


def _score(sample: Iterable[str], delimiter: str) -> tuple[bool, float, float]:
    """Whether a header shows, numbers minus texts, and the share of rows of the usual width."""
    split = splitter(delimiter)
    rows = []
    header = False
    for line in sample:
        if len(line) > 100_000:
            continue
        cells = split(line)
        good = sum(looks_numeric(c, gaps=delimiter in ";\t|") for c in cells)
        text = sum(1 for c in cells if c) - good
        if good >= 2:
            rows.append((len(cells), good - text))
        elif good == 0 and len(cells) >= 2 and not header:
            header = count_known(join_units(cells) if delimiter == " " else cells) >= 2
    if not rows:
        return header, 0.0, 0.0
    width, often = Counter(n for n, _ in rows).most_common(1)[0]
    total = float(sum(value for n, value in rows if n == width))
    return header, total, often / len(rows)


def join_units(cells: Sequence[str]) -> list[str]:
    """Header cells split at blanks, put together again: `omega [rad/s]`, `eta* (Pa s)`.

    A cell that opens a bracket takes what follows up to the closing one, and belongs to the name
    before it.
    """
    out: list[str] = []
    depth = 0
    for cell in cells:
        opening = cell[:1] in "[("
        if out and (depth > 0 or opening):
            out[-1] += " " + cell
        else:
            out.append(cell)
        depth = max(0, depth + sum(cell.count(c) for c in "[(") - sum(cell.count(c) for c in "])"))
    return out


def split_header(line: str, delimiter: str, width: int) -> list[str]:
    """Cells of a header line; blanks as delimiter need care, as names and units hold blanks too."""
    line = line.strip("\n")
    if delimiter != " ":
        return splitter(delimiter)(line)
    options = []
    for mark in ("\t", ";", ",", "|"):
        if mark in line:
            options.append(splitter(mark)(line))
    options.append([c.strip() for c in re.split(r"\s{2,}|\t", line.strip())])
    options.append(join_units(line.split()))
    options.append(_regroup(join_units(line.split())))
    options.append(line.split())
    fitting = [o for o in options if len(o) == width] or options
    return max(fitting, key=lambda o: (count_known(o), -abs(len(o) - width)))


def _regroup(cells: Sequence[str]) -> list[str]:
    """Join neighbours that only together are a known name (`tan delta`, `storage modulus`)."""
    out: list[str] = []
    i = 0
    while i < len(cells):
        for length in (3, 2):
            joined = " ".join(cells[i : i + length])
            if i + length <= len(cells) and count_known([joined]) > count_known([cells[i]]):
                out.append(joined)
                i += length
                break
        else:
            out.append(cells[i])
            i += 1
    return out


def split_lines(
    text: str, delimiter: str, path: str | None, omit: frozenset[int]
) -> tuple[list[Row | None], dict[int, str]]:
    """Rows of the file.

    Returns
    -------
    rows : list of Row or None
        In order; None stands for a run of blank lines.
    comments : dict of line number to text
        Comment lines without their mark.

    Raises
    ------
    InputError
        If a line has too many cells.
    """
    lines = text.split("\n")
    split = splitter(delimiter)
    rows: list[Row | None] = []
    comments: dict[int, str] = {}
    blank = " \t\r" if delimiter == " " else " \t\r" + delimiter
    if delimiter in ",;":
        blank = " \t\r,;"
    number = 0
    while number < len(lines):
        line = lines[number]
        number += 1
        if number in omit:
            continue
        if not line.strip(blank):
            if rows and rows[-1] is not None:
                rows.append(None)
            continue
        if "#" in line and is_comment(line):
            comments[number] = line.strip().strip('"').lstrip("#").strip()
            continue
        first = number
        if '"' in line:
            line, number = _close_quotes(lines, number, delimiter)
        cells = split(line)
        if len(cells) > MAX_COLUMNS:
            raise InputError(
                f"the row has {len(cells)} cells, more than {MAX_COLUMNS}.",
                path=path,
                row=first,
                remedy="Give the columns that are needed.",
            )
        rows.append(Row(first, cells, line))
    return rows, comments


def _close_quotes(lines: list[str], number: int, delimiter: str) -> tuple[str, int]:
    """A line whose quoted cell runs on over the next lines, joined; else the line as it is."""
    line = lines[number - 1]
    if not split_quoted(line, delimiter)[1]:
        return line, number
    joined = line
    for ahead in range(number, min(number + _MAX_QUOTED_LINES, len(lines))):
        joined += " " + lines[ahead]
        if not split_quoted(joined, delimiter)[1]:
            return joined, ahead + 1
    return line, number
