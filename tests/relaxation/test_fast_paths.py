"""The fast ways against the plain ones: tables, shifted windows, gathered modes, kept fits."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from mwdlink.chains import families
from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.relaxation import mixing
from mwdlink.relaxation.kernels import KERNEL_NAMES
from mwdlink.relaxation.lattice import even_step, shifted_columns, spread, stencil, window_sums
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model, survival_at, survival_matrix, survival_sum
from mwdlink.relaxation.rouse import (
    rouse_modes,
    rouse_moduli,
    rouse_on_lattice,
    rouse_relaxation,
    rouse_viscosity,
)

# M1 invented: no shipped card names it
MELT = dataclasses.replace(builtin("hdpe").melt(), fluctuation_molar_mass=1500.0)
MASSES = np.geomspace(1.5e3, 3e7, 90)


def plain(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(mixing, "TABLE_FROM", 10**9)


@pytest.mark.parametrize("kernel", KERNEL_NAMES)
@pytest.mark.parametrize(("beta", "per_decade"), [(1.0, 20), (2.0, 10), (3.84, 7.3)])
def test_survival_from_a_table(
    kernel: str, beta: float, per_decade: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Derived: to 1e-11 of 1, and to 1e-9 of itself down to 1e-20."""
    model = Model(kernel, beta)
    t = np.geomspace(1e-12, 1e10, int(22 * per_decade))
    fast = survival_matrix(t, MASSES, MELT, model)
    w = np.exp(-0.5 * ((np.log(MASSES) - 12) / 1.5) ** 2)
    summed = survival_sum(t, MASSES, w / w.sum(), MELT, model)
    plain(monkeypatch)
    exact = survival_matrix(t, MASSES, MELT, model)
    assert np.max(np.abs(fast - exact)) < 1e-11
    seen = exact > 1e-20
    assert np.max(np.abs(fast[seen] / exact[seen] - 1)) < 1e-9
    np.testing.assert_allclose(summed, exact @ (w / w.sum()), atol=2e-11)
    column = survival_at(
        t / mixing.relaxation_times(MASSES[40:41], MELT, model), MASSES[40], MELT, model
    )
    np.testing.assert_allclose(column, exact[:, 40], rtol=1e-12)


def test_times_of_any_spacing() -> None:
    """Derived: a list of times that is not even goes the plain way and gives the same values."""
    t = np.geomspace(1e-9, 1e4, 261)
    odd = np.sort(np.append(t, 3.3e-3))
    at = np.searchsorted(odd, 3.3e-3)
    model = Model()
    a = survival_matrix(t, MASSES, MELT, model)
    b = np.delete(survival_matrix(odd, MASSES, MELT, model), at, axis=0)
    np.testing.assert_allclose(a, b, atol=1e-11)
    zero = survival_matrix(np.array([0.0, 1e-3]), MASSES, MELT, model)
    assert np.all(zero[0] == (MELT.Z(MASSES) >= 1))


def test_stencil() -> None:
    """Derived: weights sum to 1 and reproduce polynomials exactly."""
    x = np.linspace(10.0, 12.0, 17)
    first, weight = stencil(x, 8)
    np.testing.assert_allclose(weight.sum(axis=1), 1.0, rtol=1e-13)
    nodes = first[:, None] + np.arange(8)
    for power in range(8):
        found = np.sum(weight * (nodes - 11.0) ** power, axis=1)
        np.testing.assert_allclose(found, (x - 11.0) ** power, atol=1e-9)


def test_windows_and_their_sums() -> None:
    """Derived: columns at shifted places, and their weighted sum in one correlation."""
    table = np.sin(0.05 * np.arange(400))
    start = np.array([20.3, 55.0, 71.77])
    columns = shifted_columns(table, start, 3, 60)
    exact = np.sin(0.05 * (start + 3 * np.arange(60)[:, None]))
    np.testing.assert_allclose(columns, exact, atol=1e-12)
    amount = np.array([0.2, 0.5, -0.3])
    np.testing.assert_allclose(window_sums(table, start, amount, 3, 60), exact @ amount, atol=1e-12)
    many = shifted_columns(np.vstack([table, 2 * table, table]), start, 3, 60)
    np.testing.assert_allclose(many, exact * [1, 2, 1], atol=1e-12)


def test_spread_is_the_transpose() -> None:
    """Derived: sums of a smooth function over scattered amounts are kept."""
    rng = np.random.default_rng(0)
    x, amount = rng.uniform(10, 90, 300), rng.random(300)
    lattice = spread(x, amount, 100)
    f = np.exp(-0.5 * ((np.arange(100) - 40) / 9) ** 2)
    exact = np.sum(amount * np.exp(-0.5 * ((x - 40) / 9) ** 2))
    assert lattice @ f == pytest.approx(exact, rel=1e-7)
    assert lattice.sum() == pytest.approx(amount.sum(), rel=1e-12)


def test_even_step() -> None:
    """Derived: even lists are known as such, others are not."""
    assert even_step(np.log(np.geomspace(1e-9, 1e9, 333))) == pytest.approx(np.log(1e18) / 332)
    assert even_step(np.array([1.0, 2.0, 3.1])) is None
    assert even_step(np.array([3.0, 2.0, 1.0])) is None
    assert even_step(np.array([1.0])) is None


