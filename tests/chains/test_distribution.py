"""Distributions from tables of every kind, averages, partial cells, blends."""

from __future__ import annotations

import numpy as np
import pytest

from mwdlink.chains import families
from mwdlink.chains.distribution import Distribution
from mwdlink.chains.tables import KINDS
from mwdlink.errors import InputError

LN10 = np.log(10)
M = np.geomspace(20.0, 5e7, 240)
SIGMA = np.sqrt(np.log(4.0))
CENTRE = np.log(1e5) - SIGMA**2 / 2
# log-normal with Mw 1e5 and dispersity 4, per ln M
PER_LN = np.exp(-0.5 * ((np.log(M) - CENTRE) / SIGMA) ** 2) / (SIGMA * np.sqrt(2 * np.pi))


def column(kind: str) -> np.ndarray:
    """The same curve as each kind of table prints it."""
    from scipy.special import ndtr

    return {
        "dW/dlog10M": PER_LN * LN10,
        "dW/dlnM": PER_LN,
        "dW/dM": PER_LN / M,
        "cumulative": ndtr((np.log(M) - CENTRE) / SIGMA),
        "slice_weight": 731.0 * PER_LN,
        "dN/dlog10M": PER_LN / M * 17.0,
        "dN/dlnM": PER_LN / M * 17.0,
        "dN/dM": PER_LN / M**2 * 17.0,
        "slice_number": PER_LN / M * 17.0,
    }[kind]


def codes(d: Distribution) -> set[str]:
    return {c.code for c in d.warnings} - {"calibration_unstated"}


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("order", ["rising", "falling", "mixed"])
def test_every_kind_of_table(kind: str, order: str) -> None:
    """Derived: one curve in nine spellings and any row order gives one set of averages."""
    rows = np.arange(M.size)
    if order == "falling":
        rows = rows[::-1]
    elif order == "mixed":
        rows = np.random.default_rng(0).permutation(rows)
    d = Distribution.from_table(M[rows], column(kind)[rows], kind)
    assert [d.Mw, d.Mz] == pytest.approx([1e5, 4e5], rel=2e-3)
    assert d.Mn == pytest.approx(2.5e4, rel=6e-3)
    assert d.mass.sum() == pytest.approx(1.0)
    if kind != "slice_number" and not kind.startswith("dN"):
        said = codes(d) - {"normalised"}
        assert said == ({"molar_mass_sorted"} if order == "mixed" else set())


def test_slices_of_iso_16014() -> None:
    """ISO 16014-1: Mn = sum A/sum(A/M), Mw = sum(A M)/sum A, Mz = sum(A M^2)/sum(A M)."""
    m = np.array([2.1e3, 9.5e3, 4.4e4, 1.3e5, 6.0e5])
    a = np.array([3.0, 20.0, 45.0, 28.0, 4.0])
    d = Distribution.from_table(m[::-1], a[::-1], "slice_weight")
    assert d.Mn == pytest.approx(a.sum() / np.sum(a / m), rel=1e-12)
    assert d.Mw == pytest.approx(np.sum(a * m) / a.sum(), rel=1e-12)
    assert d.Mz == pytest.approx(np.sum(a * m**2) / np.sum(a * m), rel=1e-12)
    assert d.Mz1 == pytest.approx(np.sum(a * m**3) / np.sum(a * m**2), rel=1e-12)
    n = Distribution.from_table(m, a / m, "slice_number")
    np.testing.assert_allclose(n.mass, d.mass, rtol=1e-12)


@pytest.mark.parametrize("limit", [7e4, 1.234e5, 5e5, 2e6])
def test_partial_cells(limit: float) -> None:
    """Derived: the weight above M moves with M inside a cell, not from node to node."""
    from scipy.special import ndtr

    coarse = np.geomspace(1e2, 1e8, 43)  # seven nodes a decade
    per_ln = np.exp(-0.5 * ((np.log(coarse) - CENTRE) / SIGMA) ** 2)
    d = Distribution.from_table(coarse, per_ln, "dW/dlnM")
    exact = 1 - ndtr((np.log(limit) - CENTRE) / SIGMA)
    assert d.weight_above(limit) == pytest.approx(exact, abs=4e-3)
    assert d.weight_above(limit) + d.weight_below(limit) == pytest.approx(1.0)
    a, b = d.weight_above(limit), d.weight_above(limit * 1.001)
    assert a > b > a - 1e-3


