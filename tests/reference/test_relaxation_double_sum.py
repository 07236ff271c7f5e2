"""The forward map against the closed double sum of the exponential kernel at exponent 2.

With F = exp(-t/tau) and double reptation everything is a sum over pairs of chains,
T_ij = 2 tau_i tau_j/(tau_i + tau_j): moduli, eta0 and Je0 (derived). It shares no code with the
forward map but the chains' times.
"""

from __future__ import annotations

import numpy as np
import pytest

from mwdlink.chains import families
from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model, relaxation_times
from mwdlink.relaxation.operator import debye, time_operator

MELT = builtin("hdpe").melt()
MODEL = Model("exponential", 2.0, rouse=False)
VISIBLE = 1e-4  # of G_N


def pairs(d: Distribution) -> tuple[np.ndarray, np.ndarray]:
    tau = relaxation_times(d.molar_mass, MELT, MODEL)
    t = 2 * tau[:, None] * tau / (tau[:, None] + tau)
    return np.outer(d.mass, d.mass).ravel() * MELT.plateau_modulus, t.ravel()


def closed_moduli(d: Distribution, omega: np.ndarray) -> np.ndarray:
    g, t = pairs(d)
    return np.array([np.sum(g * 1j * w * t / (1 + 1j * w * t)) for w in omega])


def six_decades(d: Distribution, places: tuple[float, ...] = (0.05, 1.0, 30.0)) -> np.ndarray:
    """Frequencies of six decades standing in several places about the terminal zone."""
    g, t = pairs(d)
    mean = (g @ t**2) / (g @ t)
    return np.concatenate([np.logspace(-3, 3, 25) * c / mean for c in places])


def worst(found: np.ndarray, exact: np.ndarray) -> tuple[float, float]:
    """Worst relative error of |G*|, and of G' and G'' each, where |G*| > 1e-4 G_N."""
    seen = np.abs(exact) > VISIBLE * MELT.plateau_modulus
    assert seen.sum() > 10
    f, e = found[seen], exact[seen]
    parts = np.maximum(np.abs(f.real / e.real - 1), np.abs(f.imag / e.imag - 1))
    return float(np.max(np.abs(f - e) / np.abs(e))), float(parts.max())


@pytest.mark.parametrize("dispersity", [1.05, 1.5, 3.0, 10.0])
@pytest.mark.parametrize("make", [families.lognormal, families.schulz_zimm])
def test_moduli_of_a_distribution(make, dispersity: float) -> None:
    """Derived: |G*|, G' and G'' each to 1e-6, through the operator of `Relaxation.moduli`."""
    d = make(1e5, dispersity)
    r = Relaxation(d, MELT, MODEL)
    # the mean time of a broad melt lies decades beyond what is visible: places go up with it
    places = (1.0, 300.0, 1e5) if dispersity > 2 else (0.05, 1.0, 30.0)
    omega = np.sort(six_decades(d, places))
    storage, loss = r.moduli(omega)
    total, parts = worst(storage + 1j * loss, closed_moduli(d, omega))
    assert total <= 1e-6
    assert parts <= 1e-6


@pytest.mark.parametrize("shift", np.linspace(0.0, 0.1, 5))
def test_moduli_of_a_single_exponential(shift: float) -> None:
    """Derived: a monodisperse melt, the hardest case; |G*|, G' and G'' each to 1e-4.

    The molar mass goes through a whole step of the fit's modes.
    """
    d = Distribution.from_nodes([1e5 * 10 ** (shift / MELT.law_exponent)], [1.0])
    r = Relaxation(d, MELT, MODEL)
    for place in (0.05, 1.0, 30.0):
        omega = six_decades(d, (place,))
        storage, loss = r.moduli(omega)
        total, parts = worst(storage + 1j * loss, closed_moduli(d, omega))
        assert total <= 2e-6
        assert parts <= 1e-4


