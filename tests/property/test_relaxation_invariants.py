"""What must hold for any melt: scalings, order, bounds (derived)."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from mwdlink.chains import families
from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.relaxation.kernels import KERNEL_NAMES
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

# M1 invented: no shipped card names it
MELT = dataclasses.replace(builtin("hdpe").melt(), fluctuation_molar_mass=1500.0)

masses = st.floats(3.5, 6.0).map(lambda x: 10.0**x)
spreads = st.floats(1.02, 12.0)
models = st.builds(Model, st.sampled_from(KERNEL_NAMES), st.floats(1.0, 3.84), st.booleans())
quick = settings(max_examples=10, deadline=None)


@quick
@example(10.0**3.5, 6.0, Model("reptation", 3.0, True), 2.0)
@given(masses, spreads, models, st.floats(0.1, 10.0))
def test_time_factor_moves_frequencies(mass: float, spread: float, model: Model, f: float) -> None:
    """All times multiplied by f: the same moduli at frequencies divided by f, eta0 times f."""
    d = families.lognormal(mass, spread, points=60)
    omega = np.logspace(-3, 3, 7)
    here, there = Relaxation(d, MELT, model), Relaxation(d, MELT.with_(time_factor=f), model)
    for a, b in zip(here.moduli(omega), there.moduli(omega / f), strict=True):
        np.testing.assert_allclose(a, b, rtol=1e-4, atol=1e-9 * MELT.plateau_modulus)
    ratio = there.zero_shear_viscosity / here.zero_shear_viscosity
    np.testing.assert_allclose(ratio, f, rtol=1e-6)


@pytest.mark.parametrize("mass", [10.0**3.5, 1e5])
@pytest.mark.parametrize("rouse", [True, False])
@pytest.mark.parametrize("kernel", KERNEL_NAMES)
def test_viscosity_is_the_limit_of_the_loss_modulus(kernel: str, rouse: bool, mass: float) -> None:
    """G''/omega far below 1/mean time is eta0; also where most chains are too short to entangle."""
    r = Relaxation(families.lognormal(mass, 6.0, points=60), MELT, Model(kernel, 2.0, rouse))
    omega = 1e-3 / r.mean_time
    loss = r.moduli(np.array([omega]))[1][0]
    # a broad melt approaches it slowly: 2e-4 short of it there
    np.testing.assert_allclose(loss / omega, r.zero_shear_viscosity, rtol=1e-3)


@quick
@given(masses, spreads, models)
def test_moduli_are_those_of_a_melt(mass: float, spread: float, model: Model) -> None:
    """G' rises with frequency, |eta*| falls, eta0 bounds it, G(t) falls from at most G_N."""
    r = Relaxation(families.schulz_zimm(mass, spread, points=80), MELT, model)
    omega = np.logspace(-4, 5, 19)
    storage, loss = r.moduli(omega)
    slack = 1e-9 * MELT.plateau_modulus
    assert np.all(storage > 0) and np.all(loss > 0)
    assert np.all(np.diff(storage) > -slack)
    viscosity = np.hypot(storage, loss) / omega
    assert np.all(np.diff(viscosity) <= 1e-6 * viscosity[:-1] + slack / omega[1:])
    assert viscosity.max() <= r.zero_shear_viscosity * (1 + 1e-5) + slack / omega[0]
    g = r.network_modulus(np.geomspace(1e-9, 1e6, 31))
    assert np.all(np.diff(g) <= 1e-100)
    assert g[0] <= MELT.plateau_modulus * (1 + 1e-12)


@quick
@given(masses, models, st.floats(0.05, 0.95), st.floats(2.0, 20.0))
def test_blends_lie_between_their_parts(
    mass: float, model: Model, fraction: float, ratio: float
) -> None:
    """Each blend's G(t) lies between its components', at every time."""
    a, b = Distribution.from_nodes([mass], [1.0]), Distribution.from_nodes([mass * ratio], [1.0])
    blend = Distribution.blend([(a, 1 - fraction), (b, fraction)])
    t = np.geomspace(1e-8, 1e5, 23)
    low, high, middle = (Relaxation(d, MELT, model).network_modulus(t) for d in (a, b, blend))
    assert np.all(middle <= np.maximum(low, high) * (1 + 1e-9))
    assert np.all(middle >= np.minimum(low, high) * (1 - 1e-9))
