"""Damped Gauss-Newton on the dense normal matrix, for one smoothing parameter."""

from __future__ import annotations

from dataclasses import dataclass
from math import log
from typing import Any, NamedTuple

import numpy as np
from scipy.linalg.lapack import dposv

from mwdlink.inversion.objective import Problem, weights
from mwdlink.inversion.roughness import LUMP_CENTRE, LUMP_SPREAD

MAX_STEPS = 300
# a step that promises less than this much of the objective (0.03 standard deviations) is the end
TOLERANCE = 1e-3
# no weight changes by more than a factor of e^3 in one step
LONGEST = 3.0
# a step that gained this many times what it promised goes along a valley: the next one is doubled
SLOW, FARTHEST = 1.3, 16.0
# damping is relative to a diagonal that the third differences fill: next to what holds a valley of
# smooth changes, a thousandth of a millionth of it is a wall (members stopped short of their
# minimum by 0.7 of the objective, and by 0.03 with these)
FIRST_DAMPING, LEAST_DAMPING, REFUSED_DAMPING = 1e-12, 1e-13, 1e-10
# a refused step is tried again at the low point of the parabola through what is known of it, no
# less and no more than these shares of it: that costs no other matrix
SHORTEST, SHORTER = 0.3, 0.6
# a fit that goes on from another begins with no more damping than this
MOST_KEPT = 1e-2


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
    damping : float
        Of the last step: where a fit that goes on from here had better begin.
    """

    u: np.ndarray
    smoothing: float
    objective: float
    chi2: float
    converged: bool
    steps: int
    hessian: np.ndarray
    damping: float = FIRST_DAMPING

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
    damping: float = FIRST_DAMPING,
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
    damping : float
        To begin with, relative to the diagonal of the Gauss-Newton matrix.

    Returns
    -------
    Fit
        `converged` tells the truth; nothing is raised.
    """
    f, prior = problem.forward, problem.prior
    linear = np.vstack([np.sqrt(smoothing) * prior.third, prior.weak])
    precision = prior.precision(smoothing)
    data = problem.data
    inverse = 1.0 / problem.sigma
    aim = np.zeros(len(linear))
    aim[-len(prior.weak) :] = prior.weak_centre
    low_aim = high_aim = LUMP_CENTRE
    if shift is not None:
        data = data + problem.sigma * shift.data
        aim[: -len(prior.weak)] = shift.third
        aim[-len(prior.weak) :] += shift.weak
        low_aim, high_aim = (LUMP_CENTRE + LUMP_SPREAD * shift.lumps).tolist()
    size = u0.size

    def cost(u: np.ndarray) -> _Point:
        e = np.exp(u - u.max())
        w = e / e.sum()
        y, known = f.evaluate(w)
        r = (np.log(y) - data) * inverse
        t = linear @ u
        t -= aim
        # plain numbers: two at a time are no work for arrays
        low = (log(max(w[-2], 1e-300)) - low_aim) / LUMP_SPREAD
        high = (log(max(w[-1], 1e-300)) - high_aim) / LUMP_SPREAD
        chi2 = float(r @ r)
        value = chi2 + float(t @ t) + low * low + high * high
        return _Point(u, value, chi2, w, y, known, r, t, low, high)

    lump_j = np.empty((2, size))
    # damping is relative to the diagonal: directions the data hardly see are not held back by it
    converged = False
    hessian = precision
    steps = 0
    stretch = 1.0
    # far from the data a modulus can come out negative: the step is then refused
    with np.errstate(invalid="ignore", divide="ignore"):
        at = cost(np.array(u0, dtype=float))
        while steps < min(most, MAX_STEPS):
            steps += 1
            w = at.w
            j = f.slope(at.known)
            j *= (inverse / at.y)[:, None]
            # d/du through the softmax: J diag(w) - (J w) w'
            j -= (j @ w)[:, None]
            j *= w
            lump_j[:] = w / -LUMP_SPREAD
            lump_j[0, -2] += 1.0 / LUMP_SPREAD
            lump_j[1, -1] += 1.0 / LUMP_SPREAD
            pushed = at.r @ j
            gradient = at.t @ linear
            gradient += pushed
            gradient -= ((at.low + at.high) / LUMP_SPREAD) * w
            gradient[-2] += at.low / LUMP_SPREAD
            gradient[-1] += at.high / LUMP_SPREAD
            hessian = j.T @ j
            hessian += precision
            hessian += lump_j.T @ lump_j
            # y is all but linear in w = exp(u): its second derivative in u is the first one again.
            # Where the data push a weight down that is the curvature Gauss-Newton lacks, and steps
            # without it go far too long. P' diag(g+) P with P u = u - w.u: the level of u is free.
            # Far from a fit the misfit is not what it will be, and the term would only hold it back
            push = np.maximum(pushed, 0.0) * min(1.0, at.r.size / max(at.chi2, 1e-300)) ** 2
            cross = (push - 0.5 * push.sum() * w)[:, None] * w
            curved = hessian - cross
            curved -= cross.T
            diagonal = curved.diagonal() + push
            refused = short = False
            while True:
                lhs = curved.copy()
                lhs.flat[:: size + 1] = (1.0 + damping) * diagonal + 1e-12
                # symmetric: its transpose is it, in the order LAPACK wants
                _, step, info = dposv(lhs.T, -gradient, overwrite_a=True, overwrite_b=True)
                promised = -float(gradient @ step)
                if info == 0 and np.isfinite(promised):
                    longest = max(float(step.max()), -float(step.min()))
                    if longest > LONGEST:
                        step *= LONGEST / longest
                    trial = cost(at.u + stretch * step)
                    if trial.value <= at.value + 1e-12 * abs(at.value):
                        break
                    # NaN where the model has no value there
                    hope = stretch * promised
                    share = hope / (trial.value - at.value + 2.0 * hope)
                    share = min(max(share, SHORTEST), SHORTER) if share == share else SHORTEST
                    trial = cost(at.u + (share * stretch) * step)
                    if trial.value <= at.value:
                        stretch, short = 1.0, True
                        break
                    stretch = 1.0
                    if promised < tolerance:
                        converged = True
                        break
                refused = True
                damping = max(damping * 6.0, REFUSED_DAMPING)
                if damping > 1e8:
                    break
            if converged or damping > 1e8:
                break
            gain = at.value - trial.value
            at = trial
            good = gain > 0.25 * promised and not short
            stretch = min(2.0 * stretch, FARTHEST) if gain > SLOW * promised and not short else 1.0
            eased = (1.0 if refused else 0.15) if good else 2.0
            damping = max(damping * eased, LEAST_DAMPING)
            end = tolerance * (1.0 + 1e-3 * at.value)
            # along a valley steps promise little and there is far to go
            if promised < (end if stretch == 1.0 else 1e-2 * end):
                converged = True
                break
    return Fit(
        at.u, smoothing, at.value, at.chi2, converged, steps, hessian, min(damping, MOST_KEPT)
    )


class _Point(NamedTuple):
    """What is known of the objective at one u: a step that is taken has it already."""

    u: np.ndarray
    value: float
    chi2: float
    w: np.ndarray
    y: np.ndarray
    known: Any
    r: np.ndarray
    t: np.ndarray
    low: float
    high: float
