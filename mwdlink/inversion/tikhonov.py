"""Non-negative Tikhonov inversion on the true moduli.

Minimise sum ((ln y(w) - ln data)/sigma)^2 + lambda int (f'')^2 dx over weights w >= 0 of unit sum,
f = dW/dlog10 M, x = log10 M. The moduli are not linear in w (a power beta of a sum), so each outer
step solves the linearised problem by non-negative least squares and goes as far along it as the
true objective falls; for beta = 2 three to six steps are enough. Working on the moduli keeps their
noise what it is; the square root of a fitted spectrum, linear in w, would not.

The rows are compressed by QR before the active-set iteration (the normal matrix would square the
condition), and the unit sum is one heavy row. The ends are free: no zero is imposed, because the
lumps take the weight beyond. The lumps are held by non-negativity only.

References
----------
.. [1] C. L. Lawson, R. J. Hanson, Solving Least Squares Problems (1974) (recalled).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
from scipy.optimize import nnls

from mwdlink.errors import Caution
from mwdlink.inversion.choose import Curve, choose, free_set_figures
from mwdlink.inversion.method import MethodFit
from mwdlink.inversion.objective import Problem, weights
from mwdlink.inversion.smoothing import good_start

# from far too smooth to almost free, for int (f'')^2 dx over decades
SCAN = np.geomspace(1e3, 1e-7, 21)
MAX_STEPS = 30
# an outer step that gains less than this of the objective is the last
TOLERANCE = 1e-3
# the row of the unit sum, over the size of the other rows: holds it to about 1e-8
UNIT_SUM = 1e4


def bend_rows(n: int, spacing: float) -> np.ndarray:
    """Rows of the penalty: their squares sum to int (f'')^2 dx; shape (n - 2, n + 2)."""
    rows = np.diff(np.eye(n), n=2, axis=0) * spacing**-2.5
    return np.hstack([rows, np.zeros((n - 2, 2))])


def non_negative(
    rows: np.ndarray, target: np.ndarray, penalty: np.ndarray, pull: np.ndarray, smoothing: float
) -> np.ndarray:
    """argmin |rows x - target|^2 + lambda |penalty x - pull/sqrt(lambda)|^2, x >= 0, sum x = 1.

    Parameters
    ----------
    rows : ndarray of shape (n_r, n)
    target : ndarray of shape (n_r,)
    penalty : ndarray of shape (n_l, n)
    pull : ndarray of shape (n_l,)
        Perturbation of the scaled penalty rows (zero for the answer itself).
    smoothing : float
        lambda, >= 0.
    """
    root = np.sqrt(smoothing)
    matrix = np.vstack([rows, root * penalty])
    right = np.concatenate([target, pull])
    _, r = np.linalg.qr(np.column_stack([matrix, right]))
    heavy = UNIT_SUM * max(float(np.sqrt(np.mean(r[:, :-1] ** 2))), 1e-300)
    compressed = np.vstack([r[:, :-1], np.full(r.shape[1] - 1, heavy)])
    goal = np.append(r[:, -1], heavy)
    n = compressed.shape[1]
    try:
        x, _ = nnls(compressed, goal, maxiter=30 * n)
    except RuntimeError:
        # nearly dependent columns can send the active set round in circles: a ridge far below
        # rounding of the data ends it
        ridge = 1e-7 * heavy / UNIT_SUM * np.eye(n)
        x, _ = nnls(
            np.vstack([compressed, ridge]), np.concatenate([goal, np.zeros(n)]), maxiter=300 * n
        )
    total = x.sum()
    return x / total if total > 0 else np.full(n, 1.0 / n)


class _Solver:
    """Outer steps for one problem, with the data and the penalty possibly perturbed."""

    def __init__(self, problem: Problem) -> None:
        self.problem = problem
        self.penalty = bend_rows(problem.window.nodes.size, problem.window.spacing)
        self.inverse = 1.0 / problem.sigma

    def cost(self, w: np.ndarray, data: np.ndarray, pull: np.ndarray, smoothing: float) -> float:
        y = self.problem.forward.values(w)
        if not np.all(y > 0):
            return np.inf
        r = (np.log(y) - data) * self.inverse
        bend = np.sqrt(smoothing) * (self.penalty @ w) - pull
        return float(r @ r + bend @ bend)

    def linear(self, w: np.ndarray, data: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Rows and right side of the problem linearised at w."""
        y, slope = self.problem.forward.values_and_slope(w)
        rows = slope * (self.inverse / y)[:, None]
        return rows, rows @ w - (np.log(y) - data) * self.inverse

    def solve(
        self,
        w: np.ndarray,
        smoothing: float,
        noise: np.ndarray | None = None,
        pull: np.ndarray | None = None,
    ) -> tuple[np.ndarray, float, bool]:
        """Minimum from a start: weights, objective, converged."""
        data = self.problem.data
        if noise is not None:
            data = data + self.problem.sigma * noise
        pull = np.zeros(len(self.penalty)) if pull is None else pull
        value = self.cost(w, data, pull, smoothing)
        for _ in range(MAX_STEPS):
            rows, target = self.linear(w, data)
            goal = non_negative(rows, target, self.penalty, pull, smoothing)
            length, new = 1.0, np.inf
            while length > 1e-3:
                trial = (1.0 - length) * w + length * goal
                new = self.cost(trial, data, pull, smoothing)
                if new <= value:
                    break
                length *= 0.5
            if not new <= value:
                # no way down along the line: at the minimum if the step promised next to nothing
                r = rows @ goal - target
                bend = np.sqrt(smoothing) * (self.penalty @ goal) - pull
                return w, value, value - float(r @ r + bend @ bend) < 0.1
            gain, w, value = value - new, trial, new
            if gain < TOLERANCE * max(1.0, 1e-3 * value):
                return w, value, True
        return w, value, False


