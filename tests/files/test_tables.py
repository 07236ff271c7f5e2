"""Every kind of input table as laboratories export it; all data are invented.

Expected numbers are derived from the cells as written; layouts are those of common practice.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from mwdlink.chains.distribution import Distribution
from mwdlink.errors import InputError
from mwdlink.files.source import parse_rows, rows_text
from mwdlink.files.tables import (
    find_kind,
    read_any,
    read_distribution,
    read_flow_curve,
    read_relaxation,
    read_spectrum,
    read_sweep,
    read_sweeps,
)
from mwdlink.files.temperature import parse_temperature

Write = Callable[..., Path]
TWO_PI = 2 * math.pi
PLAIN = "omega [rad/s],G' [Pa],G'' [Pa]\n0.1,10,100\n1,200,900\n10,3000,5000\n"
GPC = "M [g/mol],{}\n1000,0\n10000,1\n100000,1.5\n1000000,0\n"


@pytest.fixture
def write(tmp_path: Path) -> Write:
    def put(text: str | bytes, encoding: str = "utf-8", name: str = "table.csv") -> Path:
        path = tmp_path / name
        path.write_bytes(text if isinstance(text, bytes) else text.encode(encoding))
        return path

    return put


def codes(found: Any) -> set[str]:
    return {w.code for w in found.warnings}


# -- sweeps: which columns ------------------------------------------------------------------------
def test_a_plain_sweep(write: Write) -> None:
    s = read_sweep(write(PLAIN))
    assert s.omega.tolist() == [0.1, 1, 10]
    assert s.storage.tolist() == [10, 200, 3000]
    assert s.loss.tolist() == [100, 900, 5000]
    assert s.rows is not None and s.rows.tolist() == [2, 3, 4]
    assert s.label == "table" and s.warnings == () and s.temperature_C is None


@pytest.mark.parametrize(
    ("head", "row"),
    [
        ("f [Hz],|eta*| [Pa s],tan delta", (2.0, 50.0, 0.75)),
        ("f [Hz],|eta*| [Pa s],delta [deg]", (2.0, 50.0, math.degrees(math.atan(0.75)))),
        ("f [Hz],|eta*| [kPa s],delta [rad]", (2.0, 0.05, math.atan(0.75))),
        ("f [Hz],eta' [Pa s],eta'' [Pa s]", (2.0, 30.0, 40.0)),
        ("f [Hz],G' [Pa],tan delta", (2.0, 40 * 2 * TWO_PI, 0.75)),
        ("f [Hz],G'' [Pa],delta [rad]", (2.0, 30 * 2 * TWO_PI, math.atan(0.75))),
        ("f [Hz],|G*| [MPa],delta [°]", (2.0, 1e-4 * TWO_PI, math.degrees(math.atan(0.75)))),
    ],
)
def test_every_pair_of_columns_that_gives_both_moduli(
    head: str, row: tuple[float, ...], write: Write
) -> None:
    """|eta*| = 50 Pa s at tan delta = 3/4: eta' = 30, eta'' = 40 Pa s (derived)."""
    lines = [",".join(repr(x) for x in (row[0] * k, *row[1:])) for k in (1, 2, 3)]
    s = read_sweep(write("\n".join([head, *lines])))
    omega = 2.0 * TWO_PI
    assert s.omega[0] == pytest.approx(omega, rel=1e-14)
    assert s.storage[0] == pytest.approx(40 * omega, rel=1e-12)
    assert s.loss[0] == pytest.approx(30 * omega, rel=1e-12)


def test_sigmas_strain_torque_and_temperature(write: Write) -> None:
    s = read_sweep(
        write(
            "T [K];omega [rad/s];G' [kPa];G'' [kPa];sigma' [%];sigma'' [-];"
            "strain [%];torque [µN m]\n"
            "463.15;1;1;2;3;0.04;1;5\n463.15;2;1;2;3;0.04;1;5\n463.15;3;1;2;3;0.04;1;5\n"
        )
    )
    assert s.temperature_C == pytest.approx(190)
    assert s.sigma_storage is not None and s.sigma_storage[0] == pytest.approx(0.03)
    assert s.sigma_loss is not None and s.sigma_loss[0] == 0.04
    assert s.strain is not None and s.strain[0] == pytest.approx(0.01)
    assert s.torque is not None and s.torque[0] == pytest.approx(5e-6)


