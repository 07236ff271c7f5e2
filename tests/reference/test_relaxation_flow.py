"""Steady flow, melt indexer, limits: against common practice and published numbers."""

from __future__ import annotations

import numpy as np
import pytest

from mwdlink.chains import families
from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.errors import InputError
from mwdlink.relaxation.flow import (
    DIE_RADIUS,
    apparent_rate,
    melt_flow_rate,
    volume_flow,
    wall_stress,
)
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.spectrum import Spectrum
from mwdlink.relaxation.validity import (
    DILATED_TUBE_GR,
    cautions,
    frequency_cautions,
    struglinski_graessley,
)

MAXWELL = Spectrum([0.5], [2.0e4])


def codes(d: Distribution, name: str = "hdpe", model: Model | None = None) -> set[str]:
    return {c.code for c in cautions(d, builtin(name).melt(), model or Model())}


@pytest.mark.parametrize(
    ("load", "bore", "piston"), [(2.16, 19.36, 19.67), (5.0, 44.8, 45.5), (21.6, 193.6, 196.7)]
)
def test_melt_flow_wall_stress(load: float, bore: float, piston: float) -> None:
    """Load g R/(2 A L) with the die, bore and piston of ISO 1133-1 (recalled; piston published)."""
    assert wall_stress(load, "bore") / 1e3 == pytest.approx(bore, rel=1.2e-3)
    assert wall_stress(load) / 1e3 == pytest.approx(piston, rel=1.2e-3)


def test_flow_of_a_newtonian_melt() -> None:
    """Hagen and Poiseuille: Q = pi R^3 tau_w/(4 eta) (common practice)."""
    eta, stress = 3.0e3, wall_stress(2.16)
    q = volume_flow(lambda rate: np.full_like(rate, eta), stress)
    assert q == pytest.approx(np.pi * DIE_RADIUS**3 * stress / (4 * eta), rel=1e-6)


@pytest.mark.parametrize("n", [0.3, 0.5, 0.8])
def test_flow_of_a_power_law_melt(n: float) -> None:
    """Q = pi R^3/(1/n + 3) (tau_w/K)^(1/n) (common practice)."""
    k, stress = 1.0e4, float(wall_stress(5.0))
    q = volume_flow(lambda rate: k * rate ** (n - 1), stress)
    assert q == pytest.approx(
        np.pi * DIE_RADIUS**3 / (1 / n + 3) * (stress / k) ** (1 / n), rel=1e-6
    )


def test_apparent_rate() -> None:
    """4 Q/(pi R^3) = 1.846 MFR/rho, rho in g/cm3 (derived)."""
    assert apparent_rate(1.0, 1000.0) == pytest.approx(1.846, abs=5e-4)
    # and back from a Newtonian melt's own flow
    eta = 5e3
    mfr = melt_flow_rate(lambda rate: np.full_like(rate, eta), 2.16, 760.0)
    assert apparent_rate(mfr, 760.0) == pytest.approx(wall_stress(2.16) / eta, rel=1e-6)


def test_load_lost_at_the_entrance_and_refusals() -> None:
    """Contract: a share of the load can be taken off; impossible input is refused."""
    whole = melt_flow_rate(MAXWELL, 2.16, 760.0)
    assert melt_flow_rate(MAXWELL, 2.16, 760.0, lost=0.1) == pytest.approx(0.9 * whole, rel=1e-6)
    for load, density in ((0.0, 760.0), (2.16, -1.0)):
        with pytest.raises(InputError):
            melt_flow_rate(MAXWELL, load, density)
    with pytest.raises(InputError, match="never reaches"):
        volume_flow(lambda rate: np.full_like(rate, 1e20), 1e4)


def test_maxwell_mode_in_steady_shear() -> None:
    """Common practice: one Maxwell mode is Newtonian, eta = G lambda, at every rate."""
    eta, notes = MAXWELL.flow_curve([1e-3, 1.0, 1e3])
    np.testing.assert_allclose(eta, 1e4, rtol=1e-14)
    assert [c.code for c in notes] == ["cox_merz_narrow"]


def test_maxwell_mode_after_steady_shear() -> None:
    """Common practice: after the end of steady shear the stress decays as exp(-t/lambda)."""
    t = np.array([0.0, 0.1, 0.5, 2.0])
    lam = MAXWELL.zero_shear_viscosity / 2.0e4
    assert lam == 0.5
    np.testing.assert_allclose(MAXWELL.cessation_viscosity(t), np.exp(-t / lam), rtol=1e-14)
    np.testing.assert_allclose(
        MAXWELL.startup_viscosity(t), 1e4 * (1 - np.exp(-t / lam)), rtol=1e-14, atol=1e-9
    )


def test_maxwell_moduli_and_crossover() -> None:
    """Common practice: G' = G x^2/(1+x^2), G'' = G x/(1+x^2), crossing at 1/lambda and G/2."""
    storage, loss = MAXWELL.moduli([2.0])
    assert storage[0] == pytest.approx(1e4)
    assert loss[0] == pytest.approx(1e4)
    assert MAXWELL.crossover() == pytest.approx((2.0, 1e4), rel=1e-8)
    assert MAXWELL.recoverable_compliance == pytest.approx(1 / 2.0e4)
    assert MAXWELL.mean_time == pytest.approx(0.5)
    assert MAXWELL.tan_delta([4.0])[0] == pytest.approx(0.5)