def test_partial_cells_of_two_cells() -> None:
    """Derived: half of a cell's decade holds half of its weight."""
    d = Distribution([2e3, 2e4], [0.4, 0.6], [1e3, 1e4, 1e5])
    assert d.weight_below(1e3) == 0.0
    assert d.weight_below(10**3.5) == pytest.approx(0.2)
    assert d.weight_above(10**4.5) == pytest.approx(0.3)
    assert d.weight_above(1e6) == 0.0
    np.testing.assert_allclose(d.cumulative(np.array([1e4, 1e5])), [0.4, 1.0])
    np.testing.assert_allclose(d.density, [0.4, 0.6])


def test_negative_slices_are_set_to_zero_and_said() -> None:
    """Contract: a baseline below zero is handled openly; a curve mostly below it is refused."""
    v = column("dW/dlog10M").copy()
    v[:30] = -0.004
    v[-5:] = -0.01
    d = Distribution.from_table(M, v, "dW/dlog10M")
    note = next(c for c in d.warnings if c.code == "negative_slices")
    assert "35 rows" in note.text
    assert np.all(d.mass >= 0)
    with pytest.raises(InputError, match="negative"):
        Distribution.from_table(M, v - 0.2, "dW/dlog10M")
    with pytest.raises(InputError, match="no positive weight"):
        Distribution.from_table(M, -np.abs(v) - 0.1, "slice_weight")


def test_percent_is_accepted() -> None:
    """Contract: percent differential and cumulative curves are read as such, and said."""
    for kind in ("dW/dlog10M", "cumulative"):
        d = Distribution.from_table(M, 100 * column(kind), kind)
        assert codes(d) == {"percent"}
        assert d.Mw == pytest.approx(1e5, rel=2e-3)


@pytest.mark.parametrize(("kind", "values"), [("dW/dlog10M", PER_LN), ("dW/dlnM", PER_LN * LN10)])
@pytest.mark.parametrize("scale", [1.0, 100.0])
def test_ln_and_log10_mixed_up(kind: str, values: np.ndarray, scale: float) -> None:
    """Contract: an area near 2.303 or 0.434 warns of an ln/log10 mix-up."""
    d = Distribution.from_table(M, scale * values, kind)
    assert codes(d) == {"ln_log10_mixup"}
    assert d.Mw == pytest.approx(1e5, rel=2e-3)


def test_other_areas_are_normalised_and_said() -> None:
    """Contract: a differential curve is normalised; its area is quoted when it is not 1."""
    d = Distribution.from_table(M, 8.0 * column("dW/dlog10M"), "dW/dlog10M")
    note = next(c for c in d.warnings if c.code == "normalised")
    assert "is 8;" in note.text
    assert not codes(Distribution.from_table(M, column("dW/dlog10M"), "dW/dlog10M"))


def test_cumulative_tables() -> None:
    """Contract: falling curves are weight above M; what lies outside the rows is said."""
    from scipy.special import ndtr

    full = ndtr((np.log(M) - CENTRE) / SIGMA)
    falling = Distribution.from_table(M, 1 - full, "cumulative")
    assert codes(falling) == {"cumulative_falls"}
    assert falling.Mw == pytest.approx(1e5, rel=2e-3)
    part = (M > 1e4) & (M < 2.5e5)
    # both ends cut: the same cut curve, printed either way, is the same distribution
    up = Distribution.from_table(M[part], full[part], "cumulative")
    down = Distribution.from_table(M[part], 100 * (1 - full[part]), "cumulative")
    assert {"cumulative_starts_above_zero", "normalised"} <= codes(up)
    assert down.Mw == pytest.approx(up.Mw, rel=1e-9)
    with pytest.raises(InputError, match="does not rise"):
        Distribution.from_table(M, np.ones_like(M), "cumulative")


def test_cut_curves_are_said() -> None:
    """Contract: a curve that does not come down at an end says which."""
    d = Distribution.from_table(M[M > 3e4], column("dW/dlog10M")[M > 3e4], "dW/dlog10M")
    assert "cut_at_low_end" in codes(d)
    assert "cut_at_high_end" not in codes(d)