def test_optional_columns_in_doubt_are_left_aside_and_said(write: Write) -> None:
    s = read_sweep(write("omega [rad/s],G' [Pa],G'' [Pa],strain\n1,1,2,1\n2,1,2,1\n3,1,2,1\n"))
    assert s.strain is None and "column_left_aside" in codes(s)


def test_units_are_assumed_and_said_or_refused(write: Write) -> None:
    s = read_sweep(write("omega,G',G''\n1,1,2\n2,1,2\n3,1,2\n"))
    assert codes(s) == {"unit_assumed"}
    for head in ("Frequency,G' [Pa],G'' [Pa]", "Frequency [1/s],G' [Pa],G'' [Pa]",
                 "omega [Hz],G' [Pa],G'' [Pa]", "f [Hz],G' [foo],G'' [Pa]"):  # fmt: skip
        with pytest.raises(InputError) as info:
            read_sweep(write(head + "\n1,1,2\n2,1,2\n3,1,2\n"))
        assert info.value.row == 1 and "--column" in str(info.value.remedy)
    with pytest.raises(InputError, match="degrees or radians"):
        read_sweep(write("f [Hz],|eta*| [Pa s],delta\n1,1,1\n2,1,1\n3,1,1\n"))
    s = read_sweep(write("f [Hz],|eta*| [Pa s],delta\n1,1,45\n2,1,45\n3,1,45\n"))
    assert s.tan_delta[0] == pytest.approx(1) and "unit_assumed" in codes(s)


def test_two_frequency_columns_must_agree(write: Write) -> None:
    head = "Frequency [Hz],Angular frequency [rad/s],G' [Pa],G'' [Pa]\n"
    s = read_sweep(write(head + "".join(f"{f},{f * TWO_PI:.4f},1,2\n" for f in (1, 2, 3))))
    assert s.omega[0] == pytest.approx(TWO_PI, rel=1e-4)
    with pytest.raises(InputError, match="do not agree"):
        read_sweep(write(head + "1,1,1,2\n2,2,1,2\n3,3,1,2\n"))


def test_further_columns_that_contradict_the_moduli_are_said(write: Write) -> None:
    head = "omega [rad/s],G' [Pa],G'' [Pa],|eta*| [Pa s]\n"
    assert codes(read_sweep(write(head + "1,3,4,5\n2,6,8,5\n3,9,12,5\n"))) == set()
    found = read_sweep(write(head + "1,3,4,5000\n2,6,8,5000\n3,9,12,5000\n"))
    assert "columns_disagree" in codes(found)


def test_duplicated_headers_are_refused(write: Write) -> None:
    with pytest.raises(InputError, match="2 columns are G'") as info:
        read_sweep(write("omega [rad/s],G' [Pa],G' [Pa],G'' [Pa]\n1,1,2,3\n2,1,2,3\n3,1,2,3\n"))
    assert "#2" in str(info.value.remedy)
    s = read_sweep(
        write("omega [rad/s],G' [Pa],G' [Pa],G'' [Pa]\n1,1,2,3\n2,1,2,3\n3,1,2,3\n"),
        columns={"G'": "#3"},
    )
    assert s.storage[0] == 2


def test_columns_the_user_names(write: Write) -> None:
    text = "a,b,c [MPa],d\n1,2,3,4\n2,3,4,5\n3,4,5,6\n"
    with pytest.raises(InputError, match="no column for omega"):
        read_sweep(write(text))
    s = read_sweep(write(text), columns={"f": "a:Hz", "G'": "b:kPa", "G''": "c"})
    assert s.omega[0] == pytest.approx(TWO_PI)
    assert (s.storage[0], s.loss[0]) == (2e3, 3e6)
    bare = read_sweep(
        write("1 2 3\n2 3 4\n3 4 5\n"),
        columns={"omega": "#1:rad/s", "G'": "#2:Pa", "G''": "#3:Pa"},
    )
    assert bare.loss.tolist() == [3, 4, 5]


# -- layouts --------------------------------------------------------------------------------------
REPORT = """Report of an invented rheometer
Sample;resin Q7
Operator;nobody
Temperature;190;°C
Geometry;25;1

Point;Frequenz;Speichermodul;Verlustmodul;Status
;[Hz];[kPa];[kPa];
1;0,1;10,5;100,25;ok
2;1;2.000,5;900;ok

3;10;3.000,5;5000;ok
"""


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16", "cp1252"])
@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
def test_a_report_with_preamble_units_row_and_decimal_comma(
    encoding: str, end: str, write: Write
) -> None:
    s = read_sweep(write(REPORT.replace("\n", end), encoding))
    assert s.omega == pytest.approx(np.array([0.1, 1, 10]) * TWO_PI)
    assert s.storage.tolist() == [10500, 2000500, 3000500]
    assert s.rows is not None and s.rows.tolist() == [9, 10, 12]
    assert s.temperature_C == 190
    assert "Operator;nobody" in s.comments
    assert {"unit_converted", "thousands_separators", "temperature_from_preamble"} <= codes(s)


