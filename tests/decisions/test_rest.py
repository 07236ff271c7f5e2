"""How long to wait after loading."""

from __future__ import annotations

import json

import numpy as np
import pytest

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.decisions.rest import FLOW, STEP, rest_time
from mwdlink.errors import InputError, ModelError
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.spectrum import Spectrum

HDPE = builtin("hdpe")
MELT = Distribution.from_averages(Mw=1.0e5, dispersity=2.0, family="schulz-zimm")


def sweep(low: float, seed: int = 0) -> Sweep:
    omega = np.logspace(low, 2.5, int(6 * (2.5 - low)) + 1)
    rng = np.random.default_rng(seed)
    storage, loss = Relaxation(MELT, HDPE.melt(190.0)).spectrum().moduli(omega)
    noise = np.exp(0.02 * rng.standard_normal((2, omega.size)))
    return Sweep(omega, storage * noise[0], loss * noise[1], temperature_C=190.0)


@pytest.fixture(scope="module")
def predicted():
    return rest_time(MELT, HDPE, members=60)


def test_single_mode():
    """Common practice: one Maxwell mode's stress decays as exp(-t/lambda), step and flow alike."""
    found = rest_time(Spectrum([2.0], [1000.0]))
    for wait in found.waits:
        assert wait.time.value == pytest.approx(2.0 * np.log(1 / wait.residual), rel=1e-3)
    assert {w.after for w in found.waits} == {STEP, FLOW}


def test_two_modes():
    """Derived: after flow the slow mode weighs g tau, after a step only g."""
    found = rest_time(Spectrum([0.1, 10.0], [900.0, 100.0]), residuals=(0.01,))
    # step: 0.1 exp(-t/10) = 0.01; flow: 1000/1090 exp(-t/10) = 0.01
    assert found.wait(0.01, STEP).time.value == pytest.approx(10 * np.log(10), rel=1e-3)
    assert found.wait(0.01, FLOW).time.value == pytest.approx(10 * np.log(1000 / 10.9), rel=1e-3)


def test_distribution_against_its_own_relaxation(predicted):
    """Derived: then G(t)/G_N and eta-(t)/eta0 of the central model are the residual asked for."""
    melt = HDPE.melt(190.0)
    s = Relaxation(MELT, melt, Model("power-law", 2.0)).spectrum()
    for w in predicted.waits:
        left = (
            s.relaxation_modulus(w.time.value)[0] / melt.plateau_modulus
            if w.after == STEP
            else s.cessation_viscosity(w.time.value)[0]
        )
        assert left == pytest.approx(w.residual, rel=0.01)


def test_band_holds_kernels_and_scatter(predicted):
    """House rule: kernels and the card's scatter (0.1 decades) are in the interval."""
    for w in predicted.waits:
        assert w.time.low < w.time.value < w.time.high
        assert w.time.high / w.time.low > 10**0.3
    one = rest_time(MELT, HDPE, kernels=("power-law",), exponent=2.0, members=60)
    wide, narrow = predicted.wait(0.01).time, one.wait(0.01).time
    assert wide.high / wide.low > narrow.high / narrow.low


def test_longer_for_less_stress_and_after_flow(predicted):
    """Derived: less stress takes longer, and steady flow loads the slow modes."""
    for after in (STEP, FLOW):
        times = [w.time.value for w in predicted.waits if w.after == after]
        assert times == sorted(times)
    for r in (0.1, 0.01, 0.001):
        assert predicted.wait(r, FLOW).time.value > predicted.wait(r, STEP).time.value


def test_sweep_agrees_with_the_distribution_it_came_from():
    """Derived: a sweep that reaches terminal flow gives the same waits after steady flow."""
    found = rest_time(sweep(-2.5), members=40)
    melt = HDPE.melt(190.0)
    s = Relaxation(MELT, melt).spectrum()
    w = found.wait(0.01, FLOW)
    assert w.time.status == "resolved"
    assert s.cessation_viscosity(w.time.value)[0] == pytest.approx(0.01, rel=0.15)
    assert "G(0)" in found.full_stress


def test_window_too_short_gives_lower_bounds():
    """Derived: at the end of the window the stress was still above the residual, no more."""
    found = rest_time(sweep(0.5), members=40)
    s = Relaxation(MELT, HDPE.melt(190.0)).spectrum()
    w = found.wait(0.001, FLOW)
    assert w.time.status == "lower_bound"
    assert w.time.value == pytest.approx(1 / 10**0.5, rel=1e-6)
    assert s.cessation_viscosity(w.time.value)[0] > 0.001
    assert any(c.code == "window_too_short" for c in found.warnings)
    assert "at least" in found.answer()


def test_a_hundred_seconds_are_written_so():
    """As a person would write them, between the two digits below and the minutes above."""
    from mwdlink.decisions.rest_result import _seconds

    assert [_seconds(t) for t in (0.123, 99.7, 131.2, 240.0)] == [
        "0.12 s",
        "99.7 s",
        "131 s",
        "4 min",
    ]


def test_another_temperature():
    """Derived: times go with a_T of the card; without a card the temperature is refused."""
    s = sweep(-2.5)
    here, there = rest_time(s, members=0), rest_time(s, HDPE, temperature_C=170.0, members=0)
    factor = HDPE.shift.factor(170.0, 190.0)
    ratio = there.wait(0.1).time.value / here.wait(0.1).time.value
    assert ratio == pytest.approx(factor, rel=1e-3)
    assert any(c.code == "temperature_shifted" for c in there.warnings)
    with pytest.raises(InputError, match="shift law"):
        rest_time(s, temperature_C=170.0)
    with pytest.raises(ModelError):
        rest_time(s, HDPE, temperature_C=500.0)


def test_ensemble_of_relaxations():
    """House rule: a list is an ensemble, the first its centre."""
    melt = HDPE.melt(190.0)
    kinds = ("power-law", "exponential", "reptation")
    found = rest_time([Relaxation(MELT, melt, Model(k)) for k in kinds], residuals=(0.1,))
    q = found.wait(0.1, FLOW).time
    assert q.low < q.value <= q.high


def test_cautions(predicted):
    """Published (Roy & Roland 2013): re-entanglement. Common practice: 1e-3 to 1e3 s."""
    assert any(c.code == "re_entanglement" for c in predicted.warnings)
    assert "ten times longer" in predicted.paragraph()
    slow = rest_time(Spectrum([1e5], [1000.0]))
    assert any(c.code == "relaxation_time_unusual" for c in slow.warnings)
    assert not any(c.code == "relaxation_time_unusual" for c in predicted.warnings)


def test_contract(predicted):
    """Contract of `rest`: keys and the table with both decay curves."""
    record = json.loads(json.dumps(predicted.to_dict(), allow_nan=False))
    assert len(record["rest"]) == 6
    assert set(record["rest"][0]) == {"residual", "after", "time_s"}
    assert {r["after"] for r in record["rest"]} == {"step", "steady flow"}
    table = predicted.to_frame()
    assert list(table.columns)[0] == "t [s]"
    for name in ("after step", "after steady flow"):
        low, mid, high = (table[f"{name}{k} [-]"] for k in (" low", "", " high"))
        assert (low <= mid).all() and (mid <= high).all()
        assert mid.is_monotonic_decreasing


def test_refusals():
    """House rule: an error names the remedy."""
    with pytest.raises(InputError, match="0.01 for 1 %"):
        rest_time(MELT, HDPE, residuals=(1.0,))
    with pytest.raises(InputError, match="Name a polymer"):
        rest_time(MELT)
    with pytest.raises(InputError, match="Give a distribution"):
        rest_time(3.0)