def test_repeated_molar_masses() -> None:
    """Contract: slices of one molar mass add up, points of one curve are averaged; said."""
    m = [1e4, 1e4, 5e4, 2e5]
    d = Distribution.from_table(m, [1.0, 3.0, 4.0, 2.0], "slice_weight")
    np.testing.assert_allclose(d.mass, [0.4, 0.4, 0.2])
    assert "molar_mass_merged" in codes(d)
    curve = Distribution.from_table([*m, 4e5], [1.0, 3.0, 4.0, 2.0, 0.0], "dW/dlog10M")
    assert curve.density[0] / curve.density[1] == pytest.approx(0.5)


@pytest.mark.parametrize(
    ("m", "v", "says"),
    [
        ([1e3, 1e4], [1.0, 1.0], "at least 3 rows"),
        ([1e3, 0.0, 1e5], [1.0, 1.0, 1.0], "positive"),
        ([1e3, -1e4, 1e5], [1.0, 1.0, 1.0], "positive"),
        ([1e3, np.nan, 1e5], [1.0, 1.0, 1.0], "not finite"),
        ([1e3, 1e4, 1e5], [1.0, np.inf, 1.0], "not finite"),
        ([1e3, 1e4, 1e5], [0.0, 0.0, 0.0], "no "),
        ([1e3, 1e4, 1e5], [1.0, 1.0], "same length"),
        ([1e4, 1e4, 1e4, 1e5], [1.0, 1.0, 1.0, 1.0], "fewer than 3 different"),
    ],
)
def test_tables_that_hold_no_distribution(m: list, v: list, says: str) -> None:
    """Contract: refused with the reason."""
    with pytest.raises(InputError, match=says):
        Distribution.from_table(m, v, "slice_weight")


def test_unknown_kind_and_calibration() -> None:
    """Contract: the error names the choices."""
    with pytest.raises(InputError) as caught:
        Distribution.from_table(M, PER_LN, "w")
    assert "dW/dlog10M" in str(caught.value) + str(caught.value.remedy)
    with pytest.raises(InputError, match="calibration"):
        Distribution.from_table(M, PER_LN, "dW/dlnM", calibration="polystyrene")


def test_calibration_is_said() -> None:
    """Contract: unstated and equivalent molar masses warn, absolute and universal do not."""
    for calibration, code in (
        ("unstated", "calibration_unstated"),
        ("equivalent", "calibration_equivalent"),
        ("absolute", None),
        ("universal", None),
    ):
        d = Distribution.from_table(M, PER_LN, "dW/dlnM", calibration=calibration)
        found = [c.code for c in d.warnings if c.code.startswith("calibration")]
        assert found == ([code] if code else [])
        assert d.calibration == calibration


@pytest.mark.parametrize(
    ("m", "w", "e"),
    [
        ([1e4, 1e3], [0.5, 0.5], [1e2, 2e3, 1e5]),
        ([1e3, 1e4], [0.5, -0.5], [1e2, 2e3, 1e5]),
        ([1e3, 1e4], [0.0, 0.0], [1e2, 2e3, 1e5]),
        ([1e3, 1e4], [0.5, 0.5], [1e2, 2e3]),
        ([1e3, 1e4], [0.5, np.nan], [1e2, 2e3, 1e5]),
        ([], [], [1.0]),
    ],
)
def test_arrays_that_do_not_fit(m: list, w: list, e: list) -> None:
    """Contract: a Distribution that exists is one that makes sense."""
    with pytest.raises(InputError):
        Distribution(m, w, e)


def test_arrays_are_read_only() -> None:
    """House habit: frozen results."""
    d = families.lognormal(1e5, 2.0)
    for a in (d.molar_mass, d.mass, d.edges):
        with pytest.raises(ValueError, match="read-only"):
            a[0] = 1.0


# -- blends and grids -----------------------------------------------------------------------------