@pytest.mark.parametrize(
    "text",
    [
        "# invented\n# omega [rad/s] G' [Pa] G'' [Pa]\n0.1 10 100\n1 200 900\n10 3000 5000\n",
        "#omega\tG'\tG''\n0.1\t10\t100\n1\t200\t900\n10\t3000\t5000\n",
        "sep=;\nomega [rad/s];G' [Pa];G'' [Pa]\n0,1;10;100\n1;200;900\n10;3000;5000\n",
        "omega [rad/s]  G' [Pa]  G'' [Pa]\n 0.1   10  100\n 1    200  900\n10   3000 5000\n",
        "omega [rad/s] G' [Pa] G'' [Pa]\n0,1 10,0 100,5\n1 200 900,5\n10 3000 5000,5\n"
        .replace("100,5", "100").replace("900,5", "900").replace("5000,5", "5000"),
        '"omega [rad/s]","G\' [Pa]","G"" [Pa]"\n"0,1","10","100"\n"1","200","900"\n"10","3000",'
        '"5000"\n',
        'omega [rad/s],G\' [Pa],G" [Pa]\n0.1,10,100\n1,200,900\n10,3000,5000\n',
        '"omega\n[rad/s]","G\'\n[Pa]","G\'\'\n[Pa]"\n0.1,10,100\n1,200,900\n10,3000,5000\n',
        "omega|G'|G''\nrad/s|Pa|Pa\n0.1|10|100\n1|200|900\n10|3000|5000\n",
        "omega [rad/s],G' [Pa],G'' [Pa],\n0.1,10,100,\n1,200,900,\n10,3000,5000,\n,,,\n,,,\n",
        "G'' [Pa],x,G' [Pa],omega [rad/s]\n100,a,10,0.1\n900,b,200,1\n5000,c,3000,10\n",
        "\n\n\nomega [rad/s],G' [Pa],G'' [Pa]\n\n0.1,10,100\n\n\n1,200,900\n10,3000,5000\n\n"
        "End of the invented report\n",
        PLAIN.replace("\n", "\n# a remark\n"),
        PLAIN.rstrip("\n") + "\x1a",
    ],
)  # fmt: skip
def test_layouts(text: str, write: Write) -> None:
    """The same three points in fourteen layouts."""
    s = read_sweep(write(text))
    assert s.omega.tolist() == [0.1, 1, 10]
    assert s.storage.tolist() == [10, 200, 3000]
    assert s.loss.tolist() == [100, 900, 5000]


def test_comments_are_kept(write: Write) -> None:
    s = read_sweep(write("# lot: 7 (invented)\n" + PLAIN))
    assert s.comments == ("lot: 7 (invented)",)


# -- cells that cannot be used --------------------------------------------------------------------
OVERLOAD = (
    "omega [rad/s];G' [Pa];G'' [Pa]\n0.1;10;100\n1;OVL;OVL\n2;;\n3;OVL;7\n10;200;900\n20;300;950\n"
)


def test_cells_that_are_no_numbers_are_named_and_grouped(write: Write) -> None:
    with pytest.raises(InputError) as info:
        read_sweep(write(OVERLOAD))
    error = info.value
    assert (error.row, error.column) == (3, "G' [Pa]")
    assert "'OVL' is no number in \"G' [Pa]\", rows 3, 5 (2 cells)" in error.message
    assert 'there is no number in "G\' [Pa]", row 4' in error.message
    assert "--omit 3-5 or --omit-unreadable" in str(error.remedy)


def test_unreadable_rows_are_left_out_on_request_and_listed(write: Write) -> None:
    s = read_sweep(write(OVERLOAD), omit_unreadable=True)
    assert s.rows is not None and s.rows.tolist() == [2, 6, 7]
    text = next(w.text for w in s.warnings if w.code == "rows_unreadable")
    assert "rows 3-5 (3 of 6 rows)" in text


