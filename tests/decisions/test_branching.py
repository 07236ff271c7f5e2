"""Signs of long-chain branching: numbers, sources, rivals; never a bare yes or no."""

from __future__ import annotations

import json

import numpy as np
import pytest

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.chains.shift import arrhenius_factor
from mwdlink.decisions.branching import assess_branching, branching_index, make_master
from mwdlink.measurement.master import make_master as plain_master
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.spectrum import Spectrum

HDPE = builtin("hdpe")
TEMPERATURES = (150.0, 170.0, 190.0, 210.0, 230.0)
OMEGA = np.logspace(-2, 2, 25)


@pytest.fixture(scope="module")
def linear() -> Spectrum:
    """An invented linear polyethylene at 190 C, from the chain model."""
    d = Distribution.from_averages(Mw=1.2e5, dispersity=2.0)
    return Relaxation(d, HDPE.melt(190.0)).spectrum()


def measured(spectrum: Spectrum, slow_energy: float, seed: int = 0) -> list[Sweep]:
    """Sweeps of a melt whose modes above 0.3 s have an activation energy of their own [J/mol]."""
    rng = np.random.default_rng(seed)
    out = []
    for t in TEMPERATURES:
        fast, slow = (arrhenius_factor(e, t, 190.0) for e in (26.8e3, slow_energy))
        tau = np.where(spectrum.tau > 0.3, spectrum.tau * slow, spectrum.tau * fast)
        order = np.argsort(tau)
        storage, loss = Spectrum(tau[order], spectrum.strength[order]).moduli(OMEGA)
        noise = np.exp(0.02 * rng.standard_normal((2, OMEGA.size)))
        out.append(Sweep(OMEGA, storage * noise[0], loss * noise[1], temperature_C=t))
    return out


def by_code(flags):
    return {f.code: f for f in flags}


@pytest.mark.parametrize(("eta0", "intrinsic"), [(639.5, 1.0), (6160.0, 1.5), (30730.0, 2.0)])
def test_branching_index_of_linear_polyethylene(eta0, intrinsic):
    """Published (Shroff & Mavridis 1999): the index is zero; eta0 in Pa s at 190 C."""
    assert branching_index(eta0, intrinsic) == pytest.approx(0.0, abs=2e-5)


def test_linear_melt_is_in_line(linear):
    """Derived: sweeps from the chain model with the card's own shift law set off no flag."""
    made = make_master(
        measured(linear, 26.8e3), 190.0, polymer=HDPE, Mw_g_per_mol=1.2e5, dispersity=2.0,
        members=60,
    )  # fmt: skip
    flags = by_code(made.branching)
    assert set(flags) == {
        "superposition",
        "activation_energy",
        "zero_shear_viscosity",
        "phase_angle",
        "low_frequency",
    }
    assert {f.state for f in flags.values()} == {"in line"}
    assert flags["activation_energy"].value.value == pytest.approx(26.8, rel=0.03)
    assert not any(w.code.startswith("branching") for w in made.warnings)


def test_branched_like_melt(linear):
    """Published (Wood-Adams & Costeux 2001): superposition fails and the energy rises."""
    made = make_master(measured(linear, 60e3), 190.0, polymer=HDPE, members=60)
    flags = by_code(made.branching)
    assert flags["superposition"].state == "departs"
    assert flags["activation_energy"].state == "departs"
    assert flags["activation_energy"].value.low > 29.5
    record = json.loads(json.dumps(made.to_dict(), allow_nan=False))
    assert record["branching"]["assessed"] is True
    assert len(record["branching"]["flags"]) == 4


def test_every_flag_has_number_source_and_rivals(linear):
    """House rule: never a bare yes or no."""
    plain = plain_master(measured(linear, 60e3), 190.0, members=30)
    assert plain.to_dict()["branching"] == {"flags": [], "assessed": False}
    found = assess_branching(
        master=plain, polymer=HDPE, Mw_g_per_mol=1.2e5, intrinsic_viscosity_dL_per_g=1.5, members=30
    )
    assert len(found.flags) == 6
    for flag in found.flags:
        assert flag.value.value is not None
        assert len(flag.source) > 10
        assert len(flag.other_causes) > 30
        assert flag.state in ("departs", "in line", "cannot judge")
    assert "others" in found.answer()
    for warning in found.warnings:
        assert "Other causes" in warning.text
    rivals = " ".join(f.other_causes for f in found.flags)
    for word in ("filler", "gel", "second phase", "degrad", "crosslink"):
        assert word in rivals
    table = found.to_frame()
    assert {"sign", "state", "value", "source", "other causes"} <= set(table.columns)
    assert any("does not prove" in t for t in found.cannot_say())