def fit_tikhonov(
    problem: Problem,
    *,
    choose_by: str = "evidence",
    smoothing: float | None = None,
    members: int = 0,
    seed: int = 0,
) -> MethodFit:
    """Non-negative Tikhonov inversion.

    Parameters
    ----------
    problem : Problem
    choose_by : str
        `evidence`, `gcv`, `l-curve` or `discrepancy`; not used when `smoothing` is given.
    smoothing : float, optional
        lambda of int (f'')^2 dx [-]; None chooses it from a scan.
    members : int
        Refits to perturbed data and penalty (randomise, then optimise).
    seed : int

    Returns
    -------
    MethodFit
    """
    solver = _Solver(problem)
    values = SCAN if smoothing is None else np.array([float(smoothing)])
    answers, curve = _scan(solver, values)
    notes: tuple[Caution, ...] = ()
    index = 0
    if smoothing is None:
        choice = choose(curve, choose_by)
        index, notes = choice.index, choice.cautions
        curve = replace(curve, chosen=index, rule=choose_by)
    w, converged = answers[index]
    chosen = float(values[index])

    def draw(rng: np.random.Generator) -> tuple[np.ndarray, bool]:
        noise = rng.standard_normal(problem.data.size)
        pull = rng.standard_normal(len(solver.penalty))
        found, _, good = solver.solve(w, chosen, noise, pull)
        return found, good

    ensemble, lost = draw_members(draw, members, seed, problem.size)
    if lost:
        notes += (members_note(lost, members),)
    return MethodFit(
        "tikhonov",
        problem.window.nodes,
        w,
        problem.chi2(w),
        chosen,
        converged,
        curve,
        ensemble,
        notes,
    )


def draw_members(
    draw: Callable[[np.random.Generator], tuple[np.ndarray, bool]], members: int, seed: int, n: int
) -> tuple[np.ndarray, int]:
    """Members by a function of a generator, one child seed each; those that failed are left out.

    Returns
    -------
    ndarray of shape (m, n)
    int
        How many did not converge.
    """
    kept, lost = [], 0
    for child in np.random.SeedSequence(seed).spawn(members):
        w, good = draw(np.random.default_rng(child))
        if good:
            kept.append(w)
        else:
            lost += 1
    return (np.array(kept) if kept else np.zeros((0, n))), lost


def members_note(lost: int, members: int) -> Caution:
    """What is said of members that did not converge."""
    return Caution(
        "members_not_converged",
        f"{lost} of {members} members did not converge and were left out of the intervals.",
    )


def _scan(
    solver: _Solver, values: np.ndarray
) -> tuple[list[tuple[np.ndarray, bool]], Curve]:
    """Answers along a scan from smooth to free, each from the last, and the figures of the scan."""
    problem = solver.problem
    w = weights(good_start(problem))
    answers, chi2, rough, freedom, evidence = [], [], [], [], []
    # the sum is fixed: directions that change it are no freedom of the fit
    project = np.eye(problem.size) - 1.0 / problem.size
    for lam in values:
        w, value, good = solver.solve(w, float(lam))
        answers.append((w, good))
        chi2.append(problem.chi2(w))
        rough.append(float(np.sum((solver.penalty @ w) ** 2)))
        rows, _ = solver.linear(w, problem.data)
        free = w > 1e-9 * w.max()
        f, log_det = free_set_figures(rows @ project, solver.penalty, float(lam), free)
        freedom.append(f)
        evidence.append(-0.5 * value + log_det)
    curve = Curve(
        np.asarray(values, dtype=float),
        np.array(chi2),
        np.array(rough),
        np.array(freedom),
        np.array(evidence),
        problem.data.size,
    )
    return answers, curve