@pytest.mark.parametrize("omit", ["3-5", {3, 4, 5}, [3, 4, 5], "3,4;5"])
def test_rows_are_left_out_by_number_and_listed(omit: Any, write: Write) -> None:
    s = read_sweep(write(OVERLOAD), omit=omit)
    assert s.rows is not None and s.rows.tolist() == [2, 6, 7]
    assert "rows 3-5" in next(w.text for w in s.warnings if w.code == "rows_left_out")


def test_rows_in_words_and_back() -> None:
    assert parse_rows("3, 17-19") == {3, 17, 18, 19}
    assert rows_text([19, 3, 17, 18]) == "rows 3, 17-19"
    for bad in ("x", "0", "5-3", "1-9999999999"):
        with pytest.raises(InputError, match="no row"):
            parse_rows(bad)
    with pytest.raises(InputError, match="from 1"):
        parse_rows([0])


@pytest.mark.parametrize("cell", ["0", "-5", "1e-999"])
def test_moduli_must_be_positive(cell: str, write: Write) -> None:
    with pytest.raises(InputError, match="not above zero") as info:
        read_sweep(write(PLAIN.replace("200", cell)), omit_unreadable=True)
    assert (info.value.row, info.value.column) == (3, "G' [Pa]")
    assert "--omit 3" in str(info.value.remedy)


@pytest.mark.parametrize("cell", ["nan", "inf", "1e999", "1_0", "text", ""])
def test_cells_that_are_no_finite_numbers(cell: str, write: Write) -> None:
    with pytest.raises(InputError) as info:
        read_sweep(write(PLAIN.replace("200", cell)))
    assert (info.value.row, info.value.column) == (3, "G' [Pa]")


@pytest.mark.parametrize(
    ("text", "word"),
    [
        ("omega [rad/s],G' [Pa],G'' [Pa]\n1,2,3\n2,3,4\n", "too few"),
        ("omega [rad/s],G' [Pa],G'' [Pa]\n1,2,3\n1,3,4\n1,4,5\n", "same frequency"),
        ("omega [rad/s],G' [Pa],G'' [Pa]\n", "no table"),
        ("omega [rad/s],G' [Pa]\n1,2\n2,3\n3,4\n", "no column for G''"),
        ("a story\nabout nothing\n", "no table"),
        ("omega [rad/s],G' [Pa],G'' [Pa]\n1,2,3\n2,3,4,5\n3,4,5\n", "4 cells under 3"),
        ("omega [rad/s],G' [Pa],G'' [Pa]\n0,1,2,5,3,5\n0,2,2,5,3,5\n0,3,2,5,3,5\n", "6 cells"),
        ("1,2,3\nomega [rad/s],G' [Pa],G'' [Pa]\n2,3,4\n3,4,5\n4,5,6\n", "above the header"),
        ("omega [rad/s];G' [Pa];G'' [Pa]\n1;2,5;3\n2;3.5;4\n3;4;5\n", "decimal"),
        ("omega [rad/s];G' [Pa];G'' [Pa]\n1;2,500;3\n2;3,500;4\n3;4,500;5\n", "may be 2.500"),
        ("t [s],G [Pa]\n1,3\n2,2\n3,1\n", "relaxation curve"),
        ("omega [rad/s],G' [Pa],G'' [Pa],T\n1,2,3,463\n2,3,4,463\n3,4,5,463\n", "C or K"),
        ("omega [rad/s],G' [Pa],G'' [Pa],T [C]\n1,2,3,-300\n2,3,4,1\n3,4,5,1\n", "impossible"),
        ("omega [rad/s],|eta*| [Pa s],delta [deg]\n1,2,91\n2,3,80\n3,4,70\n", "no positive G'"),
        ("omega [rad/s],G' [Pa],G'' [Pa],sigma' [-]\n1,2,3,3\n2,3,4,3\n3,4,5,3\n", "more than the"),
        ("omega [rad/s],G' [Pa],G'' [Pa]\n[rad/s],[kPa],[Pa]\n1,2,3\n2,3,4\n3,4,5\n", "unknown"),
    ],
)  # fmt: skip
def test_tables_that_cannot_be_a_sweep(text: str, word: str, write: Write) -> None:
    """Each is refused with place and remedy."""
    path = write(text)
    with pytest.raises(InputError, match=word) as info:
        read_sweep(path)
    assert info.value.path == str(path)
    assert info.value.remedy
    assert info.value.row is not None


def test_unsorted_and_repeated_frequencies_are_said(write: Write) -> None:
    s = read_sweep(write("omega [rad/s],G' [Pa],G'' [Pa]\n1,2,3\n3,4,5\n2,3,4\n3,6,7\n"))
    assert s.storage.tolist() == [2, 3, 5]
    assert codes(s) == {"points_sorted", "points_merged"}


