"""The time-to-frequency step against two independent transforms, and the exact pair form."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from scipy.fft import fht, fhtoffset

from mwdlink.chains import families
from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.operator import debye, exponential_fit, time_operator
from mwdlink.relaxation.pair import pair_moduli, pair_terminal

MELT = builtin("hdpe").melt()


def by_fast_hankel(r: Relaxation, decades: float = 10.0, per_decade: int = 20) -> tuple:
    """The sine and cosine integrals of G through scipy.fft.fht, times sqrt(omega).

    sin z and cos z are sqrt(pi z/2) J_{+-1/2}(z). The grid is padded by many decades and even.
    """
    n = int(2 * decades * per_decade)
    n += n % 2
    step = np.log(10) / per_decade
    centre = np.log(r.mean_time)
    t = np.exp(centre + step * (np.arange(n) - (n - 1) / 2))
    g = r.network_modulus(t)
    out = []
    for mu in (0.5, -0.5):
        offset = fhtoffset(step, mu, initial=0.0)
        omega = np.exp(offset - centre + step * (np.arange(n) - (n - 1) / 2))
        # fht gives int a(t) J_mu(omega t) omega dt
        out.append((omega, np.sqrt(np.pi / 2) * fht(g * np.sqrt(t), step, mu, offset=offset)))
    return out


@pytest.mark.parametrize(
    ("kernel", "beta"), [("exponential", 2.0), ("reptation", 2.0), ("power-law", 2.25)]
)
def test_moduli_by_fast_hankel_transform(kernel: str, beta: float) -> None:
    """scipy.fft.fht (Hamilton 2000) on the same G(t): G' to 1e-5 and G'' to 2e-3 of themselves.

    The tolerances are the fast transform's own: it is periodic, and G is flat at short times.
    """
    d = families.lognormal(1e5, 2.0)
    r = Relaxation(d, MELT, Model(kernel, beta, rouse=False))
    (omega, sine), (omega2, cosine) = by_fast_hankel(r)
    seen = (omega * r.mean_time > 3e-2) & (omega * r.mean_time < 1e3)
    storage, _ = r.moduli(omega[seen])
    np.testing.assert_allclose(storage, (sine * np.sqrt(omega))[seen], rtol=1e-5)
    seen = (omega2 * r.mean_time > 3e-2) & (omega2 * r.mean_time < 1e2)
    _, loss = r.moduli(omega2[seen])
    np.testing.assert_allclose(loss, (cosine * np.sqrt(omega2))[seen], rtol=2e-3)


@pytest.mark.parametrize("place", [0.1, 1.0, 30.0])
def test_moduli_by_numerical_transform(place: float) -> None:
    """mpmath's quadrature of omega int F cos and sin dt for the power-law kernel of one chain."""
    mpmath.mp.dps = 20
    d = Distribution.from_nodes([1e5], [1.0])
    r = Relaxation(d, MELT, Model("power-law", 2.0, rouse=False))
    tau = float(r.times[0])
    n = MELT.power_law_n
    # F = n int_0^1 x^(n-1) exp(-t/(x tau)) dx: its transform is one integral over x, u = x^n
    w = place

    def part(kind: str) -> float:
        def f(u):
            x = w * u ** (1 / mpmath.mpf(n))
            return (x * x if kind == "storage" else x) / (1 + x * x)

        points = [0, *sorted({min(1, (c / w) ** n) for c in (0.01, 0.1, 0.3, 1, 3)}), 1]
        return float(mpmath.quad(f, points))

    storage, loss = r.moduli([w / tau])
    a, b = part("storage"), part("loss")
    small = 1e-6 * float(np.hypot(a, b))
    assert storage[0] / MELT.plateau_modulus == pytest.approx(a, abs=small)
    assert loss[0] / MELT.plateau_modulus == pytest.approx(b, abs=small)


