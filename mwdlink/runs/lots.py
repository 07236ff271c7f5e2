"""Which inputs a batch has: files, folders, patterns and manifest tables to a list in fixed order.

Nothing here reads a measurement. What cannot be an input (a manifest row that leads nowhere or out
of the manifest's folder) stays in the list with its reason, so that nothing is lost in silence.
"""

from __future__ import annotations

import csv
import glob
import hashlib
import os
import re
from collections import Counter
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from mwdlink.errors import Caution, InputError
from mwdlink.files.decode import decode, read_bytes

SUFFIXES = frozenset({".csv", ".tsv", ".txt", ".dat", ".xlsx"})
MANIFEST_BYTES = 64 * 1024 * 1024
_MANIFEST_HEADS = {"path", "file"}
# names a result's folder needs for itself
_TAKEN = {"figures", "result.json", "summary.csv", "failed.csv", "report.html", "index.html"}


@dataclass(frozen=True)
class Lot:
    """One input of a batch.

    Attributes
    ----------
    path : str
        As it is opened.
    lot : str
        Name for people: the manifest's, else the file's name without its ending.
    name : str
        Of its folder, safe on every system.
    polymer : str or None
        Built-in name or path of a card; None takes the batch's.
    temperature_C : float or None
        None takes the batch's, else the table's own.
    reason : str or None
        Why it cannot be an input at all.
    """

    path: str
    lot: str
    name: str = ""
    polymer: str | None = None
    temperature_C: float | None = None
    reason: str | None = None

    @property
    def shown(self) -> str:
        """The path as text for tables: no line breaks, no bytes that are no text."""
        return shown(self.path)


def shown(text: str) -> str:
    """Text that can be printed and written: control characters and stray bytes as escapes."""
    text = os.fspath(text).encode("utf-8", "backslashreplace").decode("utf-8")
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in text)


def find_lots(
    inputs: Iterable[str | os.PathLike[str]],
    *,
    anywhere: bool = False,
    leave_out: Sequence[str | os.PathLike[str]] = (),
) -> tuple[list[Lot], tuple[Caution, ...]]:
    """The inputs of a batch.

    Parameters
    ----------
    inputs : iterable of path
        Files, folders (with all that is below them), patterns such as `lots/*.csv`, and manifests:
        tables with a column `path` or `file` and, where known, `lot`, `polymer` and
        `temperature [C]`. Order is that of the arguments; within a folder by name, numbers by
        value; within a manifest that of its rows. A file named twice counts once.
    anywhere : bool
        May a manifest name files outside its own folder?
    leave_out : sequence of path
        Folders that are not looked into: where results go.

    Returns
    -------
    lots : list of Lot
    notes : tuple of Caution

    Raises
    ------
    InputError
        If a manifest cannot be read, or nothing is found.
    """
    aside = {os.path.realpath(p) for p in leave_out}
    found: list[Lot] = []
    notes: list[Caution] = []
    for given in inputs:
        path = os.fspath(given)
        if os.path.isdir(path):
            found += [Lot(p, stem(p)) for p in _walk(path, aside, notes)]
        elif os.path.lexists(path):
            found += _manifest(path, anywhere) if is_manifest(path) else [Lot(path, stem(path))]
        elif glob.has_magic(path):
            matches = sorted(glob.glob(path, recursive=True), key=natural)
            if not matches:
                raise InputError("nothing matches this pattern.", path=shown(path))
            for match in matches:
                if os.path.isdir(match):
                    continue
                found += [Lot(match, stem(match))]
        else:
            found += [Lot(path, stem(path), reason="there is no such file.")]
    lots = _named(_once(found, notes))
    if not lots:
        raise InputError(
            "no input was found.",
            path=", ".join(shown(os.fspath(i)) for i in inputs) or None,
            remedy=f"Folders are searched for {', '.join(sorted(SUFFIXES))}.",
        )
    return lots, tuple(notes)


def stem(path: str) -> str:
    """A file's name without its ending, printable."""
    return shown(Path(path).stem or Path(path).name)


def natural(path: str) -> tuple[tuple[int, int | str], ...]:
    """Order of names in which lot 2 comes before lot 10; the same on every system."""
    parts = re.split(r"(\d+)", path)
    return tuple((1, int(p)) if p.isdecimal() else (0, p) for p in parts if p) + ((0, path),)


def _walk(top: str, aside: set[str], notes: list[Caution]) -> Iterator[str]:
    """Files of a folder tree in fixed order; each real folder once, so that loops end."""
    been: set[tuple[int, int]] = set()

    def visit(folder: str) -> Iterator[str]:
        try:
            status = os.stat(folder)
            names = sorted(os.listdir(folder), key=natural)
        except OSError as error:
            notes.append(
                Caution(
                    "folder_not_read",
                    f"The folder {shown(folder)} could not be read: {error.strerror}.",
                )
            )
            return
        real = os.path.realpath(folder)
        if (status.st_dev, status.st_ino) in been or real in aside:
            return
        been.add((status.st_dev, status.st_ino))
        if "result.json" in names:
            notes.append(
                Caution("result_left_aside", f"{shown(folder)} holds a result: not an input.")
            )
            return
        for name in names:
            path = os.path.join(folder, name)
            if name.startswith("."):
                continue
            if os.path.isdir(path):
                yield from visit(path)
            elif os.path.splitext(name)[1].lower() in SUFFIXES:
                yield path

    yield from visit(top)


# ------------------------------------------------------------------------------- manifests


