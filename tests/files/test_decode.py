"""Bytes to text: encodings found and said, what is no text refused with a remedy."""

from __future__ import annotations

import hashlib
import os
from pathlib import Path

import pytest

from mwdlink.errors import InputError
from mwdlink.files.decode import decode, read_bytes

TEXT = "ω [rad/s];δ [°]\r\n1;2\r\n"
WEST = "T [°C];a µ\r\n1;2\r\n"


@pytest.mark.parametrize(
    ("text", "codec", "title", "said"),
    [
        (TEXT, "utf-8", "UTF-8", False),
        (TEXT, "utf-8-sig", "UTF-8", False),
        (TEXT, "utf-16", "UTF-16", True),
        ("\ufeff" + TEXT, "utf-16-be", "UTF-16", True),
        (TEXT, "utf-16-le", "UTF-16", True),
        (TEXT, "utf-32", "UTF-32", True),
        (WEST, "latin-1", "Latin-1", True),
        ("price €\n" + WEST, "cp1252", "Windows-1252", True),
    ],
)
def test_encodings(text: str, codec: str, title: str, said: bool) -> None:
    """The text comes back with plain line ends; anything but UTF-8 is said (derived)."""
    found = decode(text.encode(codec))
    assert found.text == text.removeprefix("\ufeff").replace("\r\n", "\n")
    assert found.encoding == title
    assert [n.code for n in found.notes] == (["encoding"] if said else [])


def test_mixed_encodings_are_read_line_by_line_and_said() -> None:
    """A file pasted together from two sources (common practice)."""
    found = decode("η UTF-8\n".encode() + "190 °C\n".encode("latin-1"))
    assert found.text == "η UTF-8\n190 °C\n"
    assert found.notes[0].code == "mixed_encoding"


@pytest.mark.parametrize(
    ("data", "word", "row"),
    [
        (b"\x00\x01\x02\x03" * 50, "binary", 1),
        (b"omega,G'\n1,\x002\n", "binary", 2),
        (b"a,b\n1,2\n\x07,3\n", "control character", 3),
        (b"%PDF-1.7 ...", "PDF", None),
        (b"\x89PNG\r\n\x1a\n", "picture", None),
        (b"\x1f\x8b\x08", "gzip", None),
        (b"PK\x03\x04rest", "archive", None),
        (b"\xff\xfea", "damaged or cut", 1),
        (b" \n\t\n", "no text", None),
    ],
)
def test_what_is_no_text_is_refused(data: bytes, word: str, row: int | None) -> None:
    """Each with a remedy, and with the row where there is one."""
    with pytest.raises(InputError, match=word) as info:
        decode(data, "x.csv")
    assert info.value.path == "x.csv"
    assert info.value.row == row
    assert info.value.remedy


def test_files_that_cannot_be_opened(tmp_path: Path) -> None:
    """Missing, a folder, empty, too big, impossible names: `InputError`, never an OSError."""
    (tmp_path / "near.csv").write_text("x")
    (tmp_path / "empty.csv").write_bytes(b"")
    cases = {
        "missing.csv": "no such file.*near.csv",
        ".": "folder",
        "empty.csv": "empty",
        "nul\0name": "cannot be read",
        "x" * 5000: "cannot be read",
    }
    for name, word in cases.items():
        with pytest.raises(InputError, match=word) as info:
            read_bytes(os.path.join(tmp_path, name))
        assert info.value.remedy
    with pytest.raises(InputError, match="more than"):
        read_bytes(tmp_path / "near.csv", limit=0)


def test_a_huge_file_is_refused_before_it_is_read(tmp_path: Path) -> None:
    """A sparse file of 2 GB costs no time."""
    path = tmp_path / "huge.csv"
    with open(path, "wb") as stream:
        stream.truncate(2_000_000_000)
    with pytest.raises(InputError, match="2000 MB"):
        read_bytes(path)


def test_fingerprint_is_of_the_raw_bytes(tmp_path: Path) -> None:
    """SHA-256 of the standard library."""
    path = tmp_path / "a.csv"
    path.write_bytes(TEXT.encode("utf-16"))
    data, digest = read_bytes(path)
    assert data == path.read_bytes()
    assert digest == hashlib.sha256(data).hexdigest()


def test_an_endless_line_and_too_many_lines_are_refused() -> None:
    """Hostile text is refused at once."""
    with pytest.raises(InputError, match="characters") as info:
        decode(b"a,b\n" + b"1," * 600_000)
    assert info.value.row == 2
    with pytest.raises(InputError, match="lines"):
        decode(b"\n" * 4_100_000)