# -- several temperatures and blocks --------------------------------------------------------------
def test_temperatures_within_a_kelvin_are_one(write: Write) -> None:
    """Steps at 189.8 and 190.1 C, as real ovens give them."""
    points = [(150, 1), (150.2, 2), (150.1, 3), (189.8, 1), (189.8, 2), (190.1, 3), (190.1, 4)]
    text = "T [C],omega [rad/s],G' [Pa],G'' [Pa]\n" + "".join(
        f"{t},{w},{w},{2 * w}\n" for t, w in points
    )
    cold, hot = read_sweeps(write(text))
    assert (len(cold), len(hot)) == (3, 4)
    assert hot.temperature_C == pytest.approx(189.95)
    assert "temperatures_joined" in codes(hot)
    assert read_sweep(write(text), temperature_C=190).temperature_C == hot.temperature_C
    with pytest.raises(InputError, match="2 sweeps"):
        read_sweep(write(text))


BLOCKS = """Sample: invented
Temperature: 150 °C
omega [rad/s];G' [Pa];G'' [Pa]
1;10;20
2;20;30
3;30;40

Temperature: 170 °C
omega [rad/s];G' [Pa];G'' [Pa]
1;1;2
2;2;3
3;3;4
4;4;5
"""


def test_several_blocks_with_their_own_headers(write: Write) -> None:
    a, b = read_sweeps(write(BLOCKS))
    assert (a.temperature_C, len(a), b.temperature_C, len(b)) == (150, 3, 170, 4)
    assert b.rows is not None and b.rows.tolist() == [10, 11, 12, 13]
    assert "170" in b.label


def test_several_blocks_under_one_header(write: Write) -> None:
    text = "omega [rad/s];G' [Pa];G'' [Pa]\n\nT = 150 C\n1;1;2\n2;2;3\n3;3;4\n\nT = 443.15 K\n"
    a, b = read_sweeps(write(text + "1;1;2\n2;2;3\n3;3;4\n"))
    assert (a.temperature_C, b.temperature_C) == (150, pytest.approx(170))


def test_a_repeat_after_a_blank_line_is_a_sweep_of_its_own(write: Write) -> None:
    """Before and after: not to be averaged away."""
    rows = "1;1;2\n2;2;3\n3;3;4\n"
    found = read_sweeps(write(f"omega [rad/s];G' [Pa];G'' [Pa]\n{rows}\n{rows}"))
    assert [len(s) for s in found] == [3, 3]


def test_steps_of_one_temperature_in_two_blocks_are_joined(write: Write) -> None:
    text = (
        BLOCKS.replace("150", "189.8")
        .replace("170", "190.1")
        .replace("1;1;2\n2;2;3\n3;3;4\n4;4;5\n", "4;1;2\n5;2;3\n6;3;4\n")
    )
    (s,) = read_sweeps(write(text))
    assert len(s) == 6 and s.temperature_C == pytest.approx(189.95)
    assert "temperatures_joined" in codes(s)


def test_a_temperature_ramp_is_no_sweep(write: Write) -> None:
    text = "T [C],omega [rad/s],G' [Pa],G'' [Pa]\n" + "".join(
        f"{150 + 0.5 * k},{k + 1},1,2\n" for k in range(20)
    )
    with pytest.raises(InputError, match="ramp"):
        read_sweeps(write(text))


@pytest.mark.parametrize(
    ("line", "value"),
    [
        ("Temperature: 190 °C", 190),
        ("Temperature;190;°C", 190),
        ("Temperature [°C];190", 190),
        ("T = 463.15 K", 190),
        ("Temp.\t189,8\t[C]", 189.8),
        ("T = 190", 190),
        ("T = 463", None),
        ("Temperature sweep from 150 to 190 C", None),
        ("Room temperature: 23 C", None),
        ("t = 190 s", None),
        ("Temperature: 190 bar", None),
    ],
)
def test_temperatures_stated_above_the_table(line: str, value: float | None) -> None:
    found = parse_temperature(line)
    assert found is None if value is None else found == pytest.approx(value)