def is_manifest(path: str) -> bool:
    """Whether a table's header names a column `path` or `file`."""
    try:
        if not os.path.isfile(path):
            return False
        with open(path, "rb") as stream:
            head = stream.read(4096)
    except OSError:
        return False
    text = head.decode("utf-8-sig", "replace")
    for line in text.splitlines():
        if line.strip() and not line.lstrip().startswith("#"):
            cells = re.split(r"[,;\t]", line)
            return len(cells) >= 1 and any(_head(c)[0] in _MANIFEST_HEADS for c in cells)
    return False


def _head(cell: str) -> tuple[str, str]:
    """Name and unit of a header cell, in small letters."""
    match = re.fullmatch(r"(.*?)\s*(?:[\[(]\s*(.*?)\s*[\])])?", cell.strip().strip('"').casefold())
    return (match[1].strip(), match[2] or "") if match else (cell, "")


def _manifest(path: str, anywhere: bool) -> list[Lot]:
    data, _ = read_bytes(path, limit=MANIFEST_BYTES)
    lines = [
        line
        for line in decode(data, path).text.lstrip("\ufeff").split("\n")
        if line.strip() and not line.lstrip().startswith("#")
    ]
    delimiter = max(",;\t", key=lines[0].count) if lines else ","
    rows = list(csv.reader(lines, delimiter=delimiter))
    heads = [_head(cell) for cell in rows[0]]
    known = {"path": "path", "file": "path", "polymer": "polymer", "lot": "lot", "sample": "lot"}
    known |= {"temperature": "temperature", "t": "temperature", "temp": "temperature"}
    where: dict[str, int] = {}
    for i, (name, _) in enumerate(heads):
        role = known.get(name)
        if role in where:
            raise InputError(f"two columns say the {role}.", path=shown(path), column=rows[0][i])
        if role is not None:
            where[role] = i
    unit = heads[where["temperature"]][1] if "temperature" in where else "c"
    if unit.strip("° ") not in ("", "c", "k", "celsius", "kelvin"):
        raise InputError(
            f"the temperature's unit {unit!r} is not known.", path=shown(path), remedy="Use C or K."
        )
    kelvin = unit.strip("° ").startswith("k")
    return [
        lot
        for row in rows[1:]
        if (lot := _row(row, where, Path(path).parent, kelvin, anywhere)) is not None
    ]


def _row(
    row: Sequence[str], where: dict[str, int], folder: Path, kelvin: bool, anywhere: bool
) -> Lot | None:
    def cell(role: str) -> str:
        i = where.get(role)
        return row[i].strip() if i is not None and i < len(row) else ""

    named = cell("path")
    if not named:
        return None if not any(c.strip() for c in row) else Lot("", "?", reason="no path given.")
    path = os.path.join(folder, named)
    lot = Lot(path, shown(cell("lot")) or stem(path))
    temperature = cell("temperature")
    if temperature:
        try:
            value = float(temperature.replace(",", "."))
        except ValueError:
            return replace(lot, reason=f"the manifest's temperature {temperature!r} is no number.")
        value = value - 273.15 if kelvin else value
        if not -273.15 < value <= 1000:
            return replace(lot, reason=f"the manifest's temperature {temperature!r} is impossible.")
        lot = replace(lot, temperature_C=value)
    reads = [path]
    polymer = cell("polymer")
    if polymer:
        if polymer.lower().endswith(".toml") or "/" in polymer or os.sep in polymer:
            polymer = os.path.join(folder, polymer)
            reads.append(polymer)
        lot = replace(lot, polymer=polymer)
    for leads in reads:
        if not anywhere and _outside(leads, folder):
            return replace(
                lot,
                reason=f"{shown(os.path.relpath(leads, folder))} leads out of the manifest's "
                "folder. Put the file there, or allow it (--anywhere).",
            )
    if not os.path.lexists(path):
        return replace(lot, reason="there is no such file.")
    return lot


def _outside(path: str, folder: Path) -> bool:
    home = os.path.realpath(folder)
    return os.path.commonpath([home, os.path.realpath(path)]) != home


# ------------------------------------------------------------------------------- names


def _once(found: list[Lot], notes: list[Caution]) -> list[Lot]:
    seen: set[tuple[object, ...]] = set()
    out = []
    for lot in found:
        key = (os.path.realpath(lot.path), lot.polymer, lot.temperature_C, lot.reason)
        if key in seen and lot.path:
            continue
        seen.add(key)
        out.append(lot)
    if len(out) < len(found):
        notes.append(
            Caution("named_twice", f"{len(found) - len(out)} inputs were named twice: taken once.")
        )
    return out


def _named(lots: list[Lot]) -> list[Lot]:
    """Give each lot its folder's name: its own made safe, with a mark where two would be alike."""
    plain = [_safe(lot.lot) for lot in lots]
    count = Counter(p.casefold() for p in plain)
    out = []
    used: set[str] = set()
    for lot, name in zip(lots, plain, strict=True):
        if count[name.casefold()] > 1 or name.casefold() in _TAKEN:
            key = f"{lot.path}\n{lot.lot}\n{lot.polymer}\n{lot.temperature_C}"
            mark = hashlib.sha256(key.encode("utf-8", "surrogatepass")).hexdigest()[:8]
            name = f"{name}-{mark}"
        while name.casefold() in used:
            name += "x"
        used.add(name.casefold())
        out.append(replace(lot, name=name))
    return out


def _safe(text: str) -> str:
    """Letters, digits, dot, dash and underscore; never hidden, never an option, never long."""
    name = re.sub(r"[^A-Za-z0-9._-]+", "_", text).strip("._-")[:60].rstrip("._-")
    if re.fullmatch(r"(?i)con|prn|aux|nul|com\d|lpt\d", name.split(".")[0] if name else ""):
        name = f"lot_{name}"  # names some systems keep for devices
    return name or "lot"
