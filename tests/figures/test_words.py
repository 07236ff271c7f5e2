"""Numbers, times and headers as words. Compared with what each rule says (derived)."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from mwdlink.figures.columns import band, find, numbers
from mwdlink.figures.decay import duration
from mwdlink.figures.style import grouped
from mwdlink.figures.words import listed, number, percent, short, split_unit, with_interval


@pytest.mark.parametrize(
    ("x", "text"),
    [
        (0.01234, "0.0123"),
        (12.34, "12.3"),
        (1234.5, "1230"),
        (12345, "12\u202f300"),
        (99999, "1.00×10⁵"),
        (1.234e6, "1.23×10⁶"),
        (1.234e-7, "1.23×10⁻⁷"),
        (-5.0, "−5.00"),
        (0, "0"),
        (None, "not known"),
        (float("nan"), "not known"),
        (0.99951, "1.00"),
        (True, "yes"),
    ],
)
def test_three_figures(x, text):
    assert number(x) == text


def test_round_numbers_lose_their_noughts():
    assert [short(x) for x in (0.01, 100.0, 1e-4, 1.5e6, 190.0, 0.7)] == [
        "0.01",
        "100",
        "1×10⁻⁴",
        "1.5×10⁶",
        "190",
        "0.7",
    ]
    assert percent(0.52) == "52 %" and percent(1.0) == "100 %"


def test_intervals_and_bounds_in_words():
    x = {"value": 1.2e5, "low": 1.1e5, "high": 1.3e5, "level": 0.9, "status": "lower_bound"}
    assert with_interval(x, "g/mol") == "at least 1.20×10⁵ (1.10×10⁵ to 1.30×10⁵) g/mol"
    assert with_interval({**x, "status": "assumed"}).endswith(", assumed")
    assert with_interval({**x, "low": None, "status": "resolved"}) == "1.20×10⁵"


def test_waiting_times_as_people_say_them():
    assert [duration(x) for x in (0.095, 60.0, 300.0, 22600.0, 3.2e5)] == [
        "0.095 s",
        "60 s",
        "5 min",
        "6.3 h",
        "3.7 d",
    ]


def test_tick_numbers():
    assert [grouped(x) for x in (0.0, 1500, 150000, 2e6, -0.5, 2e-5)] == [
        "0",
        "1500",
        "150\u202f000",
        "2×10⁶",
        "−0.5",
        "2×10⁻⁵",
    ]


def test_lists_and_keys():
    assert [listed(["a"]), listed(["a", "b"]), listed(["a", "b", "c"])] == [
        "a",
        "a and b",
        "a, b and c",
    ]
    assert split_unit("eta0_Pa_s") == ("eta0", "Pa s") and split_unit("MFR_g_per_10min") == (
        "MFR",
        "g/10min",
    )
    assert split_unit("dispersity") == ("dispersity", "")


def test_columns_by_whole_names():
    """House rule: never by a part of a word; case tells G from g."""
    table = pd.DataFrame(
        {
            "G [Pa]": [1.0],
            "g [Pa]": [2.0],
            "G' low [Pa]": [3.0],
            "G' high [Pa]": [4.0],
            "a_T [-]": [5.0],
            "name": ["x"],
        }
    )
    assert (
        find(table, "G") == "G [Pa]"
        and find(table, "g") == "g [Pa]"
        and find(table, "aT", "a t") == "a_T [-]"
    )
    assert find(table, "G'") is None and find(None, "G") is None
    low, high = band(table, "G'")
    assert (low[0], high[0]) == (3.0, 4.0)
    assert numbers(table, "name") is None
    assert numbers(pd.DataFrame({"x": [np.nan]}), "x") is None
