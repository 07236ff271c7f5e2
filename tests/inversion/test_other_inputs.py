"""Distributions from a relaxation curve and from a flow curve."""

from __future__ import annotations

import pickle

import numpy as np
import pytest

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.errors import InputError
from mwdlink.inversion.many import Copies
from mwdlink.inversion.objective import sweep_problem, weights
from mwdlink.inversion.other_inputs import (
    COX_MERZ_ERROR,
    curve_cautions,
    curve_maker,
    flow_cautions,
    flow_problem,
    minimise_copies,
    relaxation_cautions,
    relaxation_problem,
    scatter,
)
from mwdlink.inversion.smoothing import scan
from mwdlink.measurement.sweep import FlowCurve, RelaxationCurve
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

MELT = builtin("hdpe").melt(190.0)
MODEL = Model("power-law")
DISTRIBUTION = Distribution.from_averages(Mw=1e5, dispersity=2.0, family="schulz-zimm")
TIME = np.geomspace(1e-3, 1e2, 41)
RATE = np.geomspace(1e-2, 1e3, 26)


def relaxation_curve(noise: float = 0.03) -> RelaxationCurve:
    g = Relaxation(DISTRIBUTION, MELT, MODEL).relaxation_modulus(TIME)
    keep = g > 1e-2
    rng = np.random.default_rng(0)
    return RelaxationCurve(TIME[keep], g[keep] * np.exp(noise * rng.standard_normal(keep.sum())))


def flow_curve(noise: float = 0.03) -> FlowCurve:
    storage, loss = Relaxation(DISTRIBUTION, MELT, MODEL).moduli(RATE)
    rng = np.random.default_rng(1)
    return FlowCurve(
        RATE, np.hypot(storage, loss) / RATE * np.exp(noise * rng.standard_normal(RATE.size))
    )


def slope_is_right(problem) -> None:
    rng = np.random.default_rng(2)
    w = weights(rng.standard_normal(problem.size))
    values, slope = problem.forward.values_and_slope(w)
    assert np.allclose(values, problem.forward.values(w), rtol=1e-12)
    for i in (0, 20, 45, problem.size - 2, problem.size - 1):
        step = np.zeros(problem.size)
        step[i] = 1e-5 * max(w[i], 1e-3)
        up, down = (problem.forward.values(w + s) for s in (step, -step))
        assert np.allclose(slope[:, i], (up - down) / (2 * step[i]), rtol=2e-4, atol=1e-6 * values)


def test_rows_of_a_relaxation_curve_are_its_modulus():
    """Derived: values at the regridded truth are the melt's own G(t); slopes by differences."""
    problem = relaxation_problem(relaxation_curve(), MELT, MODEL)
    nodes, mass = problem.window.nodes, DISTRIBUTION.regrid(problem.window.edges).mass
    narrow = Distribution.from_nodes(nodes, mass)
    exact = Relaxation(narrow, MELT, MODEL).relaxation_modulus(np.exp(np.zeros(1)))
    at_one = relaxation_problem(
        RelaxationCurve(np.geomspace(0.1, 10, 7), np.ones(7)), MELT, MODEL, window=problem.window
    )
    w = np.concatenate([mass, [0.0, 0.0]])
    # Rouse modes are cut where they do not count, at a place that depends on the list of times
    assert at_one.forward.values(w)[3] == pytest.approx(exact[0], rel=1e-3)
    slope_is_right(problem)


def test_rows_of_a_flow_curve_are_the_complex_viscosity():
    """Derived: against the moduli of the sweep's own problem; slopes by differences."""
    problem = flow_problem(flow_curve(), MELT, MODEL)
    sweep = sweep_problem(
        RATE, np.ones(26), np.ones(26), np.full(52, 0.03), MELT, MODEL, problem.window
    )
    w = weights(np.linspace(0, 3, problem.size))
    moduli = sweep.forward.values(w)
    assert np.allclose(problem.forward.values(w), np.hypot(moduli[:26], moduli[26:]) / RATE)
    assert np.allclose(problem.sigma, np.hypot(problem.sigma[0], COX_MERZ_ERROR), rtol=0.5)
    slope_is_right(problem)


def averages(problem, w: np.ndarray) -> tuple[float, float]:
    nodes = problem.window.nodes
    mass = np.concatenate([nodes, [0.5 * nodes[0], nodes[-1]]])
    first = float(w @ mass)
    return first, float(w @ mass**2) / first


