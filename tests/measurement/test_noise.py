"""The noise of a sweep, and words for a misfit unlike it."""

from __future__ import annotations

import numpy as np
import pytest

from mwdlink.errors import InputError
from mwdlink.measurement.noise import chi2_in_words, estimate_noise, noise_of, roughness
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.spectrum import Spectrum

TAU = np.logspace(-4, 2, 25)
MELT = Spectrum(TAU, 2e4 * TAU**-0.4 * np.exp(-TAU / 8))


def sweep(noise: float, seed: int, points: int = 31) -> Sweep:
    rng = np.random.default_rng(seed)
    omega = np.logspace(-3, 3, points)
    storage, loss = MELT.moduli(omega)
    return Sweep(
        omega,
        storage * np.exp(noise * rng.standard_normal(points)),
        loss * np.exp(noise * rng.standard_normal(points)),
        rows=np.arange(points) + 3,
    )


@pytest.mark.parametrize("noise", [0.015, 0.03, 0.08])
def test_estimate_is_unbiased_and_its_interval_covers(noise):
    """Derived: over 40 seeds the mean is within 8 %, the 90 % interval covers 75 % or more."""
    found = [estimate_noise(sweep(noise, seed)) for seed in range(40)]
    assert np.mean([f.raw for f in found]) == pytest.approx(noise, rel=0.08)
    covered = np.mean([f.relative.low <= noise <= f.relative.high for f in found])
    assert covered >= 0.75


def test_roughness_agrees_without_any_model():
    """Derived: each curve's own scatter gives the same noise to 10 % over 40 seeds."""
    assert np.mean([roughness(sweep(0.03, s)) for s in range(40)]) == pytest.approx(0.03, rel=0.1)


def test_roughness_is_silent_on_sparse_curves():
    """Measured: below four points a decade the curve's own bends look like noise."""
    assert roughness(sweep(0.03, 0, points=13)) is None


def test_floor():
    """Common practice: no less than 1 % is assumed, and that is said."""
    found = estimate_noise(sweep(0.0, 0))
    assert found.value == 0.01
    assert found.raw < 1e-6
    assert "no less than 1 %" in found.text()


def test_one_bad_reading_does_not_count():
    """Derived: a reading 40 % off is left out of the estimate and its place is told."""
    s = sweep(0.02, 3)
    storage = s.storage.copy()
    storage[12] *= 1.4
    found = estimate_noise(s.with_(storage=storage))
    assert found.outliers == (12,)
    assert found.value == pytest.approx(0.02, rel=0.3)


def test_order_of_sources():
    """Contract: a given number, then columns, then the estimate."""
    s = sweep(0.03, 0)
    columns = s.with_(sigma_storage=np.full(31, 0.05), sigma_loss=np.full(31, 0.04))
    assert noise_of(columns, 0.02).source == "given"
    assert noise_of(columns).source == "columns"
    np.testing.assert_allclose(noise_of(columns).sigma_loss, 0.04)
    assert noise_of(s).source == "estimated"
    with pytest.raises(InputError, match="fraction"):
        noise_of(s, 2.0)


def test_words_for_chi2():
    """House rule: chi2 far from one is explained in words, chi2 near one is not spoken of."""
    assert chi2_in_words(1.1, 50, "given") == ""
    assert "3.0 times the noise that was given" in chi2_in_words(9.0, 50, "given")
    assert "too large" in chi2_in_words(0.1, 50, "columns")
    assert "floor of 1 %" in chi2_in_words(0.1, 50, "estimated")


def test_too_few_points():
    """House rule: an error names the remedy."""
    s = sweep(0.03, 0)
    with pytest.raises(InputError, match="State the noise"):
        estimate_noise(s.select(np.arange(31) < 3))