def test_viscosity_line(linear):
    """Derived: with half the true Mw given, eta0 lies 3.6 log10 2 = 1.08 decades higher."""
    storage, loss = linear.moduli(np.logspace(-3, 2, 26))
    s = Sweep(np.logspace(-3, 2, 26), storage, loss, temperature_C=190.0)
    right = by_code(assess_branching(sweep=s, polymer=HDPE, Mw_g_per_mol=1.2e5, members=20).flags)
    half = by_code(assess_branching(sweep=s, polymer=HDPE, Mw_g_per_mol=0.6e5, members=20).flags)
    a, b = right["zero_shear_viscosity"], half["zero_shear_viscosity"]
    assert a.state == "in line" and b.state == "departs"
    assert b.value.value - a.value.value == pytest.approx(3.6 * np.log10(2), abs=1e-6)


def test_bound_is_not_judged(linear):
    """Derived: a lower bound of eta0 below the line says nothing, and that is said."""
    omega = np.logspace(1, 3, 15)
    s = Sweep(omega, *linear.moduli(omega), temperature_C=190.0)
    found = assess_branching(sweep=s, polymer=HDPE, Mw_g_per_mol=1.2e5, members=20)
    flag = by_code(found.flags)["zero_shear_viscosity"]
    assert flag.state == "cannot judge" and flag.value.status == "lower_bound"
    assert any("may lie higher" in t for t in found.cannot_say())


def test_index_only_for_polyethylene(linear):
    """Published for polyethylene only: other polymers are not judged by it."""
    storage, loss = linear.moduli(OMEGA)
    s = Sweep(OMEGA, storage, loss, temperature_C=190.0)
    found = assess_branching(
        sweep=s, polymer=builtin("polystyrene"), intrinsic_viscosity_dL_per_g=1.0, members=10
    )
    assert by_code(found.flags)["branching_index"].state == "cannot judge"


def test_slow_second_process_shows_at_the_low_end(linear):
    """Common practice: a slow elastic part bends G' up at low frequency (second phase, filler)."""
    omega = np.logspace(-2, 2, 25)
    # where the linear melt is in terminal flow
    fast = Spectrum(linear.tau * 1e-2, linear.strength)
    storage, loss = fast.moduli(omega)
    up, out = Spectrum([2000.0], [3.0]).moduli(omega)
    s = Sweep(omega, storage + up, loss + out, temperature_C=190.0)
    flag = by_code(assess_branching(sweep=s, members=30).flags)["low_frequency"]
    assert flag.state == "departs"
    assert "second phase" in flag.other_causes
    plain = Sweep(omega, storage, loss, temperature_C=190.0)
    assert by_code(assess_branching(sweep=plain, members=30).flags)["low_frequency"].state == (
        "in line"
    )


def test_phase_angle_dip():
    """Derived: two well separated modes make the phase angle dip between them; one broad melt
    does not.
    """
    omega = np.logspace(-2, 2.5, 28)
    two = Spectrum([0.01, 10.0], [1e5, 300.0])
    s = Sweep(omega, *two.moduli(omega), temperature_C=190.0)
    found = assess_branching(sweep=s, members=30)
    flag = by_code(found.flags)["phase_angle"]
    assert flag.state == "departs" and flag.value.value > 5
    assert "bimodal" in flag.other_causes
    curve = found.tables()["phase_angle_fit.csv"]
    assert list(curve.columns)[1:3] == ["|G*| [Pa]", "delta [deg]"]


def test_nothing_given():
    """House rule: without anything to look at it says so."""
    assert "None of the signs" in assess_branching().answer()
