"""From a path to text: bounded reading, a fingerprint, the encoding found and said."""

from __future__ import annotations

import errno
import hashlib
import os
import re
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from mwdlink.errors import Caution, InputError

MAX_BYTES = 256 * 1024 * 1024
MAX_ROWS = 2_000_000
MAX_LINE = 1_000_000

# first bytes -> what the file is and how to get a table out of it
_MAGIC = (
    (b"PK\x03\x04", "a zip archive or office document", "Save the sheet as .xlsx or CSV."),
    (b"\xd0\xcf\x11\xe0", "an old office document", "Save the sheet as .xlsx or CSV."),
    (b"%PDF", "a PDF document", "Export the table itself, as CSV."),
    (b"\x89PNG", "a picture", "Give the table behind it, as CSV."),
    (b"\xff\xd8\xff", "a picture", "Give the table behind it, as CSV."),
    (b"GIF8", "a picture", "Give the table behind it, as CSV."),
    (b"\x1f\x8b", "a gzip archive", "Unpack it first."),
    (b"BZh", "a bzip2 archive", "Unpack it first."),
    (b"\xfd7zXZ", "an xz archive", "Unpack it first."),
    (b"7z\xbc\xaf", "a 7z archive", "Unpack it first."),
    (b"\x7fELF", "a program", "Give a table as text (CSV)."),
)
# longest first: the UTF-32 mark begins with the UTF-16 one
_MARKS = (
    (b"\xff\xfe\x00\x00", "utf-32-le", "UTF-32"),
    (b"\x00\x00\xfe\xff", "utf-32-be", "UTF-32"),
    (b"\xef\xbb\xbf", "utf-8", "UTF-8"),
    (b"\xff\xfe", "utf-16-le", "UTF-16"),
    (b"\xfe\xff", "utf-16-be", "UTF-16"),
)
# control characters no text table holds (tab, line feed, form feed, return, Ctrl-Z are left out)
_CONTROL = re.compile(r"[\x00-\x08\x0b\x0e-\x19\x1b-\x1f\x7f]")
_AS_TEXT = "Give a table as text (CSV, TSV, semicolons) or as .xlsx."


@dataclass(frozen=True)
class Text:
    """A decoded file.

    Attributes
    ----------
    text : str
        The content; line ends are all line feeds, the byte-order mark is gone.
    encoding : str
        Name of the encoding found.
    notes : tuple of Caution
        What had to be assumed.
    """

    text: str
    encoding: str
    notes: tuple[Caution, ...] = ()


def read_bytes(path: Any, *, limit: int = MAX_BYTES) -> tuple[bytes, str]:
    """The content of a file and its SHA-256.

    Parameters
    ----------
    path : str or Path
    limit : int
        Largest size read [bytes]; anything bigger is refused before it is read.

    Returns
    -------
    data : bytes
    sha256 : str
        Hexadecimal digest of `data`.

    Raises
    ------
    InputError
        If the path is missing, a folder, not readable, empty or too big.
    """
    name = os.fspath(path) if isinstance(path, (str, os.PathLike)) else str(path)
    try:
        if Path(name).is_dir():
            raise InputError("this is a folder.", path=name, remedy="Name a file in it.")
        with open(name, "rb") as stream:
            size = os.fstat(stream.fileno()).st_size
            data = b"" if size > limit else stream.read(limit + 1)
    except InputError:
        raise
    except (OSError, ValueError) as error:
        raise _cannot_open(name, error) from None
    if size > limit or len(data) > limit:
        raise InputError(
            f"the file has {max(size, len(data)) / 1e6:.0f} MB, more than the "
            f"{limit / 1e6:.0f} MB a table may have.",
            path=name,
            remedy="Give the table alone, or fewer points.",
        )
    if not data:
        raise InputError("the file is empty.", path=name, remedy="Export it again.")
    return data, hashlib.sha256(data).hexdigest()


def _cannot_open(name: str, error: Exception) -> InputError:
    number = getattr(error, "errno", None)
    if number == errno.ENOENT:
        folder = Path(name).parent
        near = sorted(p.name for p in folder.glob("*.csv"))[:5] if folder.is_dir() else []
        hint = f" The folder holds {', '.join(near)}." if near else ""
        return InputError("there is no such file.", path=name, remedy=f"Check the path.{hint}")
    if number in (errno.EACCES, errno.EPERM):
        return InputError("the file may not be read.", path=name, remedy="Check its permissions.")
    reason = getattr(error, "strerror", None) or str(error)
    return InputError(
        f"the file cannot be read ({reason}).", path=name.replace("\0", "?"),
        remedy="Check the path.",
    )  # fmt: skip


