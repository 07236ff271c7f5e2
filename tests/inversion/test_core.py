"""The numerical core of the inversion: derivatives, minimum, evidence, stacked copies."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from melts import exact_card, mean_within, measured, melt_of

from mwdlink.chains import families
from mwdlink.chains.distribution import Distribution
from mwdlink.errors import InputError
from mwdlink.inversion.ensemble import Branch, unpulled
from mwdlink.inversion.many import Copies, minimise_many
from mwdlink.inversion.objective import lump_rows, sweep_problem, weights
from mwdlink.inversion.quantities import Cells
from mwdlink.inversion.roughness import roughness
from mwdlink.inversion.smoothing import SCAN, good_start, scan
from mwdlink.inversion.solve import Shift, minimise
from mwdlink.inversion.window import find_window, mass_at_time
from mwdlink.relaxation.mixing import Model, relaxation_times
from mwdlink.relaxation.operator import log_grid


def _problem(exponent=2.0, kernel="power-law", seed=0, family="tail"):
    card = exact_card()
    rng = np.random.default_rng(seed)
    model = Model(kernel, exponent)
    sweep = measured(melt_of(family, rng), card, model, rng)
    sigma = np.full(2 * len(sweep), 0.03)
    return sweep_problem(sweep.omega, sweep.storage, sweep.loss, sigma, card.melt(), model)


@pytest.mark.parametrize("exponent", [1.0, 2.0, 2.4])
def test_derivative_of_moduli_matches_differences(exponent):
    """Compared with central differences (derived)."""
    problem = _problem(exponent)
    u = good_start(problem)
    w = weights(u)
    _, slope = problem.forward.values_and_slope(w)
    rng = np.random.default_rng(1)
    for _ in range(4):
        d = rng.standard_normal(w.size) * w
        h = 1e-5
        up, down = problem.forward.values(w + h * d), problem.forward.values(w - h * d)
        # w stays positive: the steps are relative to it
        np.testing.assert_allclose(slope @ d, (up - down) / (2 * h), rtol=1e-5, atol=1e-4)


def test_derivative_of_lump_prior_matches_differences():
    """Compared with central differences (derived)."""
    u = np.random.default_rng(2).standard_normal(12)
    _, slope = lump_rows(weights(u))
    for j in range(u.size):
        h = np.zeros(u.size)
        h[j] = 1e-6
        numeric = (lump_rows(weights(u + h))[0] - lump_rows(weights(u - h))[0]) / 2e-6
        np.testing.assert_allclose(slope[:, j], numeric, atol=1e-8)


def test_null_space_of_the_penalty_is_the_log_normal():
    """ln w of a log-normal is a quadratic in log M: no third difference (derived)."""
    x = np.arange(60) * 0.04
    prior = roughness(60, 0.04)
    u = np.append(-3.0 + 2.0 * x - 4.0 * x**2, [0.0, 0.0])
    assert np.abs(prior.third @ u).max() < 1e-6


def test_smoothing_does_not_depend_on_the_spacing():
    """lambda multiplies an integral: the same u on twice the nodes costs the same (derived)."""
    costs = []
    for n in (60, 120, 240):
        x = np.linspace(0, 2.4, n)
        h = float(x[1] - x[0])
        u = np.append(np.sin(3 * x), [0.0, 0.0])
        costs.append(float(np.sum((roughness(n, h).third @ u) ** 2)))
    # int (27 cos 3x)^2 over 2.4 decades
    exact = 729 * (1.2 + np.sin(14.4) / 12)
    assert costs[-1] == pytest.approx(exact, rel=0.03)
    assert abs(costs[2] / exact - 1) < abs(costs[0] / exact - 1)


def test_minimum_is_a_minimum():
    """The gradient vanishes and no small step goes lower (derived)."""
    problem = _problem()
    fit = minimise(problem, good_start(problem), 1e-3, tolerance=1e-6)
    assert fit.converged

    def cost(u):
        w = weights(u)
        r = problem.misfit(w)
        t = np.sqrt(1e-3) * (problem.prior.third @ u)
        k = problem.prior.weak @ u - problem.prior.weak_centre
        lump, _ = lump_rows(w)
        return float(r @ r + t @ t + k @ k + lump @ lump)

    assert cost(fit.u) == pytest.approx(fit.objective, rel=1e-9)
    rng = np.random.default_rng(0)
    for _ in range(20):
        assert cost(fit.u + 1e-2 * rng.standard_normal(fit.u.size)) >= fit.objective - 1e-4


def test_convergence_is_told_truthfully(monkeypatch):
    """A fit cut off after two steps says so."""
    monkeypatch.setattr("mwdlink.inversion.solve.MAX_STEPS", 2)
    problem = _problem()
    assert not minimise(problem, good_start(problem), 1e-6).converged


def test_stacked_copies_equal_single_ones():
    """The stacked solver against the single one, same perturbations (derived).

    Tolerance: both stop when a step promises less than 0.02 of chi2.
    """
    problem = _problem()
    start = minimise(problem, good_start(problem), 1e-3)
    rng = np.random.default_rng(3)
    m, n = 6, problem.size
    copies = Copies(
        np.tile(start.u, (m, 1)),
        np.full(m, 1e-3),
        rng.standard_normal((m, problem.data.size)),
        rng.standard_normal((m, n - 5)),
        rng.standard_normal((m, 3)),
        rng.standard_normal((m, 2)),
    )
    u, ok = minimise_many(problem, copies)
    assert ok.all()
    nodes = problem.window.nodes
    for i in range(m):
        shift = Shift(copies.data[i], copies.third[i], copies.weak[i], copies.lumps[i])
        single = minimise(problem, start.u, 1e-3, shift)
        a, b = weights(u[i])[:-2] @ nodes, single.w[:-2] @ nodes
        assert a == pytest.approx(b, rel=3e-3)


def test_evidence_prefers_smooth_for_a_log_normal_and_detail_for_two_peaks():
    """The chosen lambda is higher for a log-normal than for two narrow peaks (derived)."""
    card, model = exact_card(), Model()
    chosen = []
    for chains in (
        families.lognormal(1.2e5, 3.0),
        families.mixture_of_lognormals([7e4, 4e5], [1.1, 1.1], [0.5, 0.5]),
    ):
        s = measured(chains, card, model, np.random.default_rng(5))
        sigma = np.full(2 * len(s), 0.03)
        found = scan(sweep_problem(s.omega, s.storage, s.loss, sigma, card.melt(), model))
        chosen.append(float(found.smoothing[found.best]))
        assert found.smoothing.size == SCAN.size == 17
    assert chosen[0] > 3 * chosen[1]


def test_pull_of_smoothing_is_undone_to_first_order():
    """Exact data of two peaks: without the pull they fit better and Mw is nearer; a log-normal, to
    which smoothness costs nothing, stays as it is (derived)."""
    two = [(families.lognormal(8e4, 1.2), 0.5), (families.lognormal(5e5, 1.2), 0.5)]
    for chains, sharp in ((Distribution.blend(two), True), (families.lognormal(1.5e5, 3.0), False)):
        card, model = exact_card(), Model("exponential")
        sweep = measured(chains, card, model, np.random.default_rng(0), noise=0.0)
        sigma = np.full(2 * len(sweep), 0.03)
        problem = sweep_problem(sweep.omega, sweep.storage, sweep.loss, sigma, card.melt(), model)
        found = scan(problem, None, np.array([1e-3]))
        branch = Branch("exponential", card.melt(), model, 0.0, problem, found)
        before, after, shares = unpulled(branch)
        assert before.shape == after.shape == (1, problem.size) and shares.sum() == 1.0
        window = problem.window
        truth = mean_within(chains, window.low, window.high)
        off, moved = [], []
        for w in (before[0], after[0]):
            inside = Cells.make(window.edges, w).mean_within(window.low, window.high)
            off.append(abs(float(inside[0]) / truth - 1.0))
            moved.append(float(inside[0]))
        if sharp:
            assert problem.chi2(after[0]) < problem.chi2(before[0])
            assert off[1] < off[0]
        else:
            assert moved[1] == pytest.approx(moved[0], rel=3e-4)


def test_scan_does_not_depend_on_the_start():
    """From another start the same evidence curve comes out where it matters (derived)."""
    problem = _problem(seed=4)
    first = scan(problem)
    other = good_start(problem) + 0.3 * np.random.default_rng(0).standard_normal(problem.size)
    second = scan(problem, other)
    held = first.weights > 0.05
    np.testing.assert_allclose(first.log_evidence[held], second.log_evidence[held], atol=0.05)


def test_window_follows_the_frequencies():
    """exp(pi/2)/omega_max and exp(-pi/2)/omega_min (Davies and Anderssen 1997, recalled)."""
    melt, model = exact_card().melt(), Model()
    omega = log_grid(1e-2, 1e2, 5)
    window = find_window(omega, melt, model)
    tau = relaxation_times(np.array([window.low, window.high]), melt, model)
    assert tau[0] == pytest.approx(np.exp(np.pi / 2) / 1e2, rel=1e-6)
    assert tau[1] == pytest.approx(np.exp(-np.pi / 2) / 1e-2, rel=1e-6)
    wider = find_window(log_grid(1e-3, 1e2, 5), melt, model)
    assert wider.high > 1.8 * window.high


def test_mass_at_time_inverts_the_time_law():
    """Round trip (derived)."""
    melt, model = exact_card().melt(), Model("reptation", 2.2)
    tau = relaxation_times(np.array([3e5]), melt, model)[0]
    assert mass_at_time(float(tau), melt, model) == pytest.approx(3e5, rel=1e-6)


def test_impossible_frequencies_are_refused():
    """Frequencies that see chains beyond 1e10 g/mol are a unit or card error."""
    with pytest.raises(InputError, match="Check the frequency unit"):
        find_window(log_grid(1e-22, 1e-20, 5), exact_card().melt(), Model())


def test_lumps_are_outside_the_penalty():
    """Changing the lumps' u changes no third difference (derived)."""
    prior = roughness(40, 0.05)
    assert not prior.third[:, -2:].any() and not prior.weak[:, -2:].any()


def test_problem_is_immutable_under_minimise():
    """A fit leaves its problem as it was."""
    problem = _problem()
    before = problem.data.copy(), problem.forward.survival.copy()
    minimise(replace(problem), good_start(problem), 1e-3)
    np.testing.assert_array_equal(problem.data, before[0])
    np.testing.assert_array_equal(problem.forward.survival, before[1])
