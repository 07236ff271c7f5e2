"""Damped Gauss-Newton on the dense normal matrix, for one smoothing parameter."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg.lapack import dposv

from mwdlink.inversion.objective import Problem, weights
from mwdlink.inversion.roughness import LUMP_CENTRE, LUMP_SPREAD

MAX_STEPS = 300
# a step that promises less than this much of the objective (0.03 standard deviations) is the end
TOLERANCE = 1e-3


@dataclass(frozen=True, eq=False)
class Fit:
    """A minimum of the objective.

    Attributes
    ----------
    u : ndarray of shape (n + 2,)
        ln weight up to a constant.
    smoothing : float
        lambda [-].
    objective, chi2 : float
    converged : bool
    steps : int
    hessian : ndarray of shape (n + 2, n + 2)
        Gauss-Newton matrix of the data part and the prior at the minimum.
    """

    u: np.ndarray
    smoothing: float
    objective: float
    chi2: float
    converged: bool
    steps: int
    hessian: np.ndarray

    @property
    def w(self) -> np.ndarray:
        """Weights of nodes and lumps, shape (n + 2,), sum 1."""
        return weights(self.u)


@dataclass(frozen=True, eq=False)
class Shift:
    """A perturbation of data and prior (all zero for the fit itself).

    Attributes
    ----------
    data : ndarray of shape (n_r,)
        Added to the misfits.
    third : ndarray of shape (n - 3,)
        Added to the scaled third differences.
    weak : ndarray of shape (3,)
    lumps : ndarray of shape (2,)
    """

    data: np.ndarray
    third: np.ndarray
    weak: np.ndarray
    lumps: np.ndarray


def draw_shift(problem: Problem, rng: np.random.Generator) -> Shift:
    """Standard normal perturbation of every row."""
    return Shift(
        rng.standard_normal((problem.data.size,)),
        rng.standard_normal((problem.prior.third.shape[0],)),
        rng.standard_normal((3,)),
        rng.standard_normal((2,)),
    )


def minimise(
    problem: Problem,
    u0: np.ndarray,
    smoothing: float,
    shift: Shift | None = None,
    tolerance: float = TOLERANCE,
    most: int = MAX_STEPS,
) -> Fit:
    """Minimise |misfit|^2 + lambda |third u|^2 + weak prior from a start.

    Parameters
    ----------
    problem : Problem
    u0 : ndarray of shape (n + 2,)
        Start.
    smoothing : float
        lambda > 0.
    shift : Shift, optional
        Perturbation of data and prior (randomise, then optimise).
    tolerance : float
        The last step promised less than this much of the objective.
    most : int
        Steps at most.

    Returns
    -------
    Fit
        `converged` tells the truth; nothing is raised.
    """
    f, prior = problem.forward, problem.prior
    root = np.sqrt(smoothing)
    third, weak = prior.third, prior.weak
    precision = prior.precision(smoothing)
    target = prior.weak_centre.copy()
    data = problem.data
    inverse = 1.0 / problem.sigma
    pull = np.zeros(third.shape[0])
    lump_target = np.zeros(2)
    if shift is not None:
        data = data + problem.sigma * shift.data
        pull, target, lump_target = shift.third, target + shift.weak, shift.lumps

    # the linear rows' part of the gradient is precision u less this
    pulled = root * (third.T @ pull) + weak.T @ target

    def cost(u: np.ndarray) -> tuple[float, float, np.ndarray, np.ndarray]:
        w = weights(u)
        with np.errstate(invalid="ignore", divide="ignore"):
            # far from the data a modulus can come out negative: the step is then refused
            r = (np.log(f.values(w)) - data) * inverse
        t = root * (third @ u) - pull
        k = weak @ u - target
        lump = (np.log(np.maximum(w[-2:], 1e-300)) - LUMP_CENTRE) / LUMP_SPREAD - lump_target
        chi2 = float(r @ r)
        return chi2 + float(t @ t + k @ k + lump @ lump), chi2, w, lump

    u = np.array(u0, dtype=float)
    value, chi2, w, lump = cost(u)
    # relative to the diagonal, so that directions the data hardly see are not held back by it
    damping = 1e-6
    converged = False
    hessian = precision
    steps = 0
    while steps < min(most, MAX_STEPS):
        steps += 1
        y, j = f.values_and_slope(w)
        j *= (inverse / y)[:, None]
        # d/du through the softmax: J diag(w) - (J w) w'
        j -= (j @ w)[:, None]
        j *= w
        r = (np.log(y) - data) * inverse
        lump_j = np.empty((2, w.size))
        lump_j[:] = -w / LUMP_SPREAD
        lump_j[0, -2] += 1.0 / LUMP_SPREAD
        lump_j[1, -1] += 1.0 / LUMP_SPREAD
        gradient = r @ j + precision @ u - pulled + lump @ lump_j
        hessian = j.T @ j
        hessian += precision
        hessian += lump_j.T @ lump_j
        diagonal = hessian.diagonal().copy()
        while True:
            lhs = hessian.copy()
            lhs.flat[:: lhs.shape[0] + 1] += damping * diagonal + 1e-12
            _, step, info = dposv(lhs, -gradient, overwrite_a=True)
            if info == 0 and np.isfinite(step).all():
                trial = u + step
                new, new_chi2, new_w, new_lump = cost(trial)
                promised = -float(gradient @ step)
                if new <= value + 1e-12 * abs(value):
                    break
                if promised < tolerance:
                    converged = True
                    break
            damping = max(damping * 6.0, 1e-6)
            if damping > 1e8:
                break
        if converged or damping > 1e8:
            break
        gain = value - new
        u, value, chi2, w, lump = trial, new, new_chi2, new_w, new_lump
        damping = max(damping * (0.15 if gain > 0.25 * promised else 2.0), 1e-9)
        if promised < tolerance * (1.0 + 1e-3 * value):
            converged = True
            break
    return Fit(u, smoothing, value, chi2, converged, steps, hessian)
