"""Viscosity laws through the whole chain, the Rouse part, the tube formula."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from mwdlink.chains import families
from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin, builtin_names
from mwdlink.relaxation.kernels import KERNEL_NAMES
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model, relaxation_times
from mwdlink.relaxation.rouse import (
    rouse_moduli,
    rouse_second_moment,
    rouse_viscosity,
    tube_disengagement_time,
)

GAS = 8.31446
# K, a, temperature [C] and a molar mass within the fitted range, as the sources give them
TIER_A = {
    "hdpe": (3.40e-15, 3.60, 190.0, 1.0e5),  # Raju et al. 1979, published
    "polybutadiene": (4.36e-13, 3.40, 25.0, 1.0e5),  # fitted, Colby, Fetters & Graessley 1987
    "polyisoprene": (2.74e-14, 3.60, 25.0, 1.5e5),  # fitted, Gotro & Graessley 1984
    "polyisobutylene": (8.67e-13, 3.57, 25.0, 3.0e5),  # fitted, Fetters, Graessley & Kiss 1991
}
KERNELS = [k for k in KERNEL_NAMES if k != "fluctuation"]


def one_chain(mass: float) -> Distribution:
    return Distribution.from_nodes([mass], [1.0])


@pytest.mark.parametrize("name", TIER_A)
@pytest.mark.parametrize("kernel", KERNELS)
@pytest.mark.parametrize("beta", [1.0, 2.0, 2.25])
@pytest.mark.parametrize("rouse", [False, True])
def test_published_law(name: str, kernel: str, beta: float, rouse: bool) -> None:
    """K M^a of each tier-A polymer (published or fitted on published points), from G*(omega)."""
    k, a, temperature, mass = TIER_A[name]
    melt = builtin(name).melt(temperature)
    r = Relaxation(one_chain(mass), melt, Model(kernel, beta, rouse))
    law = k * mass**a
    assert r.zero_shear_viscosity == pytest.approx(law, rel=1e-6)
    omega = np.array([1e-4]) / r.mean_time
    storage, loss = r.moduli(omega)
    assert np.hypot(storage, loss)[0] / omega[0] == pytest.approx(law, rel=1e-5)


@pytest.mark.parametrize("name", TIER_A)
def test_published_law_of_a_narrow_fraction(name: str) -> None:
    """The same law with a dispersity of 1.02, within the few per cent such a spread makes."""
    k, a, temperature, mass = TIER_A[name]
    r = Relaxation(families.lognormal(mass, 1.02), builtin(name).melt(temperature), Model())
    assert r.zero_shear_viscosity == pytest.approx(k * mass**a, rel=0.03)


@pytest.mark.parametrize("name", builtin_names())
def test_law_is_exact_from_three_entanglements(name: str) -> None:
    """Derived: network and Rouse part together give the card's law from Z = 3 up."""
    melt = builtin(name).melt()
    strand = 0.8 * melt.entanglement_molar_mass
    for z in (3.0, 3.7, 5.0, 12.5, 80.0, 900.0):
        r = Relaxation(one_chain(z * strand), melt, Model())
        assert r.zero_shear_viscosity == pytest.approx(melt.zero_shear_law(z * strand), rel=1e-6)


@pytest.mark.parametrize("name", builtin_names())
def test_step_at_one_entanglement(name: str) -> None:
    """Derived: the network part fades in from Z = 1, so the viscosity steps by 1.2 % at most.

    Without the fading it would step by 0.7 % (no critical molar mass on the card) to 113 %
    (polybutadiene): below Z = 1 a chain is pure Rouse and not tied to the law.
    """
    melt = builtin(name).melt()
    strand = 0.8 * melt.entanglement_molar_mass
    below, above = (
        Relaxation(one_chain(z * strand), melt, Model()).zero_shear_viscosity
        for z in (1 - 1e-9, 1 + 1e-9)
    )
    assert 1.0 <= above / below < 1.012
    z = np.linspace(0.5, 4.0, 60)
    eta = np.array(
        [Relaxation(one_chain(x * strand), melt, Model()).zero_shear_viscosity for x in z]
    )
    assert np.all(np.diff(eta) > 0)
    assert np.all(np.diff(relaxation_times(z[z >= 1] * strand, melt, Model())) > 0)


def test_critical_molar_mass() -> None:
    """Below Mc the law goes on with exponent 1 (common practice), continuous at Mc."""
    melt = builtin("hdpe").melt()
    mc = melt.critical_molar_mass
    assert mc == 3480.0
    law = melt.zero_shear_law(np.array([0.25, 0.5, 1 - 1e-12, 1 + 1e-12]) * mc)
    assert law[1] / law[0] == pytest.approx(2.0, rel=1e-12)
    assert law[3] / law[2] == pytest.approx(1.0, rel=1e-9)


def test_temperature_moves_times_only() -> None:
    """Common practice: a shift law moves times by a_T; moduli stay unless the card says so."""
    cold, warm = builtin("hdpe").melt(190.0), builtin("hdpe").melt(210.0)
    d = families.lognormal(1e5, 3.0)
    omega = np.logspace(-2, 3, 12)
    a_t = warm.a_T / cold.a_T
    assert a_t == pytest.approx(np.exp(26.8e3 / GAS * (1 / 483.15 - 1 / 463.15)), rel=1e-6)
    there = Relaxation(d, warm, Model()).moduli(omega)
    here = Relaxation(d, cold, Model()).moduli(omega * a_t)
    np.testing.assert_allclose(there[0], here[0], rtol=1e-6)
    np.testing.assert_allclose(there[1], here[1], rtol=1e-6)


# -- the Rouse part -------------------------------------------------------------------------------


