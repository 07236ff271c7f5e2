"""How smooth: a scan of lambda with the evidence of each value (Laplace's approximation)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from mwdlink.inversion.objective import LUMP_SPREAD, Problem
from mwdlink.inversion.solve import Fit, minimise

# from almost log-normal to almost free, for int (d3u/dx3)^2 dx over decades
SCAN = np.geomspace(1e1, 1e-7, 17)
# where the scan begins: free enough to fit anything, smooth enough to converge at once
FIRST = 1e-4


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
    best, value = None, np.inf
    for centre in np.geomspace(nodes[3], nodes[-4], 9):
        for dispersity in (1.3, 3.0, 10.0):
            u = start(problem, float(centre), dispersity)
            e = np.exp(u - u.max())
            chi2 = problem.chi2(e / e.sum())
            if np.isfinite(chi2) and chi2 < value:
                best, value = u, chi2
    return start(problem) if best is None else best


def log_evidence(problem: Problem, fit: Fit) -> float:
    """ln p(data | lambda) up to a constant of the data, by Laplace's approximation."""
    prior = problem.prior.precision(fit.smoothing)
    n = problem.size
    prior[n - 2, n - 2] += 1.0 / LUMP_SPREAD**2
    prior[n - 1, n - 1] += 1.0 / LUMP_SPREAD**2
    a = np.linalg.slogdet(prior)[1]
    b = np.linalg.slogdet(fit.hessian + 1e-9 * np.eye(n))[1]
    return float(-0.5 * fit.objective + 0.5 * a - 0.5 * b)


# along the scan a fit may stop this early; the one chosen is finished
ALONG = 2e-3
# and one that is forced to be far too smooth need not be finished: its evidence is nothing
ALONG_STEPS = 40


def scan(
    problem: Problem,
    u0: np.ndarray | None = None,
    values: np.ndarray = SCAN,
    tolerance: float = ALONG,
) -> Scan:
    """Fit at each lambda, each started from its neighbour; from the middle both ways.

    A fit forced to be too smooth for the data is the hard one: it is met last, from a good start.
    """
    order = np.argsort(np.abs(np.log(values / FIRST)), kind="stable")
    first = int(order[0])
    fits: dict[int, Fit] = {}
    start_u = good_start(problem) if u0 is None else u0
    fits[first] = minimise(
        problem, start_u, float(values[first]), tolerance=tolerance, most=ALONG_STEPS
    )
    for direction in (range(first + 1, len(values)), range(first - 1, -1, -1)):
        u = fits[first].u
        for i in direction:
            fits[i] = minimise(problem, u, float(values[i]), tolerance=tolerance, most=ALONG_STEPS)
            u = fits[i].u
    evidence = [log_evidence(problem, fits[i]) for i in range(len(values))]
    best = int(np.argmax(evidence))
    fits[best] = minimise(problem, fits[best].u, float(values[best]))
    ordered = tuple(fits[i] for i in range(len(values)))
    rough = [float(np.sum((problem.prior.third @ f.u) ** 2)) for f in ordered]
    return Scan(
        np.asarray(values, dtype=float),
        ordered,
        np.array([log_evidence(problem, f) for f in ordered]),
        np.asarray(rough),
        np.array([effective_freedom(problem, f) for f in ordered]),
    )


def effective_freedom(problem: Problem, fit: Fit) -> float:
    """Trace of the hat matrix: how many parameters the data, not the prior, fix."""
    prior = problem.prior.precision(fit.smoothing)
    data = fit.hessian - prior
    solved = np.linalg.solve(fit.hessian + 1e-9 * np.eye(problem.size), data)
    return float(np.trace(solved))