@pytest.mark.parametrize(("dispersity", "limit"), [(1.0, 1e-4), (1.05, 1e-6), (3.0, 1e-6)])
def test_moduli_by_the_operator_of_a_frequency_list(dispersity: float, limit: float) -> None:
    """Derived: |G*| by the fixed matrix that knows nothing of the melt."""
    if dispersity == 1.0:
        d = Distribution.from_nodes([1e5], [1.0])
    else:
        d = families.lognormal(1e5, dispersity)
    omega = six_decades(d, (1.0,))
    operator = time_operator(omega, margin=7.0)
    storage, loss = operator.moduli(Relaxation(d, MELT, MODEL).network_modulus(operator.times))
    assert worst(storage + 1j * loss, closed_moduli(d, omega))[0] <= limit


@pytest.mark.parametrize("dispersity", [1.05, 1.5, 3.0])
def test_terminal_quantities(dispersity: float) -> None:
    """Derived: eta0 = G_N sum w w T, Je0 = sum w w T^2/(G_N (sum w w T)^2)."""
    d = families.lognormal(1e5, dispersity)
    r = Relaxation(d, MELT, MODEL)
    g, t = pairs(d)
    assert r.zero_shear_viscosity == pytest.approx(g @ t, rel=1e-9)
    assert r.recoverable_compliance == pytest.approx((g @ t**2) / (g @ t) ** 2, rel=1e-9)
    assert r.mean_time == pytest.approx((g @ t**2) / (g @ t), rel=1e-9)


def test_far_terminal_zone_keeps_its_slopes() -> None:
    """Derived: G' = eta0^2 Je0 omega^2 and G'' = eta0 omega, four to five decades down."""
    r = Relaxation(families.lognormal(1e5, 1.5), MELT, MODEL)
    omega = np.array([1e-5, 1e-4]) / r.mean_time
    storage, loss = r.moduli(omega)
    eta, je = r.zero_shear_viscosity, r.recoverable_compliance
    np.testing.assert_allclose(loss, eta * omega, rtol=1e-5)
    np.testing.assert_allclose(storage, eta**2 * je * omega**2, rtol=1e-4)


def test_relaxation_modulus() -> None:
    """Derived: G(t) = G_N (sum w exp(-t/(2 tau)))^2, on a list and at single times."""
    d = families.lognormal(1e5, 2.0)
    r = Relaxation(d, MELT, MODEL)
    tau = relaxation_times(d.molar_mass, MELT, MODEL)
    t = np.geomspace(1e-6, 1e3, 91) * r.mean_time
    exact = MELT.plateau_modulus * (np.exp(-t[:, None] / (2 * tau)) @ d.mass) ** 2
    np.testing.assert_allclose(r.relaxation_modulus(t), exact, rtol=1e-10)
    np.testing.assert_allclose(r.relaxation_modulus(t[[5, 40]]), exact[[5, 40]], rtol=1e-12)


def test_spectrum_of_positive_modes() -> None:
    """Derived: the discrete spectrum of a melt gives the same moduli, eta0 and Je0."""
    d = families.lognormal(1e5, 2.5)
    r = Relaxation(d, MELT, MODEL)
    s = r.spectrum()
    g, t = pairs(d)
    omega = np.logspace(-2, 3, 31) * (g @ t) / (g @ t**2)
    a, b = s.moduli(omega)
    exact = closed_moduli(d, omega)
    assert np.max(np.abs(a + 1j * b - exact) / np.abs(exact)) < 1e-5
    assert s.zero_shear_viscosity == pytest.approx(g @ t, rel=1e-8)
    assert s.recoverable_compliance == pytest.approx((g @ t**2) / (g @ t) ** 2, rel=1e-4)


def test_spectrum_of_exact_modes() -> None:
    """Derived: G(t) of five known modes is given back by the positive fit as those five modes."""
    from mwdlink.relaxation.modes import positive_modes

    tau = np.geomspace(1e-3, 1e3, 37)
    strength = np.zeros(37)
    strength[[3, 11, 18, 25, 33]] = [2e5, 1e5, 5e4, 1e4, 1e3]
    t = np.geomspace(1e-5, 2e4, 200)
    values = np.exp(-np.outer(t, 1 / tau)) @ strength
    found = positive_modes(t, values, tau)
    np.testing.assert_allclose(found, strength, atol=1e-5 * strength.max(), rtol=1e-4)
    a, b = debye(np.logspace(-3, 3, 20), tau)
    np.testing.assert_allclose(a @ found, a @ strength, rtol=1e-6)
    np.testing.assert_allclose(b @ found, b @ strength, rtol=1e-6)