def test_numerical_transform_in_time() -> None:
    """mpmath's oscillatory quadrature of G(t) itself, Doi-Edwards squared, one frequency."""
    mpmath.mp.dps = 15
    d = Distribution.from_nodes([1e5], [1.0])
    r = Relaxation(d, MELT, Model("reptation", 2.0, rouse=False))
    tau = float(r.times[0])

    def decay(s):
        if s < 0.06:
            return (1 - 4 * mpmath.sqrt(s) / mpmath.pi ** mpmath.mpf(1.5)) ** 2
        return (8 / mpmath.pi**2 * sum(mpmath.exp(-p * p * s) / p**2 for p in range(1, 26, 2))) ** 2

    w = 5.0
    places = [0, 0.01, 0.06, 0.2, 0.6, 1, 1.5, 2, 3, 4, 6, 9, 14, 20]
    storage = w * mpmath.quad(lambda s: decay(s) * mpmath.sin(w * s), places)
    loss = w * mpmath.quad(lambda s: decay(s) * mpmath.cos(w * s), places)
    a, b = r.moduli([w / tau])
    assert a[0] / MELT.plateau_modulus == pytest.approx(float(storage), rel=1e-6)
    assert b[0] / MELT.plateau_modulus == pytest.approx(float(loss), rel=1e-6)


@pytest.mark.parametrize("kernel", ["exponential", "reptation", "power-law"])
def test_pair_form(kernel: str) -> None:
    """Derived: for exponent 2 the exact sum over pairs and the operator agree to 1e-6 of |G*|."""
    d = families.lognormal(1e5, 2.0)
    r = Relaxation(d, MELT, Model(kernel, 2.0, rouse=False))
    t = np.geomspace(1e-9, 1e3, 241) * r.mean_time
    tau = np.geomspace(t[0], t[-1], 97)
    s = np.sqrt(r.network_modulus(t) / MELT.plateau_modulus)
    strength = exponential_fit(t, tau) @ s
    omega = np.logspace(-2, 3, 21) / r.mean_time
    exact = MELT.plateau_modulus * pair_moduli(omega, tau, strength)
    storage, loss = r.moduli(omega)
    assert np.max(np.abs(storage + 1j * loss - exact) / np.abs(exact)) < 1e-6
    eta, second = pair_terminal(tau, strength)
    # limited by the fit of sqrt(G), whose smallest values weigh little
    assert MELT.plateau_modulus * eta == pytest.approx(r.zero_shear_viscosity, rel=1e-5)
    assert second > 0


def test_pair_form_of_known_modes() -> None:
    """Derived: S = sum a exp(-t/tau): S^2 by its pairs written out, moduli and integrals."""
    tau, a = np.array([0.1, 2.0, 30.0]), np.array([0.5, 0.3, 0.2])
    rate = [1 / x + 1 / y for x in tau for y in tau]
    g = np.array([x * y for x in a for y in a])
    t = 1 / np.array(rate)
    eta, second = pair_terminal(tau, a)
    assert eta == pytest.approx(g @ t, rel=1e-13)
    assert second == pytest.approx(g @ t**2, rel=1e-13)
    w = np.array([0.03, 1.0, 50.0])
    exact = np.array([np.sum(g * 1j * x * t / (1 + 1j * x * t)) for x in w])
    np.testing.assert_allclose(pair_moduli(w, tau, a), exact, rtol=1e-13)


def test_pair_form_is_bilinear() -> None:
    """Derived: a blend's moduli are quadratic in the fraction: two melts and a cross term."""
    tau = np.geomspace(1e-2, 1e2, 9)
    rng = np.random.default_rng(1)
    a, b = rng.random(9), rng.random(9)
    omega = np.logspace(-3, 3, 7)
    whole = pair_moduli(omega, tau, 0.3 * a + 0.7 * b)
    parts = (
        0.09 * pair_moduli(omega, tau, a)
        + 0.49 * pair_moduli(omega, tau, b)
        + 0.42 * pair_moduli(omega, tau, a, b)
    )
    np.testing.assert_allclose(whole, parts, rtol=1e-12)


def test_operator_is_exact_on_its_own_modes() -> None:
    """Derived: moduli of a sum of exponentials, by the matrix and directly."""
    omega = np.logspace(-2, 2, 15)
    operator = time_operator(omega)
    tau = np.array([3e-2, 0.4, 1.0, 17.0])
    g = np.array([5e4, 1e5, 2e4, 3e3])
    values = np.exp(-np.outer(operator.times, 1 / tau)) @ g
    storage, loss = operator.moduli(values)
    a, b = debye(omega, tau)
    np.testing.assert_allclose(storage + 1j * loss, a @ g + 1j * (b @ g), rtol=1e-5)


def test_frequencies_must_be_positive() -> None:
    """Contract: an operator of a zero or negative frequency is refused."""
    for bad in ([0.0, 1.0], [-1.0], [np.nan], []):
        with pytest.raises(ValueError, match="positive"):
            time_operator(np.array(bad))
