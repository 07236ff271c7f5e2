"""Kramers-Kronig, outliers and slips: recognised, proposed, never changed."""

from __future__ import annotations

import json

import numpy as np
import pytest

from mwdlink.measurement.consistency import check_consistency, kramers_kronig
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.spectrum import Spectrum

TAU = np.logspace(-5, 2, 29)
MELT = Spectrum(TAU, 4e4 * TAU**-0.25 * np.exp(-TAU / 4) * 0.5756)
OMEGA = np.logspace(-2, 2, 25)


def sweep(seed: int = 5, noise: float = 0.02, omega: np.ndarray = OMEGA) -> Sweep:
    rng = np.random.default_rng(seed)
    storage, loss = MELT.moduli(omega)
    return Sweep(
        omega,
        storage * np.exp(noise * rng.standard_normal(omega.size)),
        loss * np.exp(noise * rng.standard_normal(omega.size)),
        rows=np.arange(omega.size) + 2,
        temperature_C=190.0,
    )


def codes(found) -> set[str]:
    return {p.code for p in found.proposals}


@pytest.mark.parametrize("noise", [0.005, 0.02, 0.05])
def test_consistent_sweeps_pass(noise):
    """Derived: sums of positive modes with noise obey Kramers-Kronig; no false alarm in 60."""
    for seed in range(20):
        found = check_consistency(sweep(seed, noise))
        assert found.kramers_kronig.passed, seed
        assert not found.proposals
        assert len(found.outliers) == 0


def test_a_drifting_storage_modulus_fails():
    """Derived: G' tilted by a factor 2 over the window belongs to no positive spectrum with G''."""
    s = sweep()
    tilted = s.with_(storage=s.storage * np.logspace(-0.15, 0.15, OMEGA.size)[::-1])
    verdict = kramers_kronig(tilted)
    assert not verdict.passed
    assert "do not belong together" in verdict.text()


def test_common_factor_cannot_be_seen():
    """Derived: a factor on both moduli leaves them consistent, and the result says so."""
    s = sweep()
    found = check_consistency(s.with_(storage=1.4 * s.storage, loss=1.4 * s.loss))
    assert found.kramers_kronig.passed
    assert any("common to both moduli" in t for t in found.cannot_say())


def test_outlier_named_by_its_row():
    """Derived: a reading 30 % off is named by source row and modulus, and kept."""
    s = sweep()
    storage = s.storage.copy()
    storage[10] *= 1.3
    bad = s.with_(storage=storage)
    found = check_consistency(bad)
    assert [(o.row, o.modulus) for o in found.outliers] == [(12, "G'")]
    assert found.outliers[0].deviation == pytest.approx(0.3, abs=0.07)
    assert found.sweep is bad  # never changed
    assert found.passes_without_outliers is True
    assert "row 12" in found.answer()


def test_swapped_columns():
    """Derived: the other way round one spectrum fits; proposed with the ratio of the misfits."""
    s = sweep()
    found = check_consistency(s.with_(storage=s.loss, loss=s.storage))
    assert not found.kramers_kronig.passed
    assert "swapped_columns" in codes(found)
    assert "Nothing was changed" in found.answer()


def test_hertz_from_a_viscosity_column():
    """Derived: |G*|/omega against the file's |eta*| gives 2 pi."""
    s = sweep()
    hertz = s.with_(omega=s.omega / (2 * np.pi))
    found = check_consistency(hertz, complex_viscosity=s.complex_viscosity)
    (p,) = found.proposals
    assert p.code == "hertz_for_radians"
    assert p.evidence == pytest.approx(2 * np.pi, rel=1e-6)
    assert not check_consistency(s, complex_viscosity=s.complex_viscosity).proposals


def test_hertz_from_another_sweep():
    """Derived: the factor that lays one sweep on the other is 2 pi."""
    s = sweep(omega=np.logspace(-1.93, 2.07, 25))
    hertz = s.with_(omega=s.omega / (2 * np.pi))
    found = check_consistency(hertz, other=sweep(seed=8))
    assert codes(found) == {"hertz_for_radians"}
    assert found.proposals[0].evidence == pytest.approx(2 * np.pi, rel=0.05)
    # a real shift, of temperature say, is no slip
    assert not check_consistency(s.with_(omega=s.omega * 2.5), other=sweep(seed=8)).proposals