def test_a_relaxation_curve_gives_the_distribution_back():
    """Derived: Mw within 2 %, Mz within 5 % at 3 % noise."""
    problem = relaxation_problem(relaxation_curve(), MELT, MODEL)
    found = scan(problem)
    fit = found.fits[found.best]
    assert fit.converged and 0.4 < fit.chi2 / problem.data.size < 1.8
    mw, mz = averages(problem, fit.w)
    assert mw == pytest.approx(DISTRIBUTION.Mw, rel=0.02)
    assert mz == pytest.approx(DISTRIBUTION.Mz, rel=0.05)
    assert relaxation_cautions(relaxation_curve()) == ()


def test_a_flow_curve_gives_averages_with_its_caution():
    """Derived: Mw within 10 % when Cox-Merz holds exactly; up to 50 % is said (published)."""
    curve = flow_curve()
    problem = flow_problem(curve, MELT, MODEL)
    found = scan(problem)
    fit = found.fits[found.best]
    assert fit.converged
    assert averages(problem, fit.w)[0] == pytest.approx(DISTRIBUTION.Mw, rel=0.10)
    said = flow_cautions(curve)
    assert said[0].code == "flow_curve_input" and "50 %" in said[0].text
    steep = FlowCurve(RATE, 1e3 * RATE**-0.5)
    assert "flow_curve_no_plateau" in {c.code for c in flow_cautions(steep)}


def test_copies_of_a_flow_problem_are_solved_one_by_one():
    """Derived: with no perturbation the copies are the fit itself; with one they differ."""
    problem = flow_problem(flow_curve(), MELT, MODEL)
    found = scan(problem)
    fit = found.fits[found.best]
    rng = np.random.default_rng(0)
    m, n = 3, problem.size
    zero = np.zeros((1, problem.data.size))
    shifts = np.vstack([zero, rng.standard_normal((m - 1, problem.data.size))])
    copies = Copies(
        np.tile(fit.u, (m, 1)), np.full(m, fit.smoothing), shifts,
        np.zeros((m, n - 5)), np.zeros((m, 3)), np.zeros((m, 2)),
    )
    u, good = minimise_copies(problem, copies)
    assert np.all(good)
    assert np.allclose(weights(u[0]), fit.w, atol=2e-3)
    assert np.abs(weights(u[1]) - fit.w).max() > np.abs(weights(u[0]) - fit.w).max()


def test_noise_is_given_read_or_estimated():
    """Derived: a number wins, then the column, then the scatter (at least 1 %)."""
    curve = relaxation_curve()
    assert np.all(relaxation_problem(curve, MELT, MODEL, noise=0.07).sigma == 0.07)
    column = curve.with_(sigma=np.full(len(curve), 0.02))
    assert np.all(relaxation_problem(column, MELT, MODEL).sigma == 0.02)
    assert scatter(curve.time, curve.modulus) == pytest.approx(0.03, rel=0.6)
    exact = relaxation_curve(0.0)
    assert scatter(exact.time, exact.modulus) < 0.01
    assert relaxation_problem(exact, MELT, MODEL).sigma[0] == 0.01


def test_too_few_points_and_unfinished_relaxation_are_said():
    """Common sense: five points are no distribution; G that has not fallen is not terminal."""
    few = RelaxationCurve(TIME[:5], np.linspace(5, 1, 5))
    with pytest.raises(InputError, match="5 points"):
        relaxation_problem(few, MELT, MODEL)
    with pytest.raises(InputError, match="5 points"):
        flow_problem(FlowCurve(RATE[:5], np.linspace(5, 1, 5)), MELT, MODEL)
    early = RelaxationCurve(TIME[:10], 1e5 * TIME[:10] ** -0.3)
    assert relaxation_cautions(early)[0].code == "relaxation_not_terminal"


def test_a_maker_builds_the_problems_of_any_model_and_survives_a_worker():
    """Derived: the same problem as by hand, after pickling too; where the errors came from."""
    for curve, by_hand in (
        (relaxation_curve(), relaxation_problem), (flow_curve(), flow_problem)
    ):
        maker, points, errors = curve_maker(curve, 0.02)
        assert points == len(curve) and errors.source == "given"
        assert curve_maker(curve)[2].source == "estimated"
        built = pickle.loads(pickle.dumps(maker))(MELT, MODEL, None)
        other = by_hand(curve, MELT, MODEL, noise=0.02)
        w = np.full(other.size, 1 / other.size)
        assert np.array_equal(built.misfit(w), other.misfit(w))
        assert np.allclose(errors.sigma_storage, other.sigma)
        with pytest.raises(InputError, match="noise"):
            curve_maker(curve, 3.0)
    assert curve_cautions(flow_curve())[0].code == "flow_curve_input"