# -- distributions --------------------------------------------------------------------------------
@pytest.mark.parametrize(
    ("header", "kind"),
    [
        ("dW/dlog10M", "dW/dlog10M"), ("dW/dlogM", "dW/dlog10M"), ("dW/dlnM", "dW/dlnM"),
        ("dW/dM", "dW/dM"), ("slice weight", "slice_weight"), ("dN/dlog10M", "dN/dlog10M"),
        ("dN/dlnM", "dN/dlnM"), ("dN/dM", "dN/dM"), ("slice number", "slice_number"),
    ],
)  # fmt: skip
def test_every_kind_of_distribution(header: str, kind: str, write: Write) -> None:
    """The reader passes on the arrays and the kind (derived from the arrays themselves)."""
    d = read_distribution(write(GPC.format(header)), calibration="absolute")
    mass, values = [1e3, 1e4, 1e5, 1e6], [0, 1, 1.5, 0]
    expected = Distribution.from_table(mass, values, kind=kind, calibration="absolute")
    assert np.array_equal(d.mass, expected.mass)
    assert d.label == "table"


def test_cumulative_and_percent(write: Write) -> None:
    text = "log10 M,cumulative W [%]\n3,0\n4,20\n5,90\n6,100\n"
    d = read_distribution(write(text), calibration="absolute")
    assert d.mass == pytest.approx([0.2, 0.7, 0.1])


@pytest.mark.parametrize(
    "head", ["M [kg/mol]", "M [kDa]", "log10 M [kg/mol]", "ln M [kg/mol]", "log(M/(kg/mol))"]
)
def test_axes_and_their_units(head: str, write: Write) -> None:
    """M of 1 to 1000 kg/mol in each writing (derived)."""
    mass = np.array([1.0, 10.0, 100.0, 1000.0])
    axis = np.log(mass) if "ln" in head else np.log10(mass) if "log" in head else mass
    rows = "".join(f"{a!r},{v}\n" for a, v in zip(axis.tolist(), (0, 1, 1, 0), strict=True))
    d = read_distribution(write(f"{head},dW/dlog10M\n{rows}"))
    assert d.molar_mass == pytest.approx(mass * 1e3)


def test_log_is_taken_as_log10_and_said(write: Write) -> None:
    d = read_distribution(write("log M,dW/dlogM\n3,0\n4,1\n5,1\n6,0\n"))
    assert d.molar_mass[0] == pytest.approx(1e3)
    assert sum(w.code == "log_taken_as_log10" for w in d.warnings) == 2
    assert "calibration_unstated" in codes(d)


def test_a_bare_w_is_ambiguous(write: Write) -> None:
    for name in ("w", "W", "Weight fraction", "w(M)"):
        with pytest.raises(InputError, match="may be") as info:
            read_distribution(write(GPC.format(name)))
        assert info.value.column == name and "--column" in str(info.value.remedy)
    d = read_distribution(write(GPC.format("W")), columns={"dW/dlnM": "W"}, calibration="absolute")
    assert d.Mw > d.Mn


def test_elution_order_and_light_scattering(write: Write) -> None:
    falling = "M [g/mol],dW/dlog10M\n1000000,0\n100000,1.5\n10000,1\n1000,0\n"
    d = read_distribution(write(falling), calibration="absolute")
    up = read_distribution(write(GPC.format("dW/dlog10M")), calibration="absolute")
    assert np.array_equal(d.mass, up.mass) and codes(d) == codes(up)
    mixed = "M [g/mol],dW/dlog10M\n1000000,0\n10000,1\n100000,1.5\n1000,0\n"
    assert "molar_mass_sorted" in codes(read_distribution(write(mixed)))


def test_ln_and_log10_mixed_up_is_warned_of(write: Write) -> None:
    x = np.linspace(3, 7, 60)
    y = np.exp(-0.5 * ((x - 5) / 0.5) ** 2) / (0.5 * math.sqrt(TWO_PI)) / math.log(10)
    rows = "".join(f"{10**a!r},{b!r}\n" for a, b in zip(x.tolist(), y.tolist(), strict=True))
    d = read_distribution(write("M [g/mol],dW/dlog10M\n" + rows))
    assert "ln_log10_mixup" in codes(d)


def test_axes_and_curves_of_one_file_must_agree(write: Write) -> None:
    good = "M,log M,dW/dlogM,Cum W\n1e3,3,0,0\n1e4,4,1,0.25\n1e5,5,1,0.75\n1e6,6,0,1\n"
    assert "several_curves" in codes(read_distribution(write(good)))
    with pytest.raises(InputError, match="do not agree"):
        read_distribution(write(good.replace("M,log M", "M,ln M")))
    swapped = "M,dW/dlogM,Cum W\n1e3,0,0\n1e4,0,0\n1e5,0,0\n1e6,1,0.5\n1e7,0,0.6\n1e8,0,1\n"
    with pytest.raises(InputError, match="two curves"):
        read_distribution(write(swapped))
    d = read_distribution(write(swapped), columns={"cumulative W": "Cum W"})
    assert d.molar_mass.size == 5


