"""From a block of cells to columns of numbers with a role and an inner unit."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from mwdlink.errors import Caution, InputError
from mwdlink.files.headers import (
    Column,
    find_chosen,
    list_headers,
    make_column,
    recognise,
    shorten,
)
from mwdlink.files.layout import Block, unit_of
from mwdlink.files.numbers import Numbers, find_decimal, grouped_note, to_numbers
from mwdlink.files.roles import ROLES
from mwdlink.files.source import Source, rows_option, rows_text
from mwdlink.files.units import find_unit, is_empty, normal_unit

# kinds whose bare numbers need no word about a unit
_UNITLESS = ("fraction", "number", "signal", "any")


@dataclass
class Picker:
    """The columns of one block by role, and the numbers in them.

    Attributes
    ----------
    source, block
        Where the cells come from.
    chosen : dict of role to (index, unit)
        Columns the user named.
    found : dict of role to list of (index, unit)
        Columns whose header is recognised.
    """

    source: Source
    block: Block
    columns: Mapping[str, Any] | None = None
    decimal: str | None = None
    chosen: dict[str, tuple[int, str | None]] = field(default_factory=dict)
    found: dict[str, list[tuple[int, str | None]]] = field(default_factory=dict)
    notes: list[Caution] = field(default_factory=list)

    def __post_init__(self) -> None:
        block = self.block
        self.chosen = find_chosen(self.columns, block.headers, self.source.path, block.header_row)
        taken = {index for index, _ in self.chosen.values()}
        for index, header in enumerate(block.headers):
            match = recognise(header)
            if match is None or index in taken:
                continue
            unit = self._unit(index, header, match.unit, ROLES[match.role].kind)
            self.found.setdefault(match.role, []).append((index, unit))

    def _unit(self, index: int, header: str, given: str | None, kind: str) -> str | None:
        row = unit_of(self.block, index)
        if given is None or is_empty(given):
            return row if row is not None else given
        if row is None or is_empty(row):
            return given
        known = find_unit(given, kind)
        if (known is not None and known == find_unit(row, kind)) or (
            normal_unit(given) == normal_unit(row)
        ):
            return given
        # an unneeded column may contradict itself; `take` refuses a needed one by this text
        return f"{normal_unit(given)} or {normal_unit(row)}"

    def has(self, role: str) -> bool:
        """Whether some column has this role."""
        return role in self.chosen or role in self.found

    def drop(self, *roles: str) -> None:
        """Forget recognised columns of these roles (the user named others)."""
        for role in roles:
            self.found.pop(role, None)

    def take(self, role: str) -> Column | None:
        """The column of a role, or None.

        Raises
        ------
        InputError
            If two columns claim the role, or its unit cannot be settled.
        """
        block = self.block
        place: dict[str, Any] = {"path": self.source.path, "row": block.header_row}
        if role in self.chosen:
            index, unit = self.chosen[role]
            if unit is None:
                match = recognise(block.headers[index])
                same = match is not None and ROLES[match.role].kind == ROLES[role].kind
                unit = match.unit if match is not None and same else _bracket(block.headers[index])
                row = unit_of(block, index)
                unit = row if unit is None else unit
            return make_column(role, index, block.headers, unit, chosen=True, **place)
        claims = self.found.get(role, [])
        if len(claims) > 1:
            kind = ROLES[role].kind
            fit = [c for c in claims if c[1] is None or is_empty(c[1])
                   or find_unit(c[1], kind)]  # fmt: skip
            claims = fit if len(fit) == 1 else claims
        if not claims:
            return None
        if len(claims) > 1:
            names = [block.headers[i] for i, _ in claims]
            raise InputError(
                f"{len(claims)} columns are {role.rstrip('?')}: {', '.join(map(repr, names))}.",
                column=names[1],
                remedy=f'Name the one to use: --column "{role}={_name(names, claims)}".',
                **place,
            )
        index, unit = claims[0]
        return make_column(role, index, block.headers, unit, **place)

    def need(self, role: str, accepted: str) -> Column:
        """The column of a role, which must be there."""
        column = self.take(role)
        if column is None:
            raise self.missing(role, accepted)
        return column

    def missing(self, what: str, accepted: str) -> InputError:
        """The error for a missing column: what was found, what would have been accepted."""
        headers = self.block.headers
        found = f"no column for {what} was found; the columns are {list_headers(headers)}."
        name = "HEADER"
        if self.block.header_row is None:
            found = f"the table has no header row, only {len(headers)} columns of numbers."
            name = "#1"
        return InputError(
            found,
            path=self.source.path,
            row=self.block.header_row or self.block.rows[0],
            column=what,
            remedy=f'Accepted are {accepted}. Or name it: --column "{what}={name}:UNIT".',
        )

    def has_cells(self, column: Column) -> bool:
        """Whether anything stands in a column."""
        return any(self.block.columns[column.index])

    def read(
        self,
        needed: Sequence[Column],
        *,
        positive: Collection[str] = (),
        omit_unreadable: bool = False,
    ) -> tuple[dict[str, np.ndarray], np.ndarray]:
        """Numbers of the needed columns in inner units, and the rows they stand in.

        Parameters
        ----------
        needed : sequence of Column
            A row without a number in one of them is an error, or is left out.
        positive : collection of str
            Roles whose values must be above zero.
        omit_unreadable : bool

        Returns
        -------
        values : dict of role to ndarray of shape (n,)
        rows : ndarray of int of shape (n,)

        Raises
        ------
        InputError
            Naming the first bad cells, the same errors together.
        """
        mark = self._decimal(needed)
        numbers = {c.role: to_numbers(self.block.columns[c.index], mark) for c in needed}
        rows = np.array(self.block.rows, dtype=int)
        good = np.ones(rows.size, dtype=bool)
        for column in needed:
            good[numbers[column.role].bad] = False
        if not np.all(good):
            self._unreadable(needed, numbers, rows, good, omit_unreadable)
        values = {}
        for column in needed:
            raw = numbers[column.role]
            with np.errstate(over="ignore", under="ignore"):
                values[column.role] = column.conversion.convert(raw.values[good])
            if raw.grouped:
                self.notes.append(grouped_note(column.header, raw.grouped, mark))
            self._check(column, values[column.role], rows[good], column.role in positive)
        self._say_units(needed)
        return values, rows[good]

    def peek(self, column: Column) -> np.ndarray | None:
        """Numbers of a column that is not needed, over all rows; None unless all are readable."""
        try:
            numbers = to_numbers(self.block.columns[column.index], self._decimal([column]))
        except InputError:
            return None
        if numbers.bad.size:
            return None
        with np.errstate(over="ignore", under="ignore"):
            values = column.conversion.convert(numbers.values)
        return values if np.all(np.isfinite(values)) else None

    def _decimal(self, needed: Sequence[Column]) -> str:
        cells = [self.block.columns[c.index] for c in needed]
        return find_decimal(cells, self.block.rows, self.source.path, given=self.decimal)

    def _unreadable(
        self,
        needed: Sequence[Column],
        numbers: Mapping[str, Numbers],
        rows: np.ndarray,
        good: np.ndarray,
        omit_unreadable: bool,
    ) -> None:
        if omit_unreadable and np.any(good):
            lost = rows[~good]
            self.notes.append(
                Caution(
                    "rows_unreadable",
                    f"Left out because a cell is no number: {rows_text(lost)} "
                    f"({lost.size} of {rows.size} rows).",
                )
            )
            return
        first: tuple[int, str] | None = None
        parts = []
        for column in needed:
            groups: dict[str, list[int]] = {}
            for i in numbers[column.role].bad:
                groups.setdefault(self.block.columns[column.index][i], []).append(int(rows[i]))
            for cell, where in groups.items():
                if first is None or where[0] < first[0]:
                    first = (where[0], column.header)
                what = f"{shorten(cell)!r} is no number" if cell else "there is no number"
                count = f" ({len(where)} cells)" if len(where) > 1 else ""
                parts.append(f"{what} in {column.header!r}, {rows_text(where, 4)}{count}")
        more = f"; and {len(parts) - 4} more kinds of cell" if len(parts) > 4 else ""
        remedy = f"Correct the cells, or leave the rows out: --omit {_few(rows[~good])}"
        remedy += " or --omit-unreadable." if np.any(good) else "."
        if not np.any(good):
            remedy = "Is the right column named, and is its unit row or decimal mark usual?"
        raise InputError(
            "; ".join(parts[:4]) + more + ".",
            path=self.source.path,
            row=first[0] if first else None,
            column=first[1] if first else None,
            remedy=remedy,
        )

    def _check(self, column: Column, values: np.ndarray, rows: np.ndarray, positive: bool) -> None:
        bad = ~np.isfinite(values)
        word = "not finite"
        if positive and not np.any(bad):
            bad = values <= 0
            word = "not above zero"
        if not np.any(bad):
            return
        where = rows[bad]
        raise InputError(
            f"{values[bad][0]:g} is {word}"
            + (
                f", and so in {where.size} rows ({rows_text(where, 6)})." if where.size > 1 else "."
            ),
            path=self.source.path,
            row=int(where[0]),
            column=column.header,
            remedy=f"Correct the values, or leave the rows out: --omit {_few(where)}.",
        )

    def _say_units(self, needed: Sequence[Column]) -> None:
        assumed = [
            f"{c.header!r} as {c.conversion.unit}"
            for c in needed
            if c.assumed and ROLES[c.role].kind not in _UNITLESS
        ]
        if assumed:
            self.notes.append(
                Caution("unit_assumed", f"No unit is given; taken were {', '.join(assumed)}.")
            )
        converted = [
            f"{c.header!r} from {c.conversion.unit} to {c.conversion.inner}"
            for c in needed
            if not c.conversion.trivial
        ]
        if converted:
            self.notes.append(Caution("unit_converted", f"Converted: {', '.join(converted)}."))


def _bracket(header: str) -> str | None:
    """The last bracket of a header that no spelling covers: its unit."""
    for opening, closing in ("[]", "()"):
        if header.rstrip().endswith(closing) and opening in header:
            return header.rstrip()[header.rindex(opening) + 1 : -1]
    return None


def _name(names: Sequence[str], claims: Sequence[tuple[int, Any]]) -> str:
    """How to point at the first of several columns: by name, or by position if names repeat."""
    return names[0] if len(set(names)) == len(names) else f"#{claims[0][0] + 1}"


def _few(rows: np.ndarray) -> str:
    text = rows_option(rows.tolist())
    return text if len(text) <= 200 else text[:200].rpartition(",")[0] + ",..."
