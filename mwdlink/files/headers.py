"""From a header cell to a role and a unit.

The grammar: a name, then perhaps a unit, as `name [unit]`, `name (unit)`, `name / unit`,
`name, unit`, `name in unit` or `name_unit`; or the unit in a row of its own. The name must be a
spelling of `roles.py` as a whole; nothing is found by substring or by position.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

from mwdlink.errors import InputError
from mwdlink.files.roles import ROLES, plain_name, role_of
from mwdlink.files.units import UNITS, Conversion, conversion, find_unit, is_empty

_BRACKETED = (
    re.compile(r"^(?P<name>.*?)\s*\[(?P<unit>[^\[\]]*)\]\s*$"),
    re.compile(r"^(?P<name>.*?)\s*\{(?P<unit>[^{}]*)\}\s*$"),
    re.compile(r"^(?P<name>.*?)\s*\((?P<unit>(?:[^()]|\([^()]*\))*)\)\s*$"),
    re.compile(r"^(?P<name>.*?)\s*<(?P<unit>[^<>]*)>\s*$"),
)
_LOOSE = (
    re.compile(r"^(?P<name>.*?)\s+/\s+(?P<unit>.+)$"),
    re.compile(r"^(?P<name>[^/]*?)/(?P<unit>.+)$"),
    re.compile(r"^(?P<name>.*?)\s*,\s*(?P<unit>[^,]+)$"),
    re.compile(r"^(?P<name>.*?)\s+in\s+(?P<unit>.+)$"),
)
# said to be without a unit: `[-]`, `(1)`
_UNITLESS = re.compile(r"^(?P<name>.*?)\s*[\[(]\s*[-–—1]\s*[\])]\s*$")
# the argument of a logarithm carries its unit inside: log10(M/(g/mol))
_LOG_UNIT = re.compile(
    r"^(?P<name>(?:log10|log|lg|ln)\s*[\[(]?\s*[A-Za-z. ]+?)\s*/\s*[(\[]?(?P<unit>k?g/mole?|k?Da)"
    r"[)\]\s]*$",
    re.IGNORECASE,
)


@dataclass(frozen=True)
class Match:
    """What a header was recognised as: the role and the unit's text (None: none given)."""

    role: str
    unit: str | None


@lru_cache(maxsize=4096)
def recognise(header: str) -> Match | None:
    """The role and unit text of one header, or None when it is nobody's.

    Parameters
    ----------
    header : str
        The cell as it stands in the file.
    """
    text = header.strip().lstrip("\ufeff").strip()
    if not text or len(text) > 200:
        return None
    bare = _UNITLESS.match(text)
    if bare is not None and bare["name"] and (inner := recognise(bare["name"])) is not None:
        return Match(inner.role, inner.unit or "-")
    role = role_of(text)
    if role is not None:
        return Match(role, None)
    found = _LOG_UNIT.match(text)
    if found is not None and (role := role_of(found["name"])) is not None:
        return Match(role, found["unit"])
    for pattern in _BRACKETED:
        found = pattern.match(text)
        if found is None:
            continue
        inner = recognise(found["name"]) if found["name"] else None
        if inner is not None and (inner.unit is None or is_empty(found["unit"])):
            return Match(inner.role, inner.unit or found["unit"])
    for loose in _LOOSE:
        found = loose.match(text)
        if found is None or (role := role_of(found["name"])) is None:
            continue
        # `G'/G''` is no storage modulus in units of G''
        if find_unit(found["unit"], ROLES[role].kind) is not None:
            return Match(role, found["unit"])
    return _underscored(text) or _trailing(text)


def _underscored(text: str) -> Match | None:
    """`omega_rad_per_s`: the name up to some underscore, the rest a known unit of its kind."""
    parts = text.split("_")
    for cut in range(len(parts) - 1, 0, -1):
        role = role_of("_".join(parts[:cut]))
        if role is None:
            continue
        unit = "_".join(parts[cut:]).replace("_per_", "/").replace("_", " ")
        if unit.startswith("per "):
            unit = "1/" + unit[4:]
        if find_unit(unit, ROLES[role].kind) is not None:
            return Match(role, unit)
    return None


def _trailing(text: str) -> Match | None:
    """`G' Pa`: a known name and a known unit with a space between."""
    words = text.split()
    for cut in range(len(words) - 1, 0, -1):
        role = role_of(" ".join(words[:cut]))
        unit = " ".join(words[cut:])
        if role is not None and find_unit(unit, ROLES[role].kind) is not None:
            return Match(role, unit)
    return None


def count_known(cells: Iterable[str]) -> int:
    """How many different roles a row of cells names: the mark of a header row."""
    return len({m.role for m in map(recognise, cells) if m is not None})


@dataclass(frozen=True)
class Column:
    """A column of a block that has been given a role.

    Attributes
    ----------
    role : str
    index : int
        Position in the row.
    header : str
        As in the file.
    conversion : Conversion
        To the inner unit.
    assumed : bool
        Whether the unit was not given.
    chosen : bool
        Whether the user named the column.
    """

    role: str
    index: int
    header: str
    conversion: Conversion
    assumed: bool
    chosen: bool = False


def role_name(text: str) -> str:
    """The role a user means by a word left of `=` in `--column role=header`.

    Raises
    ------
    InputError
        If it is no role.
    """
    text = text.strip()
    if text in ROLES and not text.endswith("?"):
        return text
    role = role_of(text)
    if role is None or role.endswith("?"):
        known = ", ".join(r for r in ROLES if not r.endswith("?"))
        raise InputError(f"{text!r} is no column role.", remedy=f"The roles are: {known}.")
    return role


