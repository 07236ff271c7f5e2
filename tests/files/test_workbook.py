"""Sheets of a workbook; invented data. Skipped where the optional package is missing."""

from __future__ import annotations

import importlib.util
import io
import zipfile
from pathlib import Path

import numpy as np
import pytest

from mwdlink.errors import InputError
from mwdlink.files.tables import read_any, read_sweep

EXCEL = pytest.mark.skipif(
    importlib.util.find_spec("openpyxl") is None, reason="openpyxl is not installed"
)
REPORT = [
    ["Report of an invented rheometer"],
    ["Temperature", 190, "°C"],
    [],
    ["Point", "omega", "G'", "G''", "Status"],
    [None, "rad/s", "kPa", "kPa", None],
    [1, 0.1, 10, 100.5, "ok"],
    [2, 1, 0.3, 900, "ok"],
    [3, 10, 3000, 5000, "ok"],
]


def workbook(**sheets: list[list[object]]) -> bytes:
    openpyxl = pytest.importorskip("openpyxl")
    book = openpyxl.Workbook()
    book.remove(book.active)
    for title, rows in sheets.items():
        sheet = book.create_sheet(title)
        for row in rows:
            sheet.append(row)
    stream = io.BytesIO()
    book.save(stream)
    return stream.getvalue()


@EXCEL
def test_a_sheet_is_read_like_a_text_table(tmp_path: Path) -> None:
    """Numbers as written; rows as the sheet counts them (derived)."""
    path = tmp_path / "run.xlsx"
    path.write_bytes(workbook(Notes=[["nothing here"]], Run=REPORT))
    s = read_sweep(path)
    assert s.storage.tolist() == [10e3, 0.3 * 1e3, 3000e3]
    assert s.rows is not None and s.rows.tolist() == [6, 7, 8]
    assert s.temperature_C == 190


@EXCEL
def test_a_sheet_can_be_named(tmp_path: Path) -> None:
    """Two sheets hold sweeps; the name decides, and a wrong name lists the sheets."""
    path = tmp_path / "run.xlsx"
    other = [*REPORT[:5], *([p, w, 2 * a, b, s] for p, w, a, b, s in REPORT[5:])]  # type: ignore
    path.write_bytes(workbook(A=REPORT, B=other))
    assert read_sweep(path, sheet="B").storage[0] == 20e3
    with pytest.raises(InputError, match="2 sweeps"):
        read_sweep(path)
    with pytest.raises(InputError, match="'A', 'B'"):
        read_sweep(path, sheet="C")


@EXCEL
def test_cells_that_are_no_numbers_are_named(tmp_path: Path) -> None:
    """Row and column as in the sheet."""
    rows = [list(r) for r in REPORT]
    rows[6][2] = "OVL"
    path = tmp_path / "run.xlsx"
    path.write_bytes(workbook(Run=rows))
    with pytest.raises(InputError, match="OVL") as info:
        read_sweep(path)
    assert (info.value.row, info.value.column) == (7, "G'")


@EXCEL
def test_damaged_workbooks_are_refused(tmp_path: Path) -> None:
    """40 seeded mutations: an answer or an `InputError` (derived)."""
    data = workbook(Run=REPORT)
    path = tmp_path / "run.xlsx"
    for i in range(40):
        rng = np.random.default_rng([3, i])
        raw = bytearray(data)
        for _ in range(int(rng.integers(1, 20))):
            raw[int(rng.integers(4, len(raw)))] = int(rng.integers(256))
        path.write_bytes(bytes(raw) if i % 4 else data[: int(rng.integers(40, len(data)))])
        try:
            read_any(path)
        except InputError as error:
            assert error.path and error.remedy


def test_a_missing_package_is_named(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """What to install, or to save as CSV."""
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w") as archive:
        archive.writestr("xl/workbook.xml", "")
    path = tmp_path / "run.xlsx"
    path.write_bytes(stream.getvalue())
    monkeypatch.setattr(importlib.util, "find_spec", lambda name: None)
    with pytest.raises(InputError, match="openpyxl") as info:
        read_any(path)
    assert "CSV" in str(info.value.remedy)


def test_an_archive_that_unpacks_to_too_much_is_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The sizes are read from the directory, nothing is unpacked."""
    monkeypatch.setattr("mwdlink.files.workbook.MAX_BYTES", 1_000_000)
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("xl/sheet.xml", b"\0" * 3_000_000)
    path = tmp_path / "run.xlsx"
    path.write_bytes(stream.getvalue())
    with pytest.raises(InputError, match="unpacks to 3 MB"):
        read_any(path)


@EXCEL
def test_the_same_rows_of_two_sheets_ask_for_the_sheet(tmp_path: Path) -> None:
    """Two sheets with a sweep each at one temperature: --sheet parts them, --omit cannot."""
    path = tmp_path / "run.xlsx"
    path.write_bytes(workbook(First=REPORT, Second=REPORT))
    with pytest.raises(InputError, match="2 sweeps") as caught:
        read_sweep(path, temperature_C=190.0)
    assert caught.value.remedy is not None and "--sheet" in caught.value.remedy
    assert read_sweep(path, sheet="Second").storage[0] == 10e3
