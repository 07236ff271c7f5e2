"""A spectrum's own rules: what it accepts, and what follows from its modes."""

from __future__ import annotations

import numpy as np
import pytest

from mwdlink.errors import InputError, ModelError
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.modes import shared_by_neighbours
from mwdlink.relaxation.spectrum import Spectrum, crossover_of

BROAD = Spectrum([1e-3, 1e-1, 10.0], [1e5, 1e4, 1e3])


@pytest.mark.parametrize(
    ("tau", "g"),
    [
        ([], []),
        ([1.0, 2.0], [1.0]),
        ([1.0, np.nan], [1.0, 1.0]),
        ([0.0, 1.0], [1.0, 1.0]),
        ([2.0, 1.0], [1.0, 1.0]),
        ([1.0, 2.0], [1.0, -1.0]),
        ([1.0, 2.0], [0.0, 0.0]),
    ],
)
def test_modes_that_make_no_spectrum(tau: list, g: list) -> None:
    """Contract: refused."""
    with pytest.raises(InputError):
        Spectrum(tau, g)


def test_terminal_quantities() -> None:
    """Derived: eta0 = sum g tau, Je0 = sum g tau^2/eta0^2, mean time eta0 Je0."""
    assert BROAD.zero_shear_viscosity == pytest.approx(1e2 + 1e3 + 1e4)
    assert BROAD.recoverable_compliance == pytest.approx((0.1 + 1e2 + 1e5) / 11100.0**2)
    assert BROAD.mean_time == pytest.approx((0.1 + 1e2 + 1e5) / 11100.0)
    storage, loss = BROAD.moduli([1e-6])
    assert loss[0] / 1e-6 == pytest.approx(BROAD.zero_shear_viscosity, rel=1e-6)
    assert storage[0] / loss[0] ** 2 == pytest.approx(BROAD.recoverable_compliance, rel=1e-6)
    assert BROAD.complex_viscosity([1e-6])[0] == pytest.approx(11100.0, rel=1e-6)


def test_limits_of_the_modulus() -> None:
    """Derived: G(0) = sum g, G' at high frequency too; G(t) falls."""
    assert BROAD.relaxation_modulus([0.0])[0] == pytest.approx(1.11e5)
    assert BROAD.moduli([1e9])[0][0] == pytest.approx(1.11e5)
    assert np.all(np.diff(BROAD.relaxation_modulus(np.linspace(0, 5, 50))) < 0)


def test_cox_merz_needs_two_decades() -> None:
    """Contract: below two decades of tau eta = eta0 and a caution; above, |eta*|."""
    narrow = Spectrum([1.0, 50.0], [1.0, 1.0])
    eta, notes = narrow.flow_curve([10.0])
    assert eta[0] == narrow.zero_shear_viscosity
    assert notes[0].code == "cox_merz_narrow"
    eta, notes = BROAD.flow_curve([10.0])
    assert not notes
    assert eta[0] == pytest.approx(BROAD.complex_viscosity([10.0])[0])


def test_no_crossover() -> None:
    """Derived: a melt whose G'' stays above has none; the lowest of several is given."""
    two = Spectrum([1e-6, 1.0], [1e6, 1e3])
    assert two.crossover()[0] == pytest.approx(1.0, rel=1e-2)
    assert crossover_of(lambda w: (w / w, 2 * w / w), 1e-3, 1e3) is None


def test_scaled() -> None:
    """Derived: a_T moves times, b_T moduli."""
    s = BROAD.scaled(3.0, 2.0)
    assert s.zero_shear_viscosity == pytest.approx(6 * BROAD.zero_shear_viscosity)
    assert s.recoverable_compliance == pytest.approx(BROAD.recoverable_compliance / 2)


def test_modes_shared_by_neighbours() -> None:
    """Derived: g and g tau are kept inside the list; faster modes keep g tau; none is negative."""
    tau = np.geomspace(1e-2, 1e2, 9)
    times, modes = np.array([1e-2, 0.7, 33.0]), np.array([1.0, 2.0, 3.0])
    g = shared_by_neighbours(tau, times, modes)
    assert np.all(g >= 0)
    assert g.sum() == pytest.approx(6.0)
    assert g @ tau == pytest.approx(times @ modes)
    fast = shared_by_neighbours(tau, np.array([1e-4]), np.array([5.0]))
    assert fast @ tau == pytest.approx(5e-4)


@pytest.mark.parametrize("exponent", [0.9, np.nan, np.inf, 9.0])
def test_exponents_out_of_range(exponent: float) -> None:
    """Contract: the mixing exponent is >= 1, and beyond 8 of no use."""
    with pytest.raises(ModelError, match="exponent"):
        Model("power-law", exponent)