def find_chosen(
    columns: Mapping[str, Any] | None, headers: Sequence[str], path: str | None, row: int | None
) -> dict[str, tuple[int, str | None]]:
    """Positions and units of the columns a user named.

    Parameters
    ----------
    columns : mapping of role to `header[:unit]`, or to (header, unit)
        `#3` in place of a header is the third column.
    headers : sequence of str

    Returns
    -------
    dict of role to (index, unit or None)
    """
    out: dict[str, tuple[int, str | None]] = {}
    for key, value in (columns or {}).items():
        role = role_name(str(key))
        header, unit = value if isinstance(value, (tuple, list)) else (str(value), None)
        index = _find_header(header, headers, path, row)
        if index is None and unit is None and ":" in header:
            head, _, tail = header.rpartition(":")
            index, unit = _find_header(head, headers, path, row), tail.strip()
            header = head
        if index is None:
            raise InputError(
                f"there is no column {header!r} (asked for as {role}).",
                path=path,
                row=row,
                column=header,
                remedy=f"The columns are {list_headers(headers)}.",
            )
        if any(index == other for other, _ in out.values()):
            raise InputError(
                f"the column {header!r} was named for two roles.", path=path, column=header,
                remedy="Name each column once.",
            )  # fmt: skip
        out[role] = (index, unit)
    return out


def _find_header(
    header: str, headers: Sequence[str], path: str | None, row: int | None
) -> int | None:
    wanted = header.strip()
    number = re.fullmatch(r"#([1-9]\d{0,3})", wanted)
    for same in (
        lambda a, b: a == b,
        lambda a, b: a.casefold() == b.casefold(),
        # the name alone, where the file's header carries a unit
        lambda a, b: bool(plain_name(b)) and _folded(_bare(a)) == _folded(b),
    ):
        found = [i for i, h in enumerate(headers) if same(h.strip(), wanted)]
        if len(found) == 1:
            return found[0]
        if len(found) > 1:
            raise InputError(
                f"{len(found)} columns are called {wanted!r}.",
                path=path,
                row=row,
                column=wanted,
                remedy=f"Name one by its position, #{found[0] + 1} or #{found[1] + 1}.",
            )
    if number is not None and int(number.group(1)) <= len(headers):
        return int(number.group(1)) - 1
    return None


def _folded(name: str) -> str:
    return plain_name(name).casefold()


def _bare(header: str) -> str:
    return re.sub(r"\s*(\[[^\[\]]*\]|\([^()]*\))\s*$", "", header)


def list_headers(headers: Sequence[str]) -> str:
    """Headers for a message, the first dozen quoted."""
    shown = [repr(shorten(h)) for h in headers[:12]]
    more = f" and {len(headers) - 12} more" if len(headers) > 12 else ""
    return (", ".join(shown) or "none") + more


def shorten(text: str, length: int = 40) -> str:
    """A cell for a message: printable and not endless."""
    text = "".join(c if c.isprintable() else "?" for c in text)
    return text if len(text) <= length else text[: length - 3] + "..."


def make_column(
    role: str,
    index: int,
    headers: Sequence[str],
    unit: str | None,
    *,
    path: str | None,
    row: int | None,
    chosen: bool = False,
) -> Column:
    """A column with its unit settled.

    Raises
    ------
    InputError
        If the unit is unknown, unfit for the role, contradictory, or needed and not given.
    """
    kind = ROLES[role].kind
    header = headers[index] if index < len(headers) else f"#{index + 1}"
    place: dict[str, Any] = {"path": path, "row": row, "column": header}
    flag = f'--column "{role}={header}:UNIT"'
    known = ", ".join(UNITS[kind])
    if kind == "any":
        # only its steps are looked at
        return Column(role, index, header, Conversion("", "", lambda x: x, True), False, chosen)
    if unit is None or (is_empty(unit) and kind not in ("fraction", "number", "signal")):
        assumed = ROLES[role].assumed
        if assumed is None and kind == "frequency":
            raise InputError(
                "a frequency without a unit may be in Hz or in rad/s.",
                remedy=f"Write the unit into the header, or give {flag} with Hz or rad/s.",
                **place,
            )
        if assumed is None:
            # settled later, from the values, or given up (see `tables`)
            assumed = next(iter(UNITS[kind]), "")
        return Column(role, index, header, conversion(assumed, kind), True, chosen)
    if is_empty(unit):
        return Column(role, index, header, conversion("-", kind), False, chosen)
    found = find_unit(unit, kind)
    if found is None:
        raise InputError(
            f"the unit {shorten(unit)!r} is unknown for {role.rstrip('?')}.",
            remedy=f"Known are {known}. Correct the header, or give {flag}.",
            **place,
        )
    if kind == "frequency" and found == "1/s" and role != "omega":
        raise InputError(
            "a frequency in 1/s may be in Hz or in rad/s.",
            remedy=f"Give {flag} with Hz or rad/s.",
            **place,
        )
    if role == "omega" and not chosen and find_unit(unit, "frequency") in _CYCLES:
        raise InputError(
            f"an angular frequency in {found}: is it in rad/s, or is it a frequency in Hz?",
            remedy=f'Give --column "f={header}:{found}" or --column "omega={header}:rad/s".',
            **place,
        )
    return Column(role, index, header, conversion(found, kind), False, chosen)


_CYCLES = ("Hz", "mHz", "kHz", "cycles/s")