def decode(data: bytes, path: str | None = None) -> Text:
    """Bytes to text: byte-order marks, UTF-8, UTF-16, Latin-1 and Windows-1252.

    Raises
    ------
    InputError
        If the content is binary, not decodable, or has too many rows or an endless line.
    """
    if data.count(b"\n") > 2 * MAX_ROWS:
        raise InputError(
            f"the file has more than {2 * MAX_ROWS} lines.",
            path=path,
            remedy=f"A table may have {MAX_ROWS} rows: give fewer points.",
        )
    for magic, what, remedy in _MAGIC:
        if data.startswith(magic):
            raise InputError(f"this is {what}, not a text table.", path=path, remedy=remedy)
    text, encoding, notes = _to_text(data, path)
    text = text.replace("\r\n", "\n").replace("\r", "\n").replace("\f", " ")
    text = text.rstrip("\x1a")
    found = _CONTROL.search(text)
    if found is not None:
        raise InputError(
            f"the file holds the control character U+{ord(found.group()):04X}: it is binary "
            "or damaged.",
            path=path,
            row=text.count("\n", 0, found.start()) + 1,
            remedy=_AS_TEXT,
        )
    if not text.strip():
        raise InputError("the file holds no text.", path=path, remedy="Export it again.")
    _refuse_endless(text, path)
    return Text(text, encoding, notes)


def _to_text(data: bytes, path: str | None) -> tuple[str, str, tuple[Caution, ...]]:
    for mark, codec, title in _MARKS:
        if data.startswith(mark):
            try:
                text = data[len(mark) :].decode(codec)
            except UnicodeDecodeError as error:
                if codec == "utf-8":
                    # the mark lies: some editors prepend it to old single-byte text
                    return _single_byte(data[len(mark) :])
                row = data[: error.start].count("\n".encode(codec)) + 1
                raise InputError(
                    f"the file is marked as {title}, but byte {error.start} does not fit: it is "
                    "damaged or cut.",
                    path=path,
                    row=row,
                    remedy="Export it again.",
                ) from None
            notes = () if codec == "utf-8" else (_said(title),)
            return text, title, notes
    if b"\x00" in data[:4096] or b"\x00" in data[-4096:]:
        return _unmarked_wide(data, path)
    try:
        return data.decode("utf-8"), "UTF-8", ()
    except UnicodeDecodeError:
        return _single_byte(data)


def _unmarked_wide(data: bytes, path: str | None) -> tuple[str, str, tuple[Caution, ...]]:
    """UTF-16 without its mark shows as a NUL in every second byte of western text."""
    head = data[:4096]
    for offset, codec in ((1, "utf-16-le"), (0, "utf-16-be")):
        nul = head[offset::2].count(0)
        other = head[1 - offset :: 2].count(0)
        if nul > 0.8 * len(head[offset::2]) and other == 0:
            try:
                return data.decode(codec), "UTF-16", (_said("UTF-16, unmarked"),)
            except UnicodeDecodeError:
                break
    row = data[: data.index(0)].count(b"\n") + 1
    raise InputError("the file is binary.", path=path, row=row, remedy=_AS_TEXT)


def _single_byte(data: bytes) -> tuple[str, str, tuple[Caution, ...]]:
    """Not UTF-8: Latin-1, Windows-1252, or lines of both kinds pasted together."""
    lines = data.split(b"\n")
    out: list[str] = []
    utf8 = single = windows = 0
    for line in lines:
        if line.isascii():
            out.append(line.decode("ascii"))
            continue
        try:
            out.append(line.decode("utf-8"))
            utf8 += 1
        except UnicodeDecodeError:
            single += 1
            try:
                out.append(line.decode("cp1252"))
                windows += any(0x80 <= byte < 0xA0 for byte in line)
            except UnicodeDecodeError:
                out.append(line.decode("latin-1"))
    name = "Windows-1252" if windows else "Latin-1"
    if utf8:
        text = (
            f"The file mixes encodings: {utf8} lines are UTF-8, {single} are not and were read "
            f"as {name}. Check names and units with special characters."
        )
        return "\n".join(out), f"UTF-8 and {name}", (Caution("mixed_encoding", text),)
    return "\n".join(out), name, (_said(name),)


def _said(title: str) -> Caution:
    return Caution("encoding", f"The file is not UTF-8; it was read as {title}.")


def _refuse_endless(text: str, path: str | None) -> None:
    if len(text) <= MAX_LINE:
        return
    start = 0
    row = 1
    while start < len(text):
        end = text.find("\n", start)
        end = len(text) if end < 0 else end
        if end - start > MAX_LINE:
            raise InputError(
                f"the line has {end - start} characters: this is no table.",
                path=path,
                row=row,
                remedy="Check the file; one point stands on one line.",
            )
        start = end + 1
        row += 1
