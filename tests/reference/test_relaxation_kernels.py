"""Kernels against closed forms and printed constants."""

from __future__ import annotations

import dataclasses

import mpmath
import numpy as np
import pytest

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.chains.polymer import builtin
from mwdlink.errors import ModelError
from mwdlink.relaxation.kernels import (
    KERNEL_NAMES,
    available_kernels,
    fluctuation_sum,
    get_kernel,
    power_law_decay,
    tube_survival,
)
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

HDPE = builtin("hdpe").melt()
# M1 of the fluctuation kernel, invented: no shipped card names it
WITH_M1 = dataclasses.replace(HDPE, fluctuation_molar_mass=1500.0)
ONE = Distribution.from_nodes([1e5], [1.0])


def compliance(melt: Melt, kernel: str, beta: float) -> float:
    r = Relaxation(ONE, melt, Model(kernel, beta, rouse=False))
    return r.recoverable_compliance * melt.plateau_modulus


@pytest.mark.parametrize(
    ("beta", "c"), [(1.0, 0.82247), (2.0, 0.34686), (2.25, 0.29646), (3.84, 0.13891)]
)
def test_reptation_constant(beta: float, c: float) -> None:
    """Doi and Edwards 1978 (recalled) at 1; powers of mu recomputed to five digits (derived)."""
    found = get_kernel("reptation").constant(beta, HDPE, np.array([1e5]))
    assert found[0] == pytest.approx(c, abs=6e-6)


def test_reptation_constant_is_exact_at_one() -> None:
    """Derived: int mu ds = (8/pi^2) sum p^-4 over odd p = pi^2/12."""
    found = get_kernel("reptation").constant(1.0, HDPE, np.array([1e5]))
    assert found[0] == pytest.approx(np.pi**2 / 12, rel=1e-9)


@pytest.mark.parametrize(("beta", "value"), [(1.0, 1.2), (2.0, 1.3784)])
def test_reptation_compliance(beta: float, value: float) -> None:
    """Je0 G_N = 6/5 (Doi and Edwards 1978, recalled) and 1.3784 for the square (derived)."""
    assert compliance(HDPE, "reptation", beta) == pytest.approx(value, abs=5e-5)


@pytest.mark.parametrize(("n", "value"), [(0.20, 3.27), (0.23, 2.95), (0.25, 2.78), (0.42, 1.98)])
@pytest.mark.parametrize("beta", [1.0, 2.0])
def test_power_law_compliance(n: float, value: float, beta: float) -> None:
    """Derived: Je0 G_N = (1+n)^2/(n(n+2)), whatever the exponent for one molar mass."""
    melt = dataclasses.replace(HDPE, power_law_n=n)
    exact = (1 + n) ** 2 / (n * (n + 2))
    assert exact == pytest.approx(value, abs=0.01)
    assert compliance(melt, "power-law", beta) == pytest.approx(exact, rel=1e-8)


@pytest.mark.parametrize("beta", [1.0, 2.0, 3.84])
def test_exponential_compliance(beta: float) -> None:
    """Derived: Je0 G_N = 1."""
    assert compliance(HDPE, "exponential", beta) == pytest.approx(1.0, rel=1e-9)


def test_power_law_decay_is_its_integral() -> None:
    """Derived: F = n int_0^1 x^(n-1) exp(-z/x) dx, by mpmath at 30 digits, out to F = 1e-26."""
    mpmath.mp.dps = 30
    for n in (0.1, 0.23, 0.6):
        for z in (1e-12, 1e-5, 1e-2, 0.5, 2.9, 3.1, 10.0, 55.0):
            exact = n * mpmath.expint(1 + n, z)
            assert float(power_law_decay(np.array([z]), n)[0]) == pytest.approx(
                float(exact), rel=2e-12
            )
            whole = n * mpmath.quad(
                lambda x, n=n, z=z: x ** (n - 1) * mpmath.exp(-z / x), [0, z / 40, z, 1]
            ) if 0.1 < z < 1 else exact  # fmt: skip
            assert float(whole) == pytest.approx(float(exact), rel=1e-9)


def test_tube_survival_is_its_sum() -> None:
    """Derived: mu = (8/pi^2) sum over odd p of p^-2 exp(-p^2 u), summed directly."""
    u = np.geomspace(1e-5, 30.0, 60)
    p = np.arange(1, 20001, 2.0)
    exact = 8 / np.pi**2 * np.array([np.sum(np.exp(-p * p * x) / p**2) for x in u])
    # what 1e4 terms leave out is at most 8/pi^2/(2 p) where all of them still count
    np.testing.assert_allclose(tube_survival(u), exact, atol=1e-12, rtol=1e-13)
    assert tube_survival(np.array([0.0]))[0] == 1.0