def test_hertz_from_round_numbers():
    """Common practice: set points are round; numbers round only after times 2 pi are suspicious."""
    s = sweep()
    found = check_consistency(s.with_(omega=s.omega / (2 * np.pi)))
    assert codes(found) == {"hertz_for_radians"}
    # converted from Hz as it should be: 0.01 to 100 Hz
    assert not check_consistency(sweep(omega=2 * np.pi * OMEGA)).proposals


def test_kilopascal():
    """Common practice: melts cross over above a hundredth of G_N; a thousandth is a slip."""
    s = sweep()
    low = s.with_(storage=s.storage / 1e3, loss=s.loss / 1e3)
    assert codes(check_consistency(low, plateau_modulus=1.5e6)) == {"kilopascal_for_pascal"}
    high = s.with_(storage=s.storage * 1e3, loss=s.loss * 1e3)
    assert codes(check_consistency(high, plateau_modulus=1.5e6)) == {"pascal_for_kilopascal"}
    assert not check_consistency(s, plateau_modulus=1.5e6).proposals
    assert codes(check_consistency(low, complex_viscosity=s.complex_viscosity)) == {
        "kilopascal_for_pascal"
    }


def test_overload_and_torque_floor_are_proposed_by_row():
    """Common practice: moduli fall off at overload; readings scatter near the torque floor."""
    s = sweep()
    storage, loss = s.storage.copy(), s.loss.copy()
    storage[-3:] *= [0.85, 0.7, 0.5]
    loss[-3:] *= [0.93, 0.85, 0.7]
    found = check_consistency(s.with_(storage=storage, loss=loss))
    over = [p for p in found.proposals if p.code == "overload_points"]
    assert len(over) == 1 and 26 in over[0].rows and min(over[0].rows) >= 23
    storage = s.storage.copy()
    storage[:3] *= [3.0, 0.4, 1.5]
    found = check_consistency(s.with_(storage=storage))
    floor = [p for p in found.proposals if p.code == "torque_floor_points"]
    assert len(floor) == 1 and 2 in floor[0].rows and max(floor[0].rows) <= 5


def test_an_end_that_departs_to_both_sides_gives_its_largest_departure():
    """Derived: +50 % and -48 % are -1 % or +1 % in the mean, which would say nothing."""
    from mwdlink.measurement.mishaps import _end_proposal

    s, cut = sweep(), np.array([0, 1])
    both = _end_proposal("lower", (2, 3), s, cut, np.array([[0.5, -0.48], [0.5, -0.5]]))
    assert "by up to +50 %," in both.text
    one = _end_proposal("lower", (2, 3), s, cut, np.array([[0.5, 0.4], [0.2, 0.3]]))
    assert "by +35 % on average," in one.text


def test_torque_column():
    """Recalled: below 0.1 uN m most rotational rheometers are unsure."""
    s = sweep()
    found = check_consistency(s.with_(torque=np.logspace(-8, -3, OMEGA.size)))
    (p,) = found.proposals
    assert p.code == "torque_floor_points" and p.rows[0] == 2
    assert len(found.sweep) == OMEGA.size


def test_given_columns_are_the_measure():
    """Contract: error columns are used where the file has them."""
    s = sweep(noise=0.05)
    tight = s.with_(sigma_storage=np.full(25, 0.01), sigma_loss=np.full(25, 0.01))
    verdict = kramers_kronig(tight)
    assert verdict.noise_source == "columns" and not verdict.passed
    assert kramers_kronig(s, noise=0.05).passed


def test_contract():
    """House rule: JSON types, tables with units, place of every residual."""
    found = check_consistency(sweep())
    record = json.loads(json.dumps(found.to_dict(), allow_nan=False))
    assert record["consistency"]["kramers_kronig"]["passed"] is True
    table = found.to_frame()
    assert {"omega [rad/s]", "residual' [-]", "residual'' [-]", "row"} <= set(table.columns)
    assert "belong together" in found.answer()
