"""Families of distributions: the averages they promise."""

from __future__ import annotations

import numpy as np
import pytest

from mwdlink.chains import families
from mwdlink.chains.distribution import Distribution
from mwdlink.errors import ModelError


@pytest.mark.parametrize("dispersity", [1.001, 1.05, 2.0, 5.0, 16.0])
def test_lognormal_moments(dispersity: float) -> None:
    """Derived: Mw/Mn = Mz/Mw = M(z+1)/Mz = exp(sigma^2)."""
    d = families.lognormal(1.2e5, dispersity)
    assert d.Mw == pytest.approx(1.2e5, rel=1e-10)
    assert d.dispersity == pytest.approx(dispersity, rel=1e-8)
    assert d.Mz / d.Mw == pytest.approx(dispersity, rel=1e-8)
    assert d.Mz1 / d.Mz == pytest.approx(dispersity, rel=1e-5)


def test_lognormal_shape() -> None:
    """Derived: half the weight on either side of Mw/sqrt(dispersity), which is the peak."""
    d = families.lognormal(1e5, 4.0)
    median = 1e5 / 2.0
    assert d.weight_below(median) == pytest.approx(0.5, abs=2e-4)
    assert d.molar_mass[np.argmax(d.density)] == pytest.approx(median, rel=0.07)
    assert d.weight_above(median * np.exp(np.sqrt(np.log(4.0)))) == pytest.approx(0.15866, abs=3e-4)


def test_most_probable_distribution() -> None:
    """Flory: Mn : Mw : Mz : M(z+1) = 1 : 2 : 3 : 4 (Schulz-Zimm with k = 1)."""
    d = families.schulz_zimm(2e5, 2.0)
    np.testing.assert_allclose(np.array([d.Mn, d.Mw, d.Mz, d.Mz1]) / 1e5, [1, 2, 3, 4], rtol=1e-9)
    # weight above M: (1 + M/Mn) exp(-M/Mn)
    assert d.weight_above(3e5) == pytest.approx(4 * np.exp(-3), abs=2e-4)


@pytest.mark.parametrize("dispersity", [1.02, 1.5, 3.0, 8.0, 16.0])
def test_schulz_zimm_moments(dispersity: float) -> None:
    """Derived: Mn : Mw : Mz = k : k+1 : k+2, also with countless short chains."""
    k = 1 / (dispersity - 1)
    d = families.schulz_zimm(1e5, dispersity)
    assert d.Mw == pytest.approx(1e5, rel=1e-8)
    assert d.dispersity == pytest.approx(dispersity, rel=1e-8)
    assert d.Mz / d.Mw == pytest.approx((k + 2) / (k + 1), rel=1e-8)


@pytest.mark.parametrize(
    ("a", "b"), [(1.0, 1.0), (0.1, 0.5), (0.3, 3.0), (2.0, 0.5), (5.0, 0.3), (20.0, 2.0)]
)
def test_generalised_exponential_moments(a: float, b: float) -> None:
    """Derived: Mn = M0 G((a+1)/b)/G(a/b), Mw and Mz one step on each; and back to a, b, M0."""
    from scipy.special import gamma

    d = families.generalised_exponential(3e4, a, b)
    g = [gamma((a + k) / b) for k in range(4)]
    exact = [3e4 * g[k + 1] / g[k] for k in range(3)]
    np.testing.assert_allclose([d.Mn, d.Mw, d.Mz], exact, rtol=1e-8)
    np.testing.assert_allclose(families.gex_averages(a, b, 3e4), exact, rtol=1e-10)
    back = families.gex_from_averages(*exact)
    np.testing.assert_allclose(back, (a, b, 3e4), rtol=1e-5)


def test_generalised_exponential_with_b_one_is_schulz_zimm() -> None:
    """Derived: w ~ M^k exp(-k M/Mn)."""
    d = families.generalised_exponential(5e4, 1.0, 1.0)
    same = families.schulz_zimm(1e5, 2.0)
    assert [d.Mn, d.Mw, d.Mz] == pytest.approx([same.Mn, same.Mw, same.Mz], rel=1e-9)


def test_from_averages() -> None:
    """Contract: two of Mn, Mw and dispersity; Mz as third for the generalised exponential."""
    a = Distribution.from_averages(Mw=1.2e5, dispersity=5.0)
    b = Distribution.from_averages(Mw=1.2e5, Mn=2.4e4)
    c = Distribution.from_averages(Mn=2.4e4, dispersity=5.0)
    for d in (a, b, c):
        assert [d.Mn, d.Mw] == pytest.approx([2.4e4, 1.2e5], rel=1e-8)
    sz = Distribution.from_averages(Mw=1.2e5, dispersity=2.0, family="schulz-zimm")
    assert sz.Mz / sz.Mw == pytest.approx(1.5, rel=1e-8)
    g = Distribution.from_averages(Mn=2e4, Mw=1e5, Mz=4e5, family="generalised-exponential")
    assert [g.Mn, g.Mw, g.Mz] == pytest.approx([2e4, 1e5, 4e5], rel=1e-5)
    assert a.calibration == "absolute"


@pytest.mark.parametrize(
    ("given", "says"),
    [
        ({"Mw": 1e5}, "two of"),
        ({"Mw": 1e5, "Mn": 2e5}, "greater than 1"),
        ({"Mw": 1e5, "dispersity": 1.0}, "greater than 1"),
        ({"Mw": -1e5, "dispersity": 2.0}, "positive"),
        ({"Mw": float("nan"), "dispersity": 2.0}, "positive"),
        ({"Mw": 1e5, "Mn": 2e4, "dispersity": 3.0}, "not the dispersity given"),
        ({"Mw": 1e5, "dispersity": 2.0, "family": "gaussian"}, "unknown family"),
        ({"Mw": 1e5, "dispersity": 2.0, "family": "generalised-exponential"}, "Mz"),
        (
            {"Mn": 5e4, "Mw": 1e5, "Mz": 9e4, "family": "generalised-exponential"},
            "must rise",
        ),
    ],
)
def test_impossible_averages(given: dict, says: str) -> None:
    """Contract: averages that are missing, contradict or cannot be are refused with the reason."""
    with pytest.raises(ModelError, match=says):
        Distribution.from_averages(**given)


def test_mixture_of_lognormals() -> None:
    """Derived: moments of a mixture are the weighted moments of its parts."""
    d = families.mixture_of_lognormals([5e4, 6e5], [2.0, 1.5], [0.8, 0.2])
    parts = [(families.lognormal(5e4, 2.0), 0.8), (families.lognormal(6e5, 1.5), 0.2)]
    for k in (-1, 1, 2):
        exact = sum(f * p.moment(k) for p, f in parts)
        assert d.moment(k) == pytest.approx(exact, rel=1e-8)
        assert families.mixture(parts).moment(k) == pytest.approx(exact, rel=1e-4)
