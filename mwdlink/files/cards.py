"""Polymer cards in and out: a built-in name or a TOML file to a Polymer, and a card to TOML."""

from __future__ import annotations

import difflib
import json
import os
import re
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from mwdlink.chains.polymer import Polymer, builtin, builtin_names
from mwdlink.errors import InputError
from mwdlink.files.decode import decode, read_bytes

MAX_CARD_BYTES = 1_000_000


def read_polymer(name_or_path: Any) -> Polymer:
    """A polymer from a built-in name or from the path of a card (TOML).

    Parameters
    ----------
    name_or_path : str, Path or Polymer
        Text that ends in `.toml`, holds a path separator or names a file is a path; all other
        text, and any name of a built-in card, is a name. A Polymer is given back as it is.

    Raises
    ------
    InputError
        Unknown name, no such file, no TOML, or a card that cannot be used: with file, line and
        remedy.
    """
    if isinstance(name_or_path, Polymer):
        return name_or_path
    if isinstance(name_or_path, os.PathLike) or _looks_like_path(str(name_or_path)):
        return _read_card(os.fspath(name_or_path))
    return builtin(str(name_or_path))


def _looks_like_path(text: str) -> bool:
    if text.lower().endswith(".toml") or "/" in text or os.sep in text:
        return True
    try:
        return text not in builtin_names() and Path(text).is_file()
    except (OSError, ValueError):
        return False


def _read_card(path: str) -> Polymer:
    try:
        data, _ = read_bytes(path, limit=MAX_CARD_BYTES)
    except InputError as error:
        near = _nearby_card(path)
        if near is None:
            raise
        raise InputError(
            error.message, path=error.path, remedy=f"{error.remedy or ''} {near}".strip()
        ) from None
    text = decode(data, path).text
    try:
        mapping = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise _not_toml(path, text, error) from None
    try:
        return Polymer.from_dict(mapping, origin=path)
    except InputError as error:
        raise InputError(
            error.message,
            path=path,
            row=_line_of(text, error.column),
            column=error.column,
            remedy=error.remedy,
        ) from None


def _nearby_card(path: str) -> str | None:
    """A card of nearly that name in the folder, for a path that leads nowhere."""
    try:
        folder = Path(path).parent
        if Path(path).exists() or not folder.is_dir():
            return None
        cards = sorted(p.name for p in folder.glob("*.toml"))
    except (OSError, ValueError):
        return None
    close = difflib.get_close_matches(Path(path).name, cards, n=1, cutoff=0.5)
    return f"Did you mean {str(folder / close[0])!r}?" if close else None


def _not_toml(path: str, text: str, error: tomllib.TOMLDecodeError) -> InputError:
    found = re.search(r"at line (\d+)", str(error))
    row = int(found.group(1)) if found else None
    line = text.split("\n")[row - 1].strip() if row is not None else ""
    reason = re.sub(r" \(at .*\)$", "", str(error))
    remedy = 'Lines read `key = 1.5e6`, `key = "text"`, `key = [1.0, 2.0]` or `[section]`.'
    if re.search(r"=\s*[-+]?\d+,\d", line):
        remedy = "Write numbers with a decimal point, not a comma."
    elif line.count('"') % 2:
        remedy = "Close the double quotes."
    elif re.match(r"[\w.]+\s*=\s*[A-Za-z]", line):
        remedy = "Put text between double quotes."
    elif "overwrite" in reason.lower() or "twice" in reason.lower():
        remedy = "The key or section stands there twice: keep one."
    return InputError(f"this is no TOML: {reason}.", path=path, row=row, remedy=remedy)


def _line_of(text: str, name: str | None) -> int | None:
    """Line (from 1) on which a key given by its full name stands, or its section's."""
    if not name:
        return None
    section, _, key = name.rpartition(".")
    here, section_row = "", None
    for row, line in enumerate(text.split("\n"), start=1):
        head = re.match(r"\s*\[+\s*([^\]]+?)\s*\]+", line)
        if head is not None:
            here = head.group(1).strip("\"'")
            if here in (section, name):
                section_row = row
            continue
        word = re.match(r"\s*[\"']?([^\"'=#]+?)[\"']?\s*=", line)
        if word is not None and word.group(1) in (key, name) and here in (section, name):
            return row
    return section_row


def card_text(mapping: Mapping[str, Any]) -> str:
    """A card as TOML.

    Parameters
    ----------
    mapping : mapping
        In the shape of `Polymer.to_dict()`: top-level values, then sections of values.

    Returns
    -------
    str
        Reads back (`tomllib.loads`) to the same mapping; None is left out, as TOML has no null.
    """
    lines: list[str] = []
    for key, value in mapping.items():
        if not isinstance(value, Mapping) and value is not None:
            lines.append(f"{key} = {_toml_value(value)}")
    for section, block in mapping.items():
        if not isinstance(block, Mapping):
            continue
        lines += ["", f"[{section}]"]
        lines += [f"{k} = {_toml_value(v)}" for k, v in block.items() if v is not None]
    return "\n".join(lines) + "\n"


def _toml_value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        # a JSON string is a TOML basic string, but for one character TOML forbids
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, (list, tuple)):
        return "[" + ", ".join(_toml_value(x) for x in value) + "]"
    if isinstance(value, int):
        return str(value)
    return repr(float(value))