def test_unequal_slices_are_said(write: Write) -> None:
    text = "Elution volume [mL],M,Area\n10,1e6,1\n11,1e5,2\n12,1e4,2\n{},1e3,1\n"
    assert "slices_unequal" not in codes(read_distribution(write(text.format(13))))
    assert "slices_unequal" in codes(read_distribution(write(text.format(15))))


@pytest.mark.parametrize(
    ("text", "word"),
    [
        ("log M,dW/dlogM\n7,0\n9,1\n11,1\n13,0\n", "ln M"),
        ("M,dW/dlogM\n3,0\n4,1\n5,1\n6,0\n", "log10 M"),
        ("M [g/mol],dW/dlogM\n0,0\n1000,1\n2000,1\n", "not above zero"),
        ("M [g/mol],dW/dlogM\n1000,0\n2000,0\n3000,0\n", "no weight"),
        ("M [g/mol],dW/dlogM\n1000,-1\n2000,-1\n3000,-1\n", "no positive weight"),
        ("M [g/mol],colour\n1000,1\n2000,2\n3000,1\n", "no column for dW/dlog10M"),
        ("M [g/mol],dW/dlogM\n1000,1\n2000,2\n", "at least 3"),
        (PLAIN, "columns are those of a sweep"),
    ],
)
def test_tables_that_are_no_distribution(text: str, word: str, write: Write) -> None:
    path = write(text)
    with pytest.raises(InputError, match=word) as info:
        read_distribution(path)
    assert info.value.path == str(path) and info.value.remedy and info.value.row


def test_our_own_tables_are_accepted_again(write: Write) -> None:
    """Low and high columns belong to nobody; a written distribution comes back."""
    d = read_distribution(write(GPC.format("dW/dlog10M")), calibration="absolute")
    frame = d.to_frame()
    frame["dW/dlog10M low"] = frame["dW/dlog10M"] * 0.9
    frame["dW/dlog10M high"] = frame["dW/dlog10M"] * 1.1
    again = read_distribution(write(frame.to_csv(index=False)), calibration="absolute")
    assert again.molar_mass == pytest.approx(d.molar_mass)


# -- the other kinds ------------------------------------------------------------------------------
def test_relaxation_flow_and_spectrum(write: Write) -> None:
    g = read_relaxation(write("t [ms],G(t) [kPa],T [C]\n1,3,150\n2,2,150\n3,1,150\n"))
    assert g.time == pytest.approx([1e-3, 2e-3, 3e-3]) and g.modulus[0] == 3000
    assert g.temperature_C == 150
    f = read_flow_curve(write("# T = 170 C\nShear rate [1/s];eta [kPa s]\n1;2,5\n2;2\n3;1,5\n"))
    assert f.viscosity.tolist() == [2500, 2000, 1500] and f.temperature_C == 170
    s = read_spectrum(write("tau [s],g [Pa]\n10,1\n1,2\n10,3\n0.1,0\n"))
    assert s.tau.tolist() == [0.1, 1, 10] and s.strength.tolist() == [0, 2, 4]
    with pytest.raises(InputError, match="below zero"):
        read_spectrum(write("tau [s],g [Pa]\n10,1\n1,-2\n"))
    with pytest.raises(InputError, match="one curve"):
        read_relaxation(write("t [s],G [Pa],T [C]\n1,3,150\n2,2,170\n3,1,190\n"))
    with pytest.raises(InputError, match="too few"):
        read_relaxation(write("t [s],G [Pa]\n1,3\n2,2\n"))


@pytest.mark.parametrize(
    ("text", "kind"),
    [
        (PLAIN, "sweep"),
        (GPC.format("dW/dlnM"), "distribution"),
        ("t [s],G [Pa]\n1,3\n2,2\n3,1\n", "relaxation curve"),
        ("rate [1/s],eta [Pa s]\n1,3\n2,2\n3,1\n", "flow curve"),
        ("tau [s],g [Pa]\n1,3\n2,2\n3,1\n", "spectrum"),
    ],
)
def test_the_kind_is_found(text: str, kind: str, write: Write) -> None:
    path = write(text)
    assert find_kind(path) == kind
    found = read_any(path, calibration="absolute", temperature_C=None)
    assert type(found).__name__.lower() == kind.replace(" ", "")


