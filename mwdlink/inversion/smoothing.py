"""How smooth: a scan of lambda with the evidence of each value (Laplace's approximation)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg.lapack import dpotrf, dpotri

from mwdlink.inversion.objective import Problem
from mwdlink.inversion.solve import FIRST_DAMPING, Fit, minimise
from mwdlink.inversion.solve import TOLERANCE as FINISH

# from almost log-normal to almost free, for int (d3u/dx3)^2 dx over decades
SCAN = np.geomspace(1e1, 1e-7, 17)
# where the scan begins: free enough to fit anything, smooth enough to converge at once
FIRST = 1e-2


@dataclass(frozen=True, eq=False)
class Scan:
    """Fits along the scan and their log evidence.

    Attributes
    ----------
    smoothing : ndarray of shape (k,)
        lambda, from smooth to free.
    fits : tuple of Fit
    log_evidence : ndarray of shape (k,)
    roughness : ndarray of shape (k,)
        int (d3u/dx3)^2 dx of each fit.
    freedom : ndarray of shape (k,)
        Effective number of parameters the data fix.
    """

    smoothing: np.ndarray
    fits: tuple[Fit, ...]
    log_evidence: np.ndarray
    roughness: np.ndarray
    freedom: np.ndarray

    @property
    def weights(self) -> np.ndarray:
        """Posterior share of each lambda under a prior even in ln lambda, shape (k,)."""
        x = np.exp(self.log_evidence - self.log_evidence.max())
        return x / x.sum()

    @property
    def best(self) -> int:
        """Index of the highest evidence."""
        return int(np.argmax(self.log_evidence))

    @property
    def total(self) -> float:
        """ln of the evidence averaged over the scan."""
        return mean_evidence(self.log_evidence)


def mean_evidence(log_evidence: np.ndarray) -> float:
    """ln of the mean of evidences given by their logarithms."""
    top = float(np.max(log_evidence))
    return top + float(np.log(np.mean(np.exp(log_evidence - top))))


def start(problem: Problem, centre: float | None = None, dispersity: float = 3.0) -> np.ndarray:
    """A log-normal start, unknown lumps small; shape (n + 2,)."""
    x = np.log(problem.window.nodes)
    middle = x.mean() if centre is None else np.log(centre)
    u = -0.5 * (x - middle) ** 2 / np.log(dispersity)
    u = u - np.log(np.sum(np.exp(u - u.max()))) - u.max()
    return np.concatenate([u, [-6.0, -6.0]])


def good_start(problem: Problem) -> np.ndarray:
    """The best of some log-normals by misfit."""
    nodes = problem.window.nodes
    centres = np.geomspace(nodes[3], nodes[-4], 9)
    tried = [start(problem, float(c), d) for c in centres for d in (1.3, 3.0, 10.0)]
    e = np.exp(np.array(tried) - np.max(tried, axis=1, keepdims=True))
    y = problem.forward.values_of_many(e / e.sum(axis=1, keepdims=True))
    with np.errstate(invalid="ignore", divide="ignore"):
        chi2 = np.sum(((np.log(y) - problem.data) / problem.sigma) ** 2, axis=1)
    if not np.isfinite(chi2).any():
        return start(problem)
    return tried[int(np.nanargmin(np.where(np.isfinite(chi2), chi2, np.inf)))]


def log_evidence(problem: Problem, fit: Fit) -> float:
    """ln p(data | lambda) up to a constant of the data, by Laplace's approximation."""
    a = problem.prior.log_det(fit.smoothing)
    return -0.5 * fit.objective + 0.5 * a - 0.5 * _log_det(_factor(fit))


def effective_freedom(problem: Problem, fit: Fit) -> float:
    """Trace of the hat matrix: how many parameters the data, not the prior, fix."""
    return _freedom(problem, fit, _factor(fit))


def _factor(fit: Fit) -> np.ndarray:
    """Cholesky factor of a fit's Hessian, in the upper triangle; kept off zero by a little."""
    a = fit.hessian.copy()
    a.flat[:: a.shape[0] + 1] += 1e-9
    c, info = dpotrf(a.T, overwrite_a=True)
    if info:
        raise np.linalg.LinAlgError("the Hessian is not positive definite")
    return c


