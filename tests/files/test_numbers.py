"""Cells to numbers: decimal marks, thousands separators, doubt refused (common practice)."""

from __future__ import annotations

import numpy as np
import pytest

from mwdlink.errors import InputError
from mwdlink.files.numbers import find_decimal, looks_numeric, read_number, to_numbers


@pytest.mark.parametrize(
    ("cell", "point", "comma"),
    [
        ("1.5", 1.5, None),
        ("1,5", None, 1.5),
        ("1,234", 1234.0, 1.234),
        ("1.234", 1.234, 1234.0),
        ("1,234.5", 1234.5, None),
        ("1.234.567,5", None, 1234567.5),
        ("1 234,5", None, 1234.5),
        ("1'234.5", 1234.5, None),
        ("1\u202f234", 1234.0, 1234.0),
        ("1e-5", 1e-5, 1e-5),
        ("1.0D+05", 1e5, None),
        ("−2.5", -2.5, None),
        (".5", 0.5, None),
        ("5.", 5.0, None),
    ],
)
def test_cells(cell: str, point: float | None, comma: float | None) -> None:
    for decimal, value in ((".", point), (",", comma)):
        read = read_number(cell, decimal)
        assert (None if read is None else read[0]) == value
    assert looks_numeric(cell)


@pytest.mark.parametrize(
    "cell", ["", "nan", "inf", "1_000", "1e999", "١٢", "1.2.3", "0x1f", "--", "12 34", "1,2,3",
             "1e", "1.5%", "9" * 400]
)  # fmt: skip
def test_cells_that_are_no_number(cell: str) -> None:
    """Python's own float would take some of these."""
    for decimal in ".,":
        assert read_number(cell, decimal) is None
        assert to_numbers(["1", cell], decimal).bad.tolist() == [1]


def test_fast_and_careful_ways_agree() -> None:
    """The same column with and without a cell that forces the careful way (derived)."""
    rng = np.random.default_rng(0)
    cells = [repr(float(x)) for x in rng.lognormal(0, 5, 200)]
    fast = to_numbers(cells, ".")
    careful = to_numbers([*cells, "bad"], ".")
    assert np.array_equal(fast.values, careful.values[:-1])
    comma = to_numbers([c.replace(".", ",") for c in cells], ",")
    assert np.array_equal(fast.values, comma.values)


def decide(*cells: str) -> str:
    return find_decimal([list(cells)], range(2, 2 + len(cells)), "x.csv")


def test_the_decimal_mark_is_decided_by_cells_that_can_be_read_one_way_only() -> None:
    assert decide("1.234", "2") == "."
    assert decide("1,234", "0,5") == ","
    assert decide("1,234", "0.5") == "."
    assert decide("1,234,567") == "."
    assert decide("1.234.567") == ","
    assert decide("1.234,5") == ","
    assert decide("1", "2") == "."


def test_contradiction_and_doubt_are_refused() -> None:
    """1,234 alone may be 1.234 or 1234."""
    with pytest.raises(InputError, match="decimal comma") as info:
        decide("0.5", "1.25", "0,5")
    assert info.value.row == 4
    with pytest.raises(InputError, match="1234") as info:
        decide("1,234", "5")
    assert info.value.row == 2
    assert find_decimal([["1,234"]], [2], None, given=",") == ","
