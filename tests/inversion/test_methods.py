"""The other methods of inversion, and the ways to choose lambda."""

from __future__ import annotations

import importlib.util
from pathlib import Path

import numpy as np
import pytest

from mwdlink.chains.distribution import Distribution
from mwdlink.errors import ModelError
from mwdlink.inversion.choose import RULES, Curve, choose, free_set_figures, gcv, l_curvature
from mwdlink.inversion.parametric import (
    GeneralisedExponential,
    Mixture,
    fit_generalised_exponential,
    fit_mixture,
)
from mwdlink.inversion.tikhonov import bend_rows, fit_tikhonov, non_negative
from mwdlink.relaxation.mixing import Model

BENCHMARKS = Path(__file__).parents[1] / "benchmarks"
MODEL = Model("power-law")


def resolution():
    spec = importlib.util.spec_from_file_location("r", BENCHMARKS / "peak_resolution.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def problems():
    """Invented melts at 3 % noise: name -> (distribution, problem)."""
    r = resolution()
    make = Distribution.from_averages
    melts = {
        "log-normal": make(Mw=1e5, dispersity=3.0),
        "schulz-zimm": make(Mw=1e5, dispersity=2.0, family="schulz-zimm"),
        "pair": r.pair(4.0),
    }
    rng = np.random.default_rng(3)
    return {k: (d, r.noisy_problem(d, MODEL, MODEL, 0.03, rng)) for k, d in melts.items()}


def averages(problem, w: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    nodes = problem.window.nodes
    mass = np.concatenate([nodes, [0.5 * nodes[0], nodes[-1]]])
    first = w @ mass
    return first, w @ mass**2 / first


# -- choosing lambda -----------------------------------------------------------------------
def made_curve(corner: float, points: int = 60) -> Curve:
    """A scan with its corner at a known lambda: chi2 rises as lambda^2 above it, roughness as
    lambda^-2 below."""
    lam = np.geomspace(1e6, 1e-12, 37)
    x = lam / corner
    return Curve(lam, 50.0 * (1 + x**2), 3.0 * (1 + x**-2), 5.0 - np.log10(x), -x - 1 / x, points)


@pytest.mark.parametrize("corner", [1e-9, 1e-3, 1e2])
def test_the_corner_of_a_curve_with_a_known_corner(corner):
    """Derived: ln chi2 and ln roughness bend where x = 1; the evidence given peaks there too."""
    curve = made_curve(corner)
    for rule in ("l-curve", "evidence"):
        found = curve.smoothing[choose(curve, rule).index]
        assert abs(np.log10(found / corner)) <= 0.5
    # chi2 = N at x = sqrt(60/50 - 1): the next value of the scan below it
    found = curve.smoothing[choose(curve, "discrepancy").index]
    assert -0.5 <= np.log10(found / (corner * np.sqrt(0.2))) <= 0.0
    assert l_curvature(curve).max() > 0


def test_gcv_finds_the_least_of_its_own_formula_on_a_diagonal_problem():
    """Derived: for y = x + e on a diagonal problem trace and residual are sums in closed form."""
    rng = np.random.default_rng(0)
    d = np.geomspace(1.0, 1e-6, 40)
    truth = np.exp(-np.arange(40.0) / 6)
    y = d * truth + 1e-4 * rng.standard_normal(40)
    lam = np.geomspace(1e2, 1e-14, 49)
    shrink = d**2 / (d**2 + lam[:, None])
    chi2 = np.sum(((1 - shrink) * y) ** 2, axis=1)
    freedom = shrink.sum(axis=1)
    for value, f in zip(lam[::6], freedom[::6], strict=True):
        # the same trace from rows, through the code under test, at tiny lambda too
        found, log_det = free_set_figures(np.diag(d), np.eye(40), float(value), np.ones(40, bool))
        assert found == pytest.approx(f, rel=1e-6, abs=1e-6)
        assert np.isfinite(log_det)
    curve = Curve(lam, chi2, np.ones(49), freedom, np.zeros(49), 40)
    pick = choose(curve, "gcv").index
    assert pick == np.argmin(40 * chi2 / (40 - freedom) ** 2)
    error = np.sum((shrink * y / d - truth) ** 2, axis=1)
    assert error[pick] < 4 * error.min()
    assert np.all(np.isinf(gcv(curve)[freedom > 39.5]))


def test_degrees_of_freedom_count_the_free_set_only():
    """Derived: unknowns held at zero are no parameters; the trace over all would count 10."""
    rows = np.eye(10)
    free = np.arange(10) < 4
    found, _ = free_set_figures(rows, np.eye(10), 0.0, free)
    assert found == pytest.approx(4.0)
    found, _ = free_set_figures(rows, np.eye(10), 1.0, free)
    assert found == pytest.approx(2.0)
    assert free_set_figures(rows, np.eye(10), 1.0, np.zeros(10, bool)) == (0.0, 0.0)


def test_a_pick_at_the_end_of_the_scan_is_said():
    """Common practice: a bracket end is a warning; so is noise that no lambda reaches."""
    curve = made_curve(1e-16)
    found = choose(curve, "evidence")
    assert [c.code for c in found.cautions] == ["smoothing_at_end"]
    hopeless = Curve(
        curve.smoothing, 1e4 * curve.chi2, curve.roughness, curve.freedom, curve.log_evidence, 60
    )
    codes = [c.code for c in choose(hopeless, "discrepancy").cautions]
    assert "discrepancy_not_reached" in codes
    with pytest.raises(ModelError, match="evidence, gcv"):
        choose(curve, "eye")


# -- Tikhonov -----------------------------------------------------------------------
@pytest.mark.parametrize("smoothing", [1e-14, 1e-6, 1.0, 1e6])
def test_the_inner_solution_is_optimal(smoothing):
    """Derived: Karush-Kuhn-Tucker: the gradient is one number on the free set, larger elsewhere."""
    rng = np.random.default_rng(1)
    x = np.linspace(0, 1, 30)
    rows = np.exp(-np.subtract.outer(x, x) ** 2 / 0.02)
    truth = np.maximum(np.sin(7 * x), 0)
    truth /= truth.sum()
    target = rows @ truth + 1e-3 * rng.standard_normal(30)
    rows, target = 1e3 * rows, 1e3 * target
    penalty = np.diff(np.eye(30), n=2, axis=0)
    w = non_negative(rows, target, penalty, np.zeros(28), smoothing)
    assert w.sum() == pytest.approx(1.0, abs=1e-12) and np.all(w >= 0)
    gradient = rows.T @ (rows @ w - target) + smoothing * penalty.T @ (penalty @ w)
    size = np.abs(rows.T @ target).max()
    free = w > 1e-8
    level = np.median(gradient[free])
    assert np.all(np.abs(gradient[free] - level) < 1e-5 * size)
    assert np.all(gradient[~free] - level > -1e-5 * size)


def test_the_penalty_does_not_depend_on_the_spacing():
    """Derived: int (f'')^2 dx of a Gaussian of width s is 3/(8 sqrt(pi) s^5)."""
    s = 0.4
    exact = 3 / (8 * np.sqrt(np.pi) * s**5)
    for n in (90, 180):
        x = np.linspace(-3, 3, n)
        h = x[1] - x[0]
        mass = np.append(np.exp(-0.5 * (x / s) ** 2) / s / np.sqrt(2 * np.pi) * h, [0.0, 0.0])
        assert np.sum((bend_rows(n, h) @ mass) ** 2) == pytest.approx(exact, rel=0.02)


@pytest.mark.parametrize("rule", RULES)
def test_tikhonov_with_every_way_of_choosing(problems, rule, full):
    """Derived: Mw within 2 %, Mz within 6 % of the truth at 3 % noise, chi2 near the noise."""
    names = ("log-normal", "pair") if full or rule == "evidence" else ("pair",)
    for d, problem in (problems[n] for n in names):
        fit = fit_tikhonov(problem, choose_by=rule)
        assert fit.converged and fit.curve.rule == rule
        table = fit.curve.columns()
        assert table["chosen"].sum() == 1 and len(table["smoothing [-]"]) == 21
        assert fit.smoothing == table["smoothing [-]"][table["chosen"]][0]
        mw, mz = averages(problem, fit.w)
        assert mw == pytest.approx(d.Mw, rel=0.02)
        assert mz == pytest.approx(d.Mz, rel=0.06)
        assert 0.6 < fit.chi2 / problem.data.size < 2.2
        assert np.all(fit.w >= 0) and fit.w.sum() == pytest.approx(1.0)


def test_tikhonov_at_a_tiny_fixed_lambda_is_an_answer(problems):
    """Derived: lambda 1e-14 is a plain non-negative fit: least chi2, sparse, finite figures."""
    d, problem = problems["schulz-zimm"]
    fit = fit_tikhonov(problem, smoothing=1e-14)
    assert fit.converged and fit.smoothing == 1e-14
    assert np.isfinite(fit.curve.log_evidence[0]) and 0 < fit.curve.freedom[0] < 25
    assert fit.chi2 <= fit_tikhonov(problem).chi2 + 0.1
    assert averages(problem, fit.w)[0] == pytest.approx(d.Mw, rel=0.03)


def test_tikhonov_members_spread_about_the_answer(problems):
    """Derived: Mw of 16 members within a per cent or so; the same seed gives the same members."""
    d, problem = problems["log-normal"]
    fit = fit_tikhonov(problem, members=16, seed=4)
    assert fit.members.shape[0] >= 14 and fit.members.shape[1] == problem.size
    mw = averages(problem, fit.w)[0]
    spread = np.std([averages(problem, w)[0] for w in fit.members]) / mw
    assert 0.001 < spread < 0.02
    again = fit_tikhonov(problem, members=3, seed=4)
    assert np.array_equal(again.members, fit.members[:3])


# -- families -----------------------------------------------------------------------
@pytest.mark.parametrize("kind", ["mixture", "exponential"])
def test_slopes_of_the_families_are_right(problems, kind):
    """Derived: against central differences; weights are positive and sum to one."""
    window = problems["log-normal"][1].window
    middle = float(np.log(window.nodes[30]))
    if kind == "mixture":
        family = Mixture(window, 2)
        theta = np.array([middle, middle + 1.0, -0.5, -0.9, 0.4, -4.0])
    else:
        family = GeneralisedExponential(window)
        theta = np.array([middle, 0.3, -0.2, -4.0])
    w, slope = family.weights_and_slope(theta)
    assert w.sum() == pytest.approx(1.0) and np.all(w >= 0)
    for i in range(theta.size):
        step = np.zeros(theta.size)
        step[i] = 1e-5
        up, down = (family.weights_and_slope(theta + s)[0] for s in (step, -step))
        assert np.allclose(slope[:, i], (up - down) / 2e-5, atol=2e-6)


def test_mixture_counts_its_parts(problems):
    """Derived: one part for a log-normal melt, two for a pair; four when they are asked for."""
    for name, parts in (("log-normal", 1), ("pair", 2)):
        d, problem = problems[name]
        fit = fit_mixture(problem, members=10)
        assert fit.converged and fit.curve.chosen + 1 == parts
        table = fit.curve.columns()
        assert list(table["parts [-]"]) == [1, 2, 3, 4] and "roughness [-]" not in table
        mw, mz = averages(problem, fit.w)
        assert mw == pytest.approx(d.Mw, rel=0.02) and mz == pytest.approx(d.Mz, rel=0.05)
        assert fit.members.shape == (10, problem.size)
        assert fit.chi2 / problem.data.size < 1.5


def test_generalised_exponential_of_its_own_kind_and_not(problems):
    """Derived: Schulz-Zimm is the case b = 1; two peaks are beyond it and chi2 says so."""
    d, problem = problems["schulz-zimm"]
    fit = fit_generalised_exponential(problem, members=10)
    mw, mz = averages(problem, fit.w)
    assert fit.converged and mw == pytest.approx(d.Mw, rel=0.01)
    assert mz == pytest.approx(d.Mz, rel=0.03)
    assert fit.members.shape[0] >= 9
    _, hard = problems["pair"]
    assert fit_generalised_exponential(hard).chi2 > 3 * hard.data.size
