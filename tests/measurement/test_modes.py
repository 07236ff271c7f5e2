"""Positive modes: on the grid, as few as needed, and what they leave over."""

from __future__ import annotations

import numpy as np
import pytest

from mwdlink.errors import InputError
from mwdlink.measurement.modes import fit_on_grid, mode_grid, mode_moduli, parsimonious
from mwdlink.relaxation.spectrum import Spectrum

OMEGA = np.logspace(-3, 3, 31)
THREE = Spectrum([0.003, 0.1, 5.0], [4e4, 8e3, 600.0])


def noisy(seed: int, noise: float = 0.02) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    storage, loss = THREE.moduli(OMEGA)
    return (
        storage * np.exp(noise * rng.standard_normal(OMEGA.size)),
        loss * np.exp(noise * rng.standard_normal(OMEGA.size)),
    )


def test_exact_modes_come_back():
    """Derived: three modes without noise are found as three, times and strengths exact."""
    fit = parsimonious(OMEGA, *THREE.moduli(OMEGA), 0.01, 0.01)
    assert fit.tau.size == 3
    np.testing.assert_allclose(fit.tau, THREE.tau, rtol=1e-4)
    np.testing.assert_allclose(fit.strength, THREE.strength, rtol=1e-4)


def test_grid_fit_satisfies_the_optimality_conditions():
    """Derived: at a non-negative least-squares solution the gradient vanishes where modes are."""
    storage, loss = noisy(1)
    fit = fit_on_grid(OMEGA, storage, loss, 0.02, 0.02)
    grid = mode_grid(OMEGA, storage, loss)
    up, out = mode_moduli(OMEGA, grid)
    A = np.vstack([up / (0.02 * storage)[:, None], out / (0.02 * loss)[:, None]])
    A /= np.linalg.norm(A, axis=0)
    r = np.concatenate([fit.residual_storage, fit.residual_loss])
    gradient = A.T @ r
    used = np.isin(np.round(np.log(grid), 9), np.round(np.log(fit.tau), 9))
    assert np.abs(gradient[used]).max() < 1e-6
    assert gradient[~used].max() < 1e-6


@pytest.mark.parametrize("seed", range(4))
def test_few_modes_fit_to_the_noise(seed):
    """Derived: as many modes as were put in (one more by chance) leave the noise over."""
    fit = parsimonious(OMEGA, *noisy(seed), 0.02, 0.02)
    assert 3 <= fit.tau.size <= 4
    assert 0.5 < fit.chi2_per_point < 1.6


@pytest.mark.parametrize("modes", [1, 2, 5, 9])
def test_a_wanted_number_is_kept(modes):
    """House rule: what the user fixes is what they get."""
    fit = parsimonious(OMEGA, *noisy(0), 0.02, 0.02, modes=modes)
    assert fit.tau.size == modes
    assert np.all(fit.strength > 0)
    assert np.all(np.diff(fit.tau) > 0)


def test_impossible_numbers_are_refused():
    """House rule: an error names the remedy."""
    with pytest.raises(InputError, match="Ask for 1 to 31"):
        parsimonious(OMEGA, *noisy(0), 0.02, 0.02, modes=40)
    with pytest.raises(InputError, match="too few"):
        fit_on_grid(OMEGA[:2], *(x[:2] for x in noisy(0)), 0.02, 0.02)


def test_deep_terminal_flow_and_deep_plateau():
    """Derived: a melt much faster or slower than its window is still one mode, exactly."""
    omega = np.logspace(-1, 1, 11)
    for tau in (1e-4, 3e3):
        moduli = Spectrum([tau], [1e5]).moduli(omega)
        fit = fit_on_grid(omega, *moduli, 0.01, 0.01)
        assert fit.chi2_per_point < 1e-3
        assert parsimonious(omega, *moduli, 0.01, 0.01).tau[0] == pytest.approx(tau, rel=1e-3)
