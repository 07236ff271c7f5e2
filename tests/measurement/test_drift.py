"""Two sweeps of one sample, before and after."""

from __future__ import annotations

import json

import numpy as np
import pytest

from mwdlink.errors import InputError
from mwdlink.measurement.drift import compare_drift
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.spectrum import Spectrum

TAU = np.logspace(-4, 2, 25)
STRENGTH = 2e4 * TAU**-0.4 * np.exp(-TAU / 8)


def sweep(seed: int, longer: float = 1.0, low: float = -2, high: float = 2) -> Sweep:
    """`longer` multiplies all relaxation times."""
    rng = np.random.default_rng(seed)
    omega = np.logspace(low, high, int(5 * (high - low)) + 1)
    storage, loss = Spectrum(TAU * longer, STRENGTH).moduli(omega)
    return Sweep(
        omega,
        storage * np.exp(0.02 * rng.standard_normal(omega.size)),
        loss * np.exp(0.02 * rng.standard_normal(omega.size)),
        temperature_C=190.0,
    )


def test_no_change_is_called_none():
    """Derived: equal melts with noise; no false alarm in 30 pairs."""
    for seed in range(30):
        found = compare_drift(sweep(seed), sweep(100 + seed))
        assert not found.changed
        assert found.warnings == ()


@pytest.mark.parametrize(("longer", "word"), [(1.3, "crosslinking"), (0.75, "scission")])
def test_a_change_shows_most_at_low_frequency(longer, word):
    """Common practice: a change of chain length shows most at the low end; causes are named."""
    found = compare_drift(sweep(1), sweep(2, longer))
    assert found.changed
    assert abs(found.low_end_change.value) > abs(found.change.value)
    assert np.sign(found.change.value) == np.sign(longer - 1)
    assert word in found.answer()
    assert found.warnings[0].code == "sample_changed"


def test_other_frequencies_are_interpolated():
    """Derived: only the common range counts."""
    found = compare_drift(sweep(1), sweep(2, low=-1, high=1))
    assert found.omega[0] >= 0.1 * (1 - 1e-9) and found.omega[-1] <= 10 * (1 + 1e-9)
    json.dumps(found.to_dict(), allow_nan=False)
    assert list(found.to_frame().columns)[0] == "omega [rad/s]"


def test_refusals():
    """House rule: other temperatures and no common range are refused with a remedy."""
    with pytest.raises(InputError, match="one temperature"):
        compare_drift(sweep(1), sweep(2).with_(temperature_C=200.0))
    with pytest.raises(InputError, match="same range"):
        compare_drift(sweep(1, low=-2, high=0), sweep(2, low=1, high=2))