def rouse_melt(units: int) -> tuple[float, object]:
    """A chain far below one entanglement with a given number of modes: long strands, invented."""
    base = builtin("polystyrene").melt()
    melt = dataclasses.replace(
        base, entanglement_molar_mass=1e9, plateau_modulus=2.0e5 * 18808 / 1e9
    )
    return (units + 0.5) * melt.repeat_unit, melt


@pytest.mark.parametrize(("units", "factor"), [(1, 1.0), (10, 0.45), (100000, 0.4)])
def test_rouse_compliance(units: int, factor: float) -> None:
    """Je0 = (2/5) M/(rho R T) for many modes; 0.45 for ten, 1 for one (Rouse; derived)."""
    mass, melt = rouse_melt(units)
    eta = rouse_viscosity(np.array([mass]), melt)[0]
    je = rouse_second_moment(np.array([mass]), melt)[0] / eta**2
    # rho R T/M = G_N M_e/M, rho from the card's own definition of M_e
    modulus = melt.plateau_modulus * melt.entanglement_molar_mass / mass
    p = np.arange(1.0, units + 1)
    assert je * modulus == pytest.approx(np.sum(p**-4) / np.sum(p**-2) ** 2, rel=1e-10)
    assert je * modulus == pytest.approx(factor, abs=2e-3)
    assert melt.Z(mass) < 1


def test_rouse_modulus_is_ideal_gas_of_chains() -> None:
    """G_e/Z = rho R T/M at the law's temperature, rho in kg/m3 and M in g/mol (derived)."""
    melt = builtin("hdpe").melt()
    front = melt.plateau_modulus * melt.entanglement_molar_mass / 1e4
    kelvin = 463.15
    assert front == pytest.approx(1000 * melt.density * GAS * kelvin / 1e4, rel=0.01)
    assert melt.entanglement_modulus / melt.Z(1e4) == pytest.approx(front, rel=1e-12)


def test_rouse_viscosity_of_an_unentangled_melt() -> None:
    """eta0 = (pi^2/12) (rho R T/M) tau_R for many modes (Rouse; tau_R/2 the longest time)."""
    mass, melt = rouse_melt(100000)
    tau_r = melt.equilibration_time * melt.Z(mass) ** 2
    modulus = melt.plateau_modulus * melt.entanglement_molar_mass / mass
    exact = np.pi**2 / 12 * modulus * tau_r
    assert rouse_viscosity(np.array([mass]), melt)[0] == pytest.approx(exact, rel=2e-5)
    r = Relaxation(one_chain(mass), melt, Model())
    assert r.zero_shear_viscosity == pytest.approx(exact, rel=2e-5)
    assert r.recoverable_compliance == pytest.approx(0.4 / modulus, rel=1e-4)


def mode_by_mode(mass: float, melt) -> tuple[np.ndarray, np.ndarray]:
    """Every mode of Likhtman and McLeish's last two sums (recalled), one by one."""
    z = melt.Z(mass)
    p = np.arange(1.0, max(int(mass // melt.repeat_unit), 1) + 1)
    s = np.clip(z - p, 0, 1)
    front = 1.25 * melt.plateau_modulus / z
    tau_r = melt.equilibration_time * z * z
    return np.concatenate([front * s / 5, front * (1 - s)]), np.concatenate(
        [tau_r / p**2, tau_r / (2 * p**2)]
    )


@pytest.mark.parametrize("name", ["hdpe", "polystyrene", "polybutadiene"])
@pytest.mark.parametrize("z", [0.05, 0.99, 1.0, 1.5, 2.0, 7.3, 40.0, 300.0])
def test_rouse_part_mode_by_mode(name: str, z: float) -> None:
    """Derived: gathered modes against the plain sums: eta exactly, moduli to 3e-4 up to 1/tau_e."""
    melt = builtin(name).melt()
    mass = z * 0.8 * melt.entanglement_molar_mass
    g, tau = mode_by_mode(mass, melt)
    assert rouse_viscosity(np.array([mass]), melt)[0] == pytest.approx(g @ tau, rel=1e-9)
    assert rouse_second_moment(np.array([mass]), melt)[0] == pytest.approx(g @ tau**2, rel=1e-9)
    omega = np.logspace(-8, 0, 33) / melt.equilibration_time
    x = np.outer(omega, tau)
    exact = (x * x / (1 + x * x)) @ g + 1j * ((x / (1 + x * x)) @ g)
    found = rouse_moduli(omega, np.array([mass]), melt)[:, 0]
    assert np.max(np.abs(found - exact) / np.abs(exact)) < 3e-4


@pytest.mark.parametrize(
    ("z", "share"), [(5, 0.1838), (10, 0.2991), (20, 0.4354), (50, 0.6010), (100, 0.7021)]
)
def test_tube_formula(z: float, share: float) -> None:
    """tau_d/(3 tau_e Z^3) of Likhtman and McLeish 2002 (recalled), values recomputed."""
    assert tube_disengagement_time(z, 1.0) / (3 * z**3) == pytest.approx(share, abs=6e-5)


def test_unentangled_chains_dilute() -> None:
    """Contract: with the Rouse part chains with Z < 1 carry no network stress, else all do."""
    melt = builtin("hdpe").melt()
    short = 0.5 * 0.8 * melt.entanglement_molar_mass
    d = Distribution.from_nodes([short, 1e5], [0.3, 0.7])
    t = np.array([1e-12])
    on = Relaxation(d, melt, Model("exponential", 2.0, True)).network_modulus(t)
    off = Relaxation(d, melt, Model("exponential", 2.0, False)).network_modulus(t)
    assert on[0] / melt.plateau_modulus == pytest.approx(0.49, rel=1e-6)
    assert off[0] / melt.plateau_modulus == pytest.approx(1.0, rel=0.01)