def test_many_rows_are_read_in_time(write: Write, full: bool) -> None:
    """100,000 rows: the target is 2 s; asserted with --full only, where the machine is quiet."""
    import time

    n = 100_000 if full else 20_000
    omega = np.geomspace(1e-3, 1e3, n)
    rows = "\n".join(f"{w!r},{w**0.5!r},{w**0.4!r}" for w in omega.tolist())
    path = write("omega [rad/s],G' [Pa],G'' [Pa]\n" + rows)
    start = time.process_time()
    s = read_sweep(path)
    spent = time.process_time() - start
    assert np.array_equal(s.omega, omega)
    if full:
        assert spent <= 2.0


def test_hostile_tables_are_refused(write: Write) -> None:
    with pytest.raises(InputError, match="cells"):
        read_sweep(write(",".join(["G' [Pa]"] * 3000) + "\n" + ",".join(["1"] * 3000)))
    with pytest.raises(InputError, match="temperature changes"):
        read_sweeps(
            write(
                "T [C],omega [rad/s],G' [Pa],G'' [Pa]\n"
                + "".join(f"{150 + 20 * (k % 2)},{k + 1},1,2\n" for k in range(3000))
            )
        )


def test_the_tables_shown_on_the_page_are_read(write: Write) -> None:
    """Both examples of docs/file-formats.md are the same sweep, to the digits printed there."""
    import re

    page = Path(__file__).parents[2] / "docs" / "file-formats.md"
    shown = re.findall(r"```text\n(.*?)```", page.read_text(encoding="utf-8"), re.DOTALL)
    plain, foreign = (read_sweep(write(text)) for text in shown)
    assert np.allclose(plain.omega, foreign.omega, rtol=1e-4)
    assert np.allclose(plain.storage, foreign.storage) and np.allclose(plain.loss, foreign.loss)
    assert foreign.temperature_C == 190


def test_what_is_missing_from_half_a_table_is_named(write: Write) -> None:
    """A sweep without G' lacks G', not the frequency that stands there (derived)."""
    with pytest.raises(InputError, match="no column for G' was found") as caught:
        find_kind(write("omega [rad/s],G'' [Pa]\n0.1,1\n1,2\n10,3\n"))
    assert caught.value.remedy is not None and "dW/dlog10M" not in caught.value.remedy
    with pytest.raises(InputError, match="no column for dW/dlog10M"):
        find_kind(write("M [g/mol],x\n1000,1\n10000,2\n"))


def test_a_temperature_that_no_sweep_has_is_said(write: Write) -> None:
    """Of sweeps at 150 and 170 C none is at 180 C (derived)."""
    text = "T [C],omega [rad/s],G' [Pa],G'' [Pa]\n" + "".join(
        f"{t},{w},{10 * w},{100 * w}\n" for t in (150, 170) for w in (0.1, 1, 10)
    )
    path = write(text)
    assert read_sweep(path, temperature_C=170).temperature_C == 170
    with pytest.raises(InputError, match="none of the 2 sweeps in the file is at 180 C"):
        read_sweep(path, temperature_C=180)


def test_one_point_is_too_few_in_the_singular(write: Write) -> None:
    with pytest.raises(InputError, match="1 point is too few"):
        read_sweep(write("omega [rad/s],G' [Pa],G'' [Pa]\n0.1,10,100\n"))


@pytest.mark.parametrize(("share", "cut"), [(0.14, True), (0.05, True), (0.005, False)])
def test_a_gpc_curve_that_ends_high_is_said_to_be_cut(
    write: Write, share: float, cut: bool
) -> None:
    """Derived: what ends at a column's limit lacks its longest chains. The last row counts by its
    height, not by its cell, which is half as wide."""
    x = np.linspace(3, 6, 61)
    w = np.exp(-((x - 5) ** 2) / 2 * (2 * math.log(1 / share)))
    rows = "\n".join(f"{10**a:.6g},{b:.6g}" for a, b in zip(x, w, strict=True))
    d = read_distribution(write(f"M [g/mol],dW/dlog10M\n{rows}\n"), calibration="absolute")
    assert ("cut_at_high_end" in codes(d)) is cut
    if cut:
        said = next(v.text for v in d.warnings if v.code == "cut_at_high_end")
        assert f"{100 * share:.0f} %" in said and "too low" in said