def test_startup_is_the_integral_of_the_modulus() -> None:
    """Derived: eta+(t) = int_0^t G, and eta-(t)/eta0 = 1 - eta+(t)/eta0."""
    s = Spectrum([0.01, 1.0, 20.0], [1e5, 2e4, 500.0])
    t = np.linspace(0.0, 5.0, 200001)
    area = np.concatenate([[0.0], np.cumsum(0.5 * np.diff(t) * _pairs(s.relaxation_modulus(t)))])
    np.testing.assert_allclose(s.startup_viscosity(t[::20000]), area[::20000], rtol=1e-6)
    np.testing.assert_allclose(
        s.cessation_viscosity(t[::20000]),
        1 - s.startup_viscosity(t[::20000]) / s.zero_shear_viscosity,
        atol=1e-12,
    )


def _pairs(x: np.ndarray) -> np.ndarray:
    return x[1:] + x[:-1]


def test_cox_merz_curve_of_a_broad_melt() -> None:
    """Cox and Merz: eta(rate) = |eta*|(omega = rate), for a spectrum of two decades and more."""
    r = Relaxation(families.lognormal(1.2e5, 4.0), builtin("hdpe").melt(), Model())
    s = r.spectrum()
    rate = np.logspace(-3, 2, 11)
    eta, notes = s.flow_curve(rate)
    assert not notes
    storage, loss = r.moduli(rate)
    np.testing.assert_allclose(eta, np.hypot(storage, loss) / rate, rtol=1e-4)
    assert eta[0] == pytest.approx(r.zero_shear_viscosity, rel=0.1)
    assert np.all(np.diff(eta) < 0)


@pytest.mark.parametrize(
    ("name", "mass", "dispersity"),
    [("hdpe", 1.0e5, 3.0), ("hdpe", 1.5e5, 6.0), ("polybutadiene", 2.5e5, 1.5)],
)
def test_range_of_relaxation_times(name: str, mass: float, dispersity: float) -> None:
    """Common practice (no source): relaxation times of melts span about 1e-3 to 1e3 s.

    A sanity line: the times that carry 5 to 95 % of the viscosity lie within it. (The mean time
    eta0 Je0 of a broad log-normal melt does not: it hangs on a tail of next to no weight.)
    """
    melt = builtin(name).melt()
    s = Relaxation(families.schulz_zimm(mass, dispersity), melt, Model()).spectrum()
    share = np.cumsum(s.strength * s.tau) / s.zero_shear_viscosity
    low, high = np.interp([0.05, 0.95], share, s.tau)
    assert 1e-3 < low < high < 1e3


def test_graessley_number_of_the_published_pair() -> None:
    """Watanabe et al. 2004, published: polyisoprene 21.4e3 + 308e3, Me 5e3: Gr 0.79."""
    assert struglinski_graessley(308e3, 21.4e3, 5.0e3) == pytest.approx(0.79, abs=0.005)


def test_two_part_melts_are_warned_of() -> None:
    """Park and Larson 2004, published: above Gr 0.064 the tube is dilated; 0.5 from Watanabe."""
    melt = builtin("polyisoprene").melt()
    pair = Distribution.from_nodes([21.4e3, 308e3], [0.9, 0.1])
    found = [c for c in cautions(pair, melt, Model()) if c.code == "dilated_tube"]
    assert len(found) == 1
    assert "constraint release" in found[0].text
    curves = Distribution.blend(
        [(families.lognormal(21.4e3, 1.05), 0.8), (families.lognormal(308e3, 1.05), 0.2)]
    )
    assert "dilated_tube" in {c.code for c in cautions(curves, melt, Model())}
    # a moderate pair, and any single-peaked melt however broad: nothing to say
    mild = Distribution.blend(
        [(families.lognormal(1e5, 1.1), 0.5), (families.lognormal(4e5, 1.1), 0.5)]
    )
    assert struglinski_graessley(4e5, 1e5, 0.8 * melt.entanglement_molar_mass) < DILATED_TUBE_GR
    assert "dilated_tube" not in {c.code for c in cautions(mild, melt, Model())}
    assert "dilated_tube" not in codes(families.lognormal(1e5, 8.0))


def test_noise_makes_no_parts() -> None:
    """Contract: a noisy curve of one broad peak is not taken for two parts."""
    rng = np.random.default_rng(3)
    m = np.geomspace(1e3, 1e7, 300)
    curve = np.exp(-0.5 * ((np.log(m) - np.log(1e5)) / 1.2) ** 2)
    d = Distribution.from_table(m, curve + 0.02 * rng.normal(size=m.size), "dW/dlog10M")
    assert "dilated_tube" not in codes(d)


def test_other_limits_are_said() -> None:
    """Contract: short chains, the law's range, a missing Rouse part, glassy frequencies."""
    broad = families.lognormal(1.2e5, 30.0)
    assert "short_chains" in codes(broad)
    assert "rouse_off" in codes(broad, model=Model(rouse=False))
    assert "rouse_off" not in codes(broad)
    melt = builtin("polybutadiene").melt()
    assert melt.law_range is not None
    long = families.lognormal(3 * melt.law_range[1], 1.1)
    assert "law_range_above" in codes(long, "polybutadiene")
    short = families.lognormal(0.5 * melt.law_range[0], 1.1)
    assert "law_range_below" in codes(short, "polybutadiene")
    assert not codes(families.lognormal(1e5, 1.1), "polybutadiene")
    fast = 2.0 / melt.equilibration_time
    assert [c.code for c in frequency_cautions(fast, melt)] == ["glassy_modes_missing"]
    assert frequency_cautions(0.4 * fast, melt) == ()
