"""Arrhenius and WLF through shift factors."""

from __future__ import annotations

import numpy as np
import pytest

from mwdlink.chains.shift import arrhenius_factor, rereference_wlf, wlf_factor
from mwdlink.measurement.odd_shifts import shift_cautions
from mwdlink.measurement.shift_laws import fit_laws, preferred

T = np.array([130.0, 150.0, 165.0, 180.0, 200.0, 230.0])
SMALL = np.diag([1e-6, 1e-6, 1e-6, 0.0, 1e-6, 1e-6])


def polystyrene(t):
    return np.log10([wlf_factor(6.17, 141.8, 180.0, x, 180.0) for x in t])


def polyethylene(t, reference=180.0):
    return np.log10([arrhenius_factor(26.8e3, x, reference) for x in t])


def test_exact_wlf_shifts():
    """Fitted on Plazek & Agarwal 1978: 6.17/141.8 K at 180 C come back from exact shifts."""
    laws, _ = fit_laws(T, polystyrene(T), SMALL, 3, 180.0, members=50)
    c = laws["wlf"].constants
    assert c["c1"].value == pytest.approx(6.17, rel=1e-6)
    assert c["c2_K"].value == pytest.approx(141.8, rel=1e-6)
    assert preferred(laws).kind == "wlf"
    assert laws["arrhenius"].residual_decades > 0.1


@pytest.mark.parametrize(
    ("reference", "c1", "c2"), [(160.0, 7.18, 121.8), (190.0, 5.76, 151.8), (100.0, 14.16, 61.8)]
)
def test_rereferencing_is_exact(reference, c1, c2):
    """Derived: c2' = c2 + T1 - T0, c1' = c1 c2/c2'; values of the polystyrene card's references."""
    laws, _ = fit_laws(T, polystyrene(T), SMALL, 3, reference, members=0)
    found = [q.value for q in laws["wlf"].constants.values()]
    np.testing.assert_allclose(found, rereference_wlf(6.17, 141.8, 180.0, reference), rtol=1e-6)
    np.testing.assert_allclose(found, [c1, c2], rtol=1e-3)


def test_exact_arrhenius_shifts():
    """Published (Raju 1979): 26.8 kJ/mol comes back, and the second constant is not taken."""
    rng = np.random.default_rng(2)
    y = polyethylene(T) + 1e-3 * rng.standard_normal(T.size) * (T != 180.0)
    laws, _ = fit_laws(T, y, SMALL, 3, 180.0, members=100)
    energy = laws["arrhenius"].constants["energy_kJ_per_mol"]
    assert energy.value == pytest.approx(26.8, rel=0.02)
    assert energy.low <= 26.8 <= energy.high
    assert preferred(laws).kind == "arrhenius"


def test_apparent_energy_of_wlf():
    """Derived: R d ln a_T/d(1/T) by a numerical derivative of the law itself."""
    laws, _ = fit_laws(T, polystyrene(T), SMALL, 3, 180.0, members=50)
    k = 453.15
    a = wlf_factor(6.17, 141.8, 180.0, 180.01, 180.0), wlf_factor(6.17, 141.8, 180.0, 179.99, 180.0)
    slope = 8.314462618 * np.log(a[0] / a[1]) / (1 / (k + 0.01) - 1 / (k - 0.01)) / 1000
    q = laws["wlf"].activation_energy_interval(180.0)
    assert q.value == pytest.approx(slope, rel=1e-4)
    assert q.low < q.value < q.high


def test_two_temperatures_give_arrhenius_only():
    """House rule: no constants the data cannot carry."""
    y = polyethylene([170.0, 190.0], 170.0)
    laws, _ = fit_laws(np.array([170.0, 190.0]), y, np.diag([0, 1e-6]), 0, 170.0, members=10)
    assert set(laws) == {"arrhenius"}
    assert laws["arrhenius"].chi2_per_point is None


def test_three_noisy_shifts_of_an_arrhenius_melt_stay_arrhenius():
    """Derived: of 200 melts 2 may be called WLF (1 %); more than 8 has a chance below 1e-3."""
    rng = np.random.default_rng(4)
    t = np.array([160.0, 190.0, 220.0])
    sigma = np.array([3e-3, 0.0, 3e-3])
    called = 0
    for _ in range(200):
        y = polyethylene(t, 190.0) + sigma * rng.standard_normal(3)
        laws, _ = fit_laws(t, y, np.diag(sigma**2), 1, 190.0, members=0)
        called += preferred(laws).kind == "wlf"
    assert called <= 8


def _odd(t, y):
    laws, _ = fit_laws(t, y, np.diag(np.where(y == 0.0, 0.0, 1e-5)), 2, t[2], members=0)
    return shift_cautions(t, y, preferred(laws))


def test_shifts_of_real_laws_are_not_odd():
    """Published laws: polyethylene by Arrhenius, polystyrene by WLF; nothing to say."""
    t = np.array([150.0, 165.0, 180.0, 200.0, 220.0])
    assert _odd(t, polyethylene(t)) == ()
    assert _odd(t, polystyrene(t)) == ()


def test_a_step_in_hertz_is_named():
    """Derived: its frequencies are too high by 2 pi, so its a_T is too low by as much."""
    t = np.array([150.0, 165.0, 180.0, 200.0, 220.0])
    y = polyethylene(t)
    y[3] -= np.log10(2 * np.pi)
    (said,) = _odd(t, y)
    assert said.code == "shifts_odd" and "No law goes through" in said.text
    assert "the step at 200 C" in said.text and "6.28 shorter" in said.text
    assert "about 2 pi" in said.text and "From 200 to 220 C the shift factor rises" in said.text


def test_shifts_that_rise_are_told_with_two_temperatures_too():
    """Derived: two exchanged labels; no law is missed by one shift, but it has the wrong sign."""
    t = np.array([170.0, 190.0])
    y = -polyethylene([170.0, 190.0], 170.0)
    laws, _ = fit_laws(t, y, np.diag([0, 1e-6]), 0, 170.0, members=0)
    (said,) = shift_cautions(t, y, preferred(laws))
    assert "rises" in said.text and "No law" not in said.text