def test_blend_moments_add_up() -> None:
    """Derived: W = sum phi W_i, so every moment is the weighted moment; the curve stays smooth."""
    parts = [(families.lognormal(5e4, 3.0), 70.0), (families.lognormal(4e5, 2.0), 30.0)]
    d = Distribution.blend(parts)
    for k in (-1, 1, 2, 3):
        exact = 0.7 * parts[0][0].moment(k) + 0.3 * parts[1][0].moment(k)
        assert d.moment(k) == pytest.approx(exact, rel=1e-4)
    inner = d.density[(d.molar_mass > 1e4) & (d.molar_mass < 2e6)]
    assert np.max(np.abs(np.diff(inner, 2))) < 0.01


def test_blend_on_common_nodes_is_exact() -> None:
    """Derived: components on the same cells blend cell by cell."""
    a = Distribution.from_table(M, PER_LN, "dW/dlnM", calibration="absolute")
    b = Distribution.from_table(M, PER_LN * M, "dW/dlnM", calibration="absolute")
    d = Distribution.blend([(a, 0.25), (b, 0.75)])
    np.testing.assert_allclose(d.mass, 0.25 * a.mass + 0.75 * b.mass, rtol=1e-13)
    np.testing.assert_array_equal(d.molar_mass, a.molar_mass)


def test_blend_of_separate_chains_keeps_their_molar_masses() -> None:
    """Derived: monodisperse components stay monodisperse."""
    d = Distribution.blend(
        [(Distribution.from_nodes([2e4], [1.0]), 0.9), (Distribution.from_nodes([3e5], [1.0]), 0.1)]
    )
    held = d.mass > 0
    np.testing.assert_allclose(d.molar_mass[held], [2e4, 3e5], rtol=1e-9)
    np.testing.assert_allclose(d.mass[held], [0.9, 0.1], rtol=1e-12)


def test_blend_with_a_narrow_component() -> None:
    """Derived: the grid is fine enough for the narrowest curve."""
    narrow, broad = families.lognormal(2e5, 1.005), families.lognormal(5e4, 5.0)
    d = Distribution.blend([(narrow, 0.1), (broad, 0.9)])
    exact = 0.1 * narrow.Mz * narrow.Mw + 0.9 * broad.Mz * broad.Mw
    assert d.Mw * d.Mz == pytest.approx(exact, rel=1e-4)


def test_blend_carries_what_was_said() -> None:
    """Contract: warnings of all components; calibrations that differ are unstated."""
    a = Distribution.from_table(M, PER_LN, "dW/dlnM", calibration="equivalent")
    d = Distribution.blend([(a, 0.5), (families.lognormal(1e5, 2.0), 0.5)])
    assert d.calibration == "unstated"
    assert "calibration_equivalent" in {c.code for c in d.warnings}
    for bad in ([], [(a, -1.0)], [(a, 0.0)], [(a, np.nan)]):
        with pytest.raises(InputError):
            Distribution.blend(bad)


def test_regrid_keeps_weight() -> None:
    """Derived: other cells, the same weight above any old or new edge."""
    d = families.lognormal(1e5, 3.0)
    edges = np.geomspace(1e3, 1e7, 31)
    other = d.regrid(edges)
    for limit in edges[1:-1:5]:
        assert other.weight_above(limit) == pytest.approx(d.weight_above(limit), abs=1e-12)
    assert other.mass.sum() == pytest.approx(1.0)


def test_scaled_and_compact() -> None:
    """Derived: a calibration shift moves every average; empty ends carry nothing."""
    d = families.lognormal(1e5, 3.0)
    assert d.scaled(2.0).Mw == pytest.approx(2e5, rel=1e-10)
    assert d.scaled(2.0).weight_above(4e5) == pytest.approx(d.weight_above(2e5), abs=1e-12)
    small = d.compact()
    assert small.molar_mass.size < d.molar_mass.size
    assert small.Mw == pytest.approx(d.Mw, rel=1e-8)


def test_to_frame_is_a_table_of_ours() -> None:
    """Contract: written tables are accepted as input again."""
    d = families.lognormal(1e5, 3.0)
    frame = d.to_frame()
    assert list(frame.columns) == ["M [g/mol]", "dW/dlog10M"]
    back = Distribution.from_table(
        frame["M [g/mol]"].to_numpy(), frame["dW/dlog10M"].to_numpy(), "dW/dlog10M"
    )
    assert [back.Mn, back.Mw] == pytest.approx([d.Mn, d.Mw], rel=1e-6)