def test_short_time_form_of_tube_survival() -> None:
    """1 - 4 sqrt(u)/pi^1.5 (derived) meets the sum where the code changes over."""
    u = np.array([0.0599999, 0.0600001])
    low, high = tube_survival(u)
    assert low - high == pytest.approx(2 * 1e-7 * 2 / (np.pi**1.5 * np.sqrt(0.06)), rel=1e-6)


def test_fluctuation_sum() -> None:
    """Derived: g(x) = sum (1 - exp(-n^2 x))/n^2 by direct summation, within 5e-7."""
    n = np.arange(1, 400001.0)
    for x in (1e-3, 1e-2, 0.1, 0.29, 0.31, 0.79, 0.81, 2.0, 10.0):
        # beyond the last n every exponential is 0: the rest of the sum is 1/(N + 1/2)
        exact = np.sum(-np.expm1(-n * n * x) / n**2) + 1 / (n[-1] + 0.5)
        assert float(fluctuation_sum(np.array([x]))[0]) == pytest.approx(exact, abs=1e-10)
    # the printed pair of forms: sqrt(pi x) - x/2 up to 0.8, five terms above (within 5e-7)
    x = np.linspace(0.01, 5.0, 400)
    five = np.pi**2 / 6 - sum(np.exp(-k * k * x) / k**2 for k in range(1, 6))
    printed = np.where(x <= 0.8, np.sqrt(np.pi * x) - x / 2, five)
    np.testing.assert_allclose(fluctuation_sum(x), printed, atol=5e-7)


def test_closed_square_root_form_would_diverge() -> None:
    """Derived: g stays below pi^2/6, which the square root often printed does not."""
    assert fluctuation_sum(np.array([1e6]))[0] == pytest.approx(np.pi**2 / 6, rel=1e-12)


@pytest.mark.parametrize("beta", [1.0, 2.0, 2.25])
@pytest.mark.parametrize("mass", [1e4, 1e5, 1.1e6])
def test_fluctuation_kernel_is_anchored(beta: float, mass: float) -> None:
    """Derived: on a card that names M1, tau_r(M) makes the viscosity law come back."""
    d = Distribution.from_nodes([mass], [1.0])
    r = Relaxation(d, WITH_M1, Model("fluctuation", beta, rouse=False))
    assert r.zero_shear_viscosity == pytest.approx(WITH_M1.zero_shear_law(mass), rel=1e-7)


def test_fluctuations_shorten_and_vanish() -> None:
    """Derived: with M1 far below M the kernel is reptation; fluctuations only lower c."""
    tube = get_kernel("reptation").constant(2.0, WITH_M1, np.array([1e5]))[0]
    kernel = get_kernel("fluctuation")
    none = dataclasses.replace(HDPE, fluctuation_molar_mass=1e-3)
    assert kernel.constant(2.0, none, np.array([1e5]))[0] == pytest.approx(tube, rel=1e-3)
    c = kernel.constant(2.0, WITH_M1, np.array([1e4, 1e5, 1e6]))
    assert np.all(np.diff(c) > 0)
    assert c[-1] < tube


def test_fluctuation_kernel_needs_its_constant() -> None:
    """Contract: offered only where the card names M1; otherwise the error says what to add."""
    assert "fluctuation" not in available_kernels(HDPE)
    assert available_kernels(WITH_M1) == KERNEL_NAMES
    with pytest.raises(ModelError, match="fluctuation_molar_mass"):
        Relaxation(ONE, HDPE, Model("fluctuation")).moduli([1.0])
    with pytest.raises(ModelError, match="unknown kernel"):
        Model("step")


@pytest.mark.parametrize("kernel", KERNEL_NAMES)
@pytest.mark.parametrize("beta", [1.0, 2.0, 3.84])
def test_survival_is_a_decay(kernel: str, beta: float) -> None:
    """Derived: F(0) = 1, F falls, stays within [0, 1], and its integral is c."""
    mass = np.array([1e5])
    k = get_kernel(kernel)
    x = np.linspace(np.log(1e-22), np.log(300.0), 3000)
    s = np.concatenate([[0.0], np.exp(x)])[:, None]
    f = k.survival(s, beta, WITH_M1, mass)[:, 0] ** beta
    assert f[0] == 1.0
    assert np.all(np.diff(f) <= 0) and np.all(f >= 0)
    area = np.sum(f[1:] * s[1:, 0]) * (x[1] - x[0])
    assert area == pytest.approx(k.constant(beta, WITH_M1, mass)[0], rel=1e-7)