def test_rouse_of_many_chains() -> None:
    """Derived: the whole melt's part is the sum over its chains', in moduli and in time."""
    d = families.lognormal(3e4, 4.0)
    omega = np.logspace(-2, 6, 17)
    tau, g = rouse_on_lattice(d.molar_mass, d.mass, MELT, omega.max())
    x = np.outer(omega, tau)
    whole = (x * x / (1 + x * x)) @ g + 1j * ((x / (1 + x * x)) @ g)
    parts = rouse_moduli(omega, d.molar_mass, MELT) @ d.mass
    np.testing.assert_allclose(whole, parts, rtol=1e-6)
    assert g @ tau == pytest.approx(rouse_viscosity(d.molar_mass, MELT) @ d.mass, rel=1e-8)
    t = np.geomspace(1e-8, 1e-3, 11)
    for j in (60, 100, 140):
        one, times = rouse_modes(float(d.molar_mass[j]), MELT, None)
        exact = np.exp(-np.outer(t, 1 / times)) @ one
        np.testing.assert_allclose(
            rouse_relaxation(t, d.molar_mass[j : j + 1], MELT)[:, 0], exact, rtol=2e-3, atol=1e-3
        )


def test_frequencies_in_any_order_and_number() -> None:
    """Contract: moduli come in the order given, and a list does not change another's values."""
    r = Relaxation(families.lognormal(1e5, 3.0), MELT, Model())
    omega = np.array([30.0, 0.1, 5.0, 0.1])
    a, b = r.moduli(omega)
    for k, w in enumerate(omega):
        one = r.moduli(w)
        assert one[0][0] == pytest.approx(a[k], rel=1e-6)
        assert one[1][0] == pytest.approx(b[k], rel=1e-6)
    again = Relaxation(r.distribution, MELT, Model()).moduli(omega)
    np.testing.assert_array_equal(again[0], a)


@pytest.mark.parametrize("kernel", KERNEL_NAMES)
def test_crossover(kernel: str) -> None:
    """Derived: at the crossover G' = G'', below it G'' is larger; spectrum and melt agree."""
    r = Relaxation(families.lognormal(1e5, 3.0), MELT, Model(kernel))
    omega, g = r.crossover()
    storage, loss = r.moduli([omega, omega / 2])
    assert storage[0] == pytest.approx(loss[0], rel=1e-5)
    assert storage[0] == pytest.approx(g, rel=1e-5)
    assert loss[1] > storage[1]
    assert r.spectrum().crossover() == pytest.approx((omega, g), rel=1e-4)


@pytest.mark.parametrize("kernel", KERNEL_NAMES)
@pytest.mark.parametrize("rouse", [False, True])
@pytest.mark.parametrize("dispersity", [1.0, 1.05, 2.0])
def test_spectrum_of_any_melt(kernel: str, rouse: bool, dispersity: float) -> None:
    """Derived: positive modes give the melt's own moduli; narrow melts are the hard ones."""
    if dispersity == 1.0:
        d = Distribution.from_nodes([1e5], [1.0])
    else:
        d = families.lognormal(1e5, dispersity)
    r = Relaxation(d, MELT, Model(kernel, 2.0, rouse))
    omega = np.logspace(-2, 2, 21) / r.mean_time
    s = r.spectrum(1e-2 / omega[-1])
    assert np.all(s.strength > 0)
    assert s.zero_shear_viscosity == pytest.approx(r.zero_shear_viscosity, rel=1e-4)
    assert s.recoverable_compliance == pytest.approx(r.recoverable_compliance, rel=1e-3)
    a, b = r.moduli(omega)
    c, e = s.moduli(omega)
    assert np.max(np.abs(a + 1j * b - c - 1j * e) / np.hypot(a, b)) < 5e-3


def test_melt_without_a_network() -> None:
    """Derived: chains all below Z = 1 give a Rouse melt, from every door."""
    d = families.lognormal(400.0, 1.5)
    light = dataclasses.replace(MELT, entanglement_molar_mass=1e5)
    r = Relaxation(d, light, Model())
    eta = float(rouse_viscosity(d.molar_mass, light) @ d.mass)
    assert r.zero_shear_viscosity == pytest.approx(eta, rel=1e-9)
    omega = np.array([1e-3, 1.0]) / r.mean_time
    _, loss = r.moduli(omega)
    assert loss[0] / omega[0] == pytest.approx(eta, rel=1e-4)
    s = r.spectrum()
    assert s.zero_shear_viscosity == pytest.approx(eta, rel=1e-6)
    np.testing.assert_allclose(s.moduli(omega)[1], loss, rtol=2e-3)
    # the log-normal's far tail entangles: next to nothing; chains cut at Z < 1 carry nothing
    assert np.all(r.network_modulus(np.geomspace(1e-9, 1.0, 5)) < 1e-20 * light.plateau_modulus)
    cut = Relaxation(d.compact(), light, Model())
    assert np.all(cut.network_modulus(np.geomspace(1e-9, 1.0, 5)) == 0)
    assert cut.spectrum().zero_shear_viscosity == pytest.approx(eta, rel=1e-6)
    np.testing.assert_allclose(cut.moduli(omega)[1], loss, rtol=1e-6)
