"""Peaks: one where there is one, two where the data tell two apart, none of the ripple."""

from __future__ import annotations

import importlib.util
from pathlib import Path

import numpy as np
import pytest

from mwdlink.chains.distribution import Distribution
from mwdlink.inversion.peaks import find_peaks
from mwdlink.relaxation.mixing import Model

BENCHMARKS = Path(__file__).parents[1] / "benchmarks"
NODES = np.geomspace(1e4, 1e7, 61)
X = np.log10(NODES)


def resolution():
    spec = importlib.util.spec_from_file_location("r", BENCHMARKS / "peak_resolution.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def bell(centre: float, width: float) -> np.ndarray:
    return np.exp(-0.5 * ((X - centre) / width) ** 2) / width / np.sqrt(2 * np.pi)


def test_position_weight_and_width_of_two_clear_bells():
    """Derived: two Gaussians in log10 M of known centre, weight and full width 2.355 sigma."""
    density = 0.3 * bell(4.8, 0.12) + 0.7 * bell(6.0, 0.2)
    low, high = find_peaks(NODES, None, density)
    assert np.log10(low.molar_mass) == pytest.approx(4.8, abs=0.005)
    assert np.log10(high.molar_mass) == pytest.approx(6.0, abs=0.005)
    assert low.fraction == pytest.approx(0.3, abs=0.003)
    assert high.fraction == pytest.approx(0.7, abs=0.003)
    assert low.width_decades == pytest.approx(2.355 * 0.12, rel=0.05)
    assert high.width_decades == pytest.approx(2.355 * 0.2, rel=0.05)
    assert not low.at_edge and not high.at_edge
    assert set(low.to_dict()) >= {"M_g_per_mol", "M_low_g_per_mol", "fraction", "fraction_low"}


def test_ripple_and_crumbs_are_no_peaks():
    """Common practice: shallow valleys and half a per cent of weight are not peaks."""
    ripple = bell(5.5, 0.4) * (1 + 0.03 * np.sin(40 * X))
    assert len(find_peaks(NODES, None, ripple)) == 1
    crumb = bell(5.5, 0.2) + 0.005 * bell(4.4, 0.1)
    assert len(find_peaks(NODES, None, crumb)) == 1


def test_a_peak_must_return_in_the_members_of_every_kernel():
    """Derived: a second peak in a third of the members, or in one kernel's only, is dropped."""
    one, two = bell(5.5, 0.25), 0.6 * bell(5.1, 0.1) + 0.4 * bell(5.8, 0.1)
    few = np.array([two] * 10 + [one] * 20)
    assert len(find_peaks(NODES, few, two)) == 1
    most = np.array([two] * 25 + [one] * 5)
    assert len(find_peaks(NODES, most, two)) == 2
    kernel = np.array([0] * 25 + [1] * 5)
    assert len(find_peaks(NODES, most, two, groups=kernel)) == 1
    weights = np.array([1e-6] * 25 + [1.0] * 5)
    assert len(find_peaks(NODES, most, two, weights=weights)) == 1


def test_weight_beyond_the_nodes_belongs_to_the_outermost_peaks():
    """Derived: 0.3 and 0.7 with a tenth of each cut off; what is above is told apart if given."""
    density = 0.2 * bell(4.8, 0.12) + 0.6 * bell(6.0, 0.2)
    low, high = find_peaks(NODES, density[None], density, above_members=[0.1], above_central=0.1)
    assert low.fraction == pytest.approx(0.3, abs=0.003)
    assert high.fraction == pytest.approx(0.7, abs=0.003)
    (one,) = find_peaks(NODES, None, 0.7 * bell(5.5, 0.2))
    assert one.fraction == pytest.approx(1.0)
    assert one.to_dict()["persistence"] is None  # nothing was drawn that could return


def test_a_rise_to_the_end_of_the_nodes_is_flagged():
    """Derived: a maximum at the last node is at the edge."""
    density = bell(7.2, 0.5)
    (peak,) = find_peaks(NODES, density[None], density)
    assert peak.at_edge


@pytest.mark.parametrize("kernel", ["exponential", "reptation", "power-law"])
def test_narrow_melts_show_one_peak(kernel):
    """Derived: dispersity 1.02 and 1.1, 3 % noise; step kernels show two (published)."""
    r = resolution()
    model = Model(kernel)
    for seed, dispersity in enumerate((1.02, 1.1)):
        rng = np.random.default_rng(seed)
        d = Distribution.from_averages(Mw=1e5, dispersity=dispersity)
        _, peaks = r.peaks_of(r.noisy_problem(d, model, model, 0.03, rng), rng, 12)
        assert len(peaks) == 1
        assert peaks[0].molar_mass == pytest.approx(1e5, rel=0.08)
        assert peaks[0].fraction > 0.97


@pytest.mark.parametrize("kernel", ["exponential", "reptation", "power-law"])
def test_two_equal_peaks_at_a_ratio_of_three_are_told_apart(kernel):
    """Derived: 50/50 at a molar-mass ratio of 3, parts of dispersity 1.1, 3 % noise."""
    r = resolution()
    model = Model(kernel)
    rng = np.random.default_rng(5)
    _, peaks = r.peaks_of(r.noisy_problem(r.pair(3.0), model, model, 0.03, rng), rng, 12)
    assert len(peaks) == 2
    low, high = peaks
    assert low.fraction == pytest.approx(0.5, abs=0.08)
    assert 2.3 < high.molar_mass / low.molar_mass < 3.7


@pytest.mark.full
@pytest.mark.parametrize("kernel", ["exponential", "reptation", "power-law"])
def test_two_peaks_at_three_over_many_seeds(kernel):
    """Derived: resolved in at least nine of ten noise seeds."""
    assert resolution().resolved(3.0, kernel, 0.03, 10) >= 0.9


def measured(d: Distribution, kernel: str):
    """An invented melt's noisy sweep."""
    from mwdlink.measurement.sweep import Sweep

    r = resolution()
    storage, loss = r.Relaxation(d, r.MELT, Model(kernel)).moduli(r.OMEGA)
    rng = np.random.default_rng(0)
    up, out = (x * np.exp(0.03 * rng.standard_normal(x.size)) for x in (storage, loss))
    return Sweep(r.OMEGA, up, out, temperature_C=190.0)


def all_kernels(d: Distribution, kernel: str):
    """The whole inversion of it, every kernel tried."""
    from mwdlink.chains.polymer import builtin
    from mwdlink.inversion.invert import invert

    return invert(measured(d, kernel), builtin("hdpe"), members=60, noise=0.03)


def test_no_false_peak_when_sharper_kernels_fit_as_well():
    """Derived: a narrow power-law melt fits every kernel; the sharper ones show two peaks."""
    found = all_kernels(Distribution.from_averages(Mw=1e5, dispersity=1.1), "power-law")
    assert sum(k["admissible"] for k in found.kernels) > 1
    assert len(found.peaks) == 1


@pytest.mark.full
@pytest.mark.parametrize("kernel", ["exponential", "reptation", "power-law"])
def test_one_and_two_peaks_with_every_kernel_tried(kernel):
    """Derived: one peak to dispersity 1.1, two at a ratio of 3, whichever kernel made the data."""
    for dispersity in (1.02, 1.1):
        d = Distribution.from_averages(Mw=1e5, dispersity=dispersity)
        assert len(all_kernels(d, kernel).peaks) == 1
    assert len(all_kernels(resolution().pair(3.0), kernel).peaks) == 2
