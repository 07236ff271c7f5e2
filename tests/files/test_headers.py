"""Names and units: whole tokens only, units by kind, doubt refused.

Spellings and units are those of common practice; factors are SI definitions.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from mwdlink.errors import InputError
from mwdlink.files.headers import Match, find_chosen, make_column, recognise, role_name
from mwdlink.files.units import UNITS, conversion, find_unit


@pytest.mark.parametrize(
    ("header", "role", "unit"),
    [
        ("omega [rad/s]", "omega", "rad/s"),
        ("ω/(rad/s)", "omega", "(rad/s)"),
        ("ω in rad/s", "omega", "rad/s"),
        ("Angular Frequency, rad/s", "omega", "rad/s"),
        ("omega_rad_per_s", "omega", "rad/s"),
        ("Frequency (Hz)", "frequency", "Hz"),
        ('G" [Pa]', "G''", "Pa"),
        ("G″/Pa", "G''", "Pa"),
        ("Storage modulus (G') [kPa]", "G'", "kPa"),
        ("G' (storage modulus) [kPa]", "G'", "kPa"),
        ("|η*| (Pa·s)", "|eta*|", "Pa·s"),
        ("tan(δ)", "tan delta", None),
        ("T/°C", "T", "°C"),
        ("t [s]", "t", "s"),
        ("G(t) [Pa]", "G", "Pa"),
        ("γ̇ [1/s]", "rate", "1/s"),
        ("log10(M/(g/mol))", "log10 M", "g/mol"),
        ("log M", "log M", None),
        ("ln(M) [kg/mol]", "ln M", "kg/mol"),
        ("dw/d(log M)", "dW/dlogM", None),
        ("dW/d(log10 M)", "dW/dlog10M", None),
        ("w(lnM)", "dW/dlnM", None),
        ("dN/dM", "dN/dM", None),
        ("Cum. weight fraction [%]", "cumulative W", "%"),
        ("W", "W?", None),
        ("w(M)", "W?", None),
        ("W(log M)", "W?", None),
    ],
)
def test_usual_headers(header: str, role: str, unit: str | None) -> None:
    assert recognise(header) == Match(role, unit)


@pytest.mark.parametrize(
    "header",
    ["G' low [Pa]", "G'' high [Pa]", "dW/dlog10M low", "M [g/mol] low", "residual G'", "G'/G''",
     "eta* model [Pa s]", "m", "Mn", "storage modulus change", "", "#", "low", "point",
     "x" * 500, "logG'"],
)  # fmt: skip
def test_nothing_is_found_by_substring(header: str) -> None:
    """A name must be used up as a whole; low and high columns are nobody's."""
    assert recognise(header) is None


@pytest.mark.parametrize(
    ("text", "kind", "factor"),
    [
        ("rad·s⁻¹", "frequency", 1),
        ("Hz", "frequency", 2 * math.pi),
        ("KPA", "modulus", 1e3),
        ("N/m²", "modulus", 1),
        ("dyn/cm^2", "modulus", 0.1),
        ("mPa·s", "viscosity", 1e-3),
        ("MPa s", "viscosity", 1e6),
        ("kg mol-1", "molar mass", 1e3),
        ("kDa", "molar mass", 1e3),
        ("°", "angle", math.pi / 180),
        ("s^-1", "rate", 1),
        ("µN·m", "torque", 1e-6),
        ("%", "fraction", 0.01),
        ("min", "time", 60),
    ],
)
def test_units_and_factors(text: str, kind: str, factor: float) -> None:
    found = find_unit(text, kind)
    assert found is not None and UNITS[kind][found] == pytest.approx(factor, rel=1e-15)


@pytest.mark.parametrize(
    ("text", "kind"),
    [("mpa", "modulus"), ("MPA", "modulus"), ("MHz", "frequency"), ("MN m", "torque"),
     ("foo", "modulus"), ("Pa", "viscosity"), ("kg", "molar mass"), ("MS", "time")],
)  # fmt: skip
def test_doubtful_units_are_unknown(text: str, kind: str) -> None:
    """Milli and mega differ by case alone, so case is not forgiven there."""
    assert find_unit(text, kind) is None


def test_temperatures() -> None:
    """Definitions of the Celsius and Fahrenheit scales."""
    for text, value in (("K", 463.15), ("°C", 190.0), ("degF", 374.0)):
        unit = find_unit(text, "temperature")
        assert unit is not None
        got = conversion(unit, "temperature").convert(np.array(value))
        assert float(got) == pytest.approx(190.0)


@pytest.mark.parametrize(
    ("role", "unit", "word"),
    [
        ("frequency", None, "Hz or in rad/s"),
        ("frequency", "1/s", "Hz or in rad/s"),
        ("omega", "Hz", "angular frequency in Hz"),
        ("G'", "foo", "unknown"),
        ("G'", "Pa or kPa", "unknown"),
    ],
)
def test_units_in_doubt_are_refused(role: str, unit: str | None, word: str) -> None:
    """Frequency and angular frequency are never mixed up in silence."""
    with pytest.raises(InputError, match=word) as info:
        make_column(role, 0, ["head"], unit, path="x", row=3)
    assert info.value.column == "head" and "--column" in str(info.value.remedy)


def test_columns_a_user_names() -> None:
    """`role=header[:unit]`, exact first, then without case, then by name without its unit."""
    headers = ["a:b", "Freq x [Hz]", "B", "b", "Ratio: 1"]
    chosen = find_chosen({"f": "freq x", "G'": "a:b", "storage": "Ratio: 1"}, headers, None, 1)
    assert chosen == {"f": (1, None), "G'": (4, None)}
    assert find_chosen({"G'": "B:kPa"}, headers, None, 1) == {"G'": (2, "kPa")}
    assert find_chosen({"G'": "#4:MPa"}, headers, None, 1) == {"G'": (3, "MPa")}
    assert find_chosen({"G'": ("b", "MPa")}, headers, None, 1) == {"G'": (3, "MPa")}
    for bad in ("none", "#9", "none:Pa"):
        with pytest.raises(InputError, match="no column"):
            find_chosen({"G'": bad}, headers, "x", 1)
    with pytest.raises(InputError, match="called"):
        find_chosen({"G'": "a"}, ["a", "a"], "x", 1)
    with pytest.raises(InputError, match="two roles"):
        find_chosen({"G'": "a", "G''": "a"}, ["a"], "x", 1)
    assert role_name("cumulative") == "cumulative W"
    with pytest.raises(InputError, match="no column role"):
        role_name("colour")