def _log_det(factor: np.ndarray) -> float:
    return 2.0 * float(np.sum(np.log(factor.diagonal())))


def _freedom(problem: Problem, fit: Fit, factor: np.ndarray) -> float:
    inverse, _ = dpotri(factor)
    prior = problem.prior.precision(fit.smoothing)
    # LAPACK fills the upper triangle and leaves zeros below; both matrices are symmetric
    diagonal = inverse.diagonal() @ prior.diagonal()
    return float(fit.u.size - 2.0 * np.vdot(inverse, prior) + diagonal)


# along the scan a fit may stop this early (a tenth of a standard deviation); the one chosen
# is finished
ALONG = 5e-3
# and one that is forced to be far too smooth, or left far too free, need not be finished: it is
# given this many steps, and when its neighbour's evidence was e^-HOPELESS of the best this few
ALONG_STEPS, FEW_STEPS, HOPELESS = 40, 3, 15.0
# a lambda whose neighbour has this much less ln evidence than the best has no say in anything
ROUGH, UNLIKELY = 5e-2, 6.0


def scan(
    problem: Problem,
    u0: np.ndarray | None = None,
    values: np.ndarray = SCAN,
    tolerance: float = ALONG,
    *,
    known: Scan | None = None,
    give_up: float | None = None,
    finish: bool = True,
) -> Scan:
    """Fit at each lambda, each started from its neighbour; from the middle both ways.

    A fit forced to be too smooth for the data is the hard one: it is met last, from a good start.

    Parameters
    ----------
    problem : Problem
    u0 : ndarray of shape (n + 2,), optional
        Start of the first fit.
    values : ndarray of shape (k,)
        lambda, falling.
    tolerance : float
        See `minimise`.
    known : Scan, optional
        Of nearly the same problem: each lambda starts from its own fit there.
    give_up : float, optional
        Leave out what lies beyond a lambda whose ln evidence is this much below the best.
    finish : bool
        Finish the best fit and work out the effective number of parameters; else that is NaN, and
        only the evidence is of use.
    """
    fits: dict[int, Fit] = {}
    factors: dict[int, np.ndarray] = {}
    evidence: dict[int, float] = {}
    own = {} if known is None else dict(zip(known.smoothing, known.fits, strict=True))

    def keep(i: int, fit: Fit) -> None:
        fits[i] = fit
        factors[i] = _factor(fit)
        half = 0.5 * (problem.prior.log_det(fit.smoothing) - _log_det(factors[i]))
        evidence[i] = half - 0.5 * fit.objective

    def solve(i: int, near: Fit | None, behind: float) -> None:
        u, damping = (u0, FIRST_DAMPING) if near is None else (near.u, near.damping)
        if values[i] in own:
            # what moved its neighbour away from where it was before moves this one likewise
            u = own[values[i]].u + (0.0 if near is None else near.u - own[near.smoothing].u)
        u = good_start(problem) if u is None else u
        most = FEW_STEPS if behind > HOPELESS else ALONG_STEPS
        end = ROUGH if behind > UNLIKELY else tolerance
        keep(i, minimise(problem, u, float(values[i]), None, end, most, damping))

    order = np.argsort(np.abs(np.log(values / FIRST)), kind="stable")
    first = int(order[0])
    solve(first, None, 0.0)
    for direction in (range(first + 1, len(values)), range(first - 1, -1, -1)):
        last = first
        for i in direction:
            behind = max(evidence.values()) - evidence[last]
            if give_up is not None and behind > give_up:
                break
            solve(i, fits[last], behind)
            last = i
    # a finished fit has another evidence by a little: its neighbour may then be the best
    finished: set[int] = set()
    while finish and tolerance > FINISH:
        best = max(evidence, key=lambda i: evidence[i])
        if best in finished:
            break
        keep(best, minimise(problem, fits[best].u, float(values[best])))
        finished.add(best)
    index = sorted(fits)
    ordered = tuple(fits[i] for i in index)
    rough = [float(np.sum((problem.prior.third @ f.u) ** 2)) for f in ordered]
    return Scan(
        np.asarray(values, dtype=float)[index],
        ordered,
        np.array([evidence[i] for i in index]),
        np.asarray(rough),
        np.array([_freedom(problem, fits[i], factors[i]) if finish else np.nan for i in index]),
    )
