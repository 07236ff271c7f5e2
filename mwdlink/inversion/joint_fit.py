"""Finding the minimum of the joint objective, and lambda by its evidence: damped Gauss-Newton.

The problem itself (unknowns, data, priors) is in `joint`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.linalg.lapack import dposv

from mwdlink.inversion.joint import EXPONENT, NUISANCE, JointProblem

# Members are pushed by this many standard deviations. With 1, right for melts whose law, exponent
# and GPC are all off as their priors allow, the intervals hold nearly every melt whose exponent is
# the prior's centre: there the errors are 0.62 of what the intervals say. This much keeps the cover
# of those near 95 %, and is too little for exponents far from the centre (docs/tail.md)
PUSH = 0.74
MAX_STEPS = 150
# three steps in a row that gain less than this many tolerances end a fit as well: along narrow
# valleys the linear model promises more than it keeps
IDLE = 5.0
# of the objective, which is a sum over a hundred rows: what is left is nothing beside its scatter
TOLERANCE = 2e-2
# an objective this far above the best one's is beyond all rescue; steps looked ahead for it
BEYOND_RESCUE, FORESEEN = 60.0, 15.0
# what a hundred more steps may still gain in a fit that counts as converged
SETTLED = 0.5
# values of lambda whose evidence is this many e-folds below the best are not followed further
HOPELESS = 9.0


@dataclass(frozen=True, eq=False)
class JointFit:
    """A minimum of the joint objective.

    Attributes
    ----------
    z : ndarray of shape (size,)
    w : ndarray of shape (n + 1,)
        Weights of nodes and of the lump above.
    nuisance : ndarray of shape (5,)
    smoothing : float
    objective : float
    chi2_sweep, chi2_gpc : float
    log_evidence : float
        By Laplace's approximation, up to a constant of the data.
    hessian : ndarray of shape (size, size)
    converged : bool
    steps : int
    residuals : tuple of ndarray
        What `JointProblem.residuals` gives at z, so that a fit that starts here need not ask again.
    """

    z: np.ndarray
    w: np.ndarray
    nuisance: np.ndarray
    smoothing: float
    objective: float
    chi2_sweep: float
    chi2_gpc: float
    log_evidence: float
    hessian: np.ndarray
    converged: bool
    steps: int
    residuals: tuple[np.ndarray, np.ndarray, np.ndarray]


@dataclass(frozen=True, eq=False)
class Noise:
    """A perturbation in standard deviations: of the data's rows and of the prior's.

    Attributes
    ----------
    data : ndarray of shape (2 n_w + m + 1,)
        Sweep, GPC, lump.
    prior : ndarray of shape (n_p,)
    """

    data: np.ndarray
    prior: np.ndarray


def draw_noise(problem: JointProblem, rng: np.random.Generator) -> Noise:
    """Normal numbers for every row, of standard deviation PUSH."""
    return Noise(
        PUSH * rng.standard_normal(problem.data.size + problem.gpc.size + 1),
        PUSH * rng.standard_normal(problem.size - 1),
    )


def start(problem: JointProblem, u: np.ndarray) -> np.ndarray:
    """A start from the GPC's own curve on the nodes, everything else at its prior."""
    z = np.zeros(problem.size)
    z[: problem.n] = u
    z[problem.n] = np.log(np.exp(u).sum()) + problem.priors.lump[0]
    z[problem.n + 1 : problem.n + 1 + len(NUISANCE)] = problem.priors.centre
    if problem.extra is not None:
        z[problem.n + 1 + len(NUISANCE) :] = problem.extra.centre
    return z


def minimise(
    problem: JointProblem,
    z0: np.ndarray,
    smoothing: float,
    noise: Noise | None = None,
    tolerance: float = TOLERANCE,
    bound: float = np.inf,
    known: tuple[np.ndarray, np.ndarray, np.ndarray] | None = None,
) -> JointFit:
    """Damped Gauss-Newton, of the data as they are or perturbed (randomise, then optimise).

    Parameters
    ----------
    problem : JointProblem
    z0 : ndarray of shape (size,)
        Start.
    smoothing : float
        lambda > 0.
    noise : Noise, optional
        Perturbation of data and prior.
    tolerance : float
        A step that promises less than this of the objective is the end.
    bound : float
        A fit that will not come below this is left early: another one explains the data far
        better, and how badly this one does it does not matter.
    known : tuple of ndarray, optional
        The problem's residuals at z0, where an earlier fit has them.
    """
    rows, target = problem.prior_rows(smoothing)
    shift = 0.0 if noise is None else noise.data
    if noise is not None:
        target = target + noise.prior
    precision = rows.T @ rows
    low, high = problem.response.exponent_limits
    at = problem.n + 1 + EXPONENT

    def cost(
        z: np.ndarray, known: tuple[np.ndarray, np.ndarray, np.ndarray] | None = None
    ) -> tuple[float, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        r, slope, w = problem.residuals(z) if known is None else known
        r = r - shift
        q = rows @ z - target
        return float(r @ r + q @ q), r, slope, w, q

    z = np.array(z0, dtype=float)
    value, r, slope, w, q = cost(z, known)
    damping = 1e-3
    converged = False
    steps = slow = 0
    for steps in range(1, MAX_STEPS + 1):
        gradient = slope.T @ r + rows.T @ q
        hessian = slope.T @ slope + precision
        diagonal = np.diag(hessian).copy()
        refused = False
        while True:
            lhs = hessian.copy()
            lhs.flat[:: lhs.shape[0] + 1] += damping * diagonal + 1e-12
            _, step, info = dposv(lhs, -gradient)
            promised = -float(gradient @ step) if info == 0 else np.inf
            if info == 0 and np.all(np.isfinite(step)):
                # far steps in u leave the range in which the linear model means anything
                step = step * min(1.0, 6.0 / max(np.abs(step).max(), 1e-300))
                trial = z + step
                trial[at] = min(max(trial[at], low), high)
                new = cost(trial)
                if new[0] <= value + 1e-12 * abs(value):
                    break
                if promised < tolerance:
                    converged = True
                    break
            refused = True
            damping = max(damping * 6.0, 1e-6)
            if damping > 1e8:
                break
        if converged or damping > 1e8:
            break
        gain = value - new[0]
        z = trial
        value, r, slope, w, q = new
        if not refused:
            damping = max(damping * (0.15 if gain > 0.25 * promised else 2.0), 1e-9)
        slow = slow + 1 if gain < IDLE * tolerance else 0
        if slow >= 3:
            converged = True
            break
        if steps > 8 and value - FORESEEN * gain > bound:
            break
        if promised < tolerance * (1.0 + 1e-3 * value):
            converged = True
            break
    hessian = slope.T @ slope + precision
    m = problem.data.size
    return JointFit(
        z,
        w,
        z[problem.n + 1 : problem.n + 1 + len(NUISANCE)].copy(),
        smoothing,
        value,
        float(r[:m] @ r[:m]),
        float(r[m:-1] @ r[m:-1]),
        _log_evidence(problem, smoothing, value, hessian),
        hessian,
        converged,
        steps,
        (r + shift, slope, w),
    )


def _log_evidence(
    problem: JointProblem, smoothing: float, value: float, hessian: np.ndarray
) -> float:
    rows, _ = problem.prior_rows(smoothing)
    prior = rows.T @ rows
    prior[problem.n, problem.n] += 1.0 / problem.priors.lump[1] ** 2
    floor = 1e-9 * np.eye(problem.size)
    a = np.linalg.slogdet(prior + floor)[1]
    b = np.linalg.slogdet(hessian + floor)[1]
    return float(-0.5 * value + 0.5 * a - 0.5 * b)


@dataclass(frozen=True, eq=False)
class JointScan:
    """Fits along lambda, from smooth to free.

    Attributes
    ----------
    problem : JointProblem
    fits : tuple of JointFit
        In order of falling lambda; hopeless ones are left out.
    asked : int
        Number of values the evidence is averaged over.
    """

    problem: JointProblem
    fits: tuple[JointFit, ...]
    asked: int

    @property
    def log_evidence(self) -> np.ndarray:
        return np.array([f.log_evidence for f in self.fits])

    @property
    def weights(self) -> np.ndarray:
        """Posterior share of each lambda, shape (k,)."""
        x = np.exp(self.log_evidence - self.log_evidence.max())
        return x / x.sum()

    @property
    def best(self) -> JointFit:
        return self.fits[int(np.argmax(self.log_evidence))]

    @property
    def total(self) -> float:
        """ln of the evidence averaged over lambda."""
        e = self.log_evidence
        return float(e.max() + np.log(np.sum(np.exp(e - e.max())) / self.asked))


def scan(
    problem: JointProblem, z0: np.ndarray, values: np.ndarray, rival: float = np.inf
) -> JointScan:
    """Fit at each lambda, from the middle both ways, each started from its neighbour.

    A direction is left where the evidence has become hopeless: fits that are far too smooth for
    the data are the slow ones, and nothing is drawn from them. `rival` is the objective of another
    explanation's best fit.
    """
    middle = len(values) // 2
    bound = rival + BEYOND_RESCUE
    fits: dict[int, JointFit] = {middle: minimise(problem, z0, float(values[middle]), bound=bound)}
    top = fits[middle].log_evidence
    lost = not fits[middle].converged and fits[middle].objective > bound
    # what is beyond rescue in the middle is no better where it is smoother
    smoother = range(0) if lost else range(middle - 1, -1, -1)
    for direction in (range(middle + 1, len(values)), smoother):
        z = fits[middle].z
        for i in direction:
            bound = min(bound, min(f.objective for f in fits.values()) + BEYOND_RESCUE)
            fits[i] = minimise(problem, z, float(values[i]), bound=bound)
            z = fits[i].z
            top = max(top, fits[i].log_evidence)
            if fits[i].log_evidence < top - HOPELESS:
                break
    for i, fit in fits.items():
        near = fit.log_evidence > top - HOPELESS and fit.objective < bound
        if not fit.converged and near:
            fits[i] = polished(problem, fit)
    return JointScan(problem, tuple(fits[i] for i in sorted(fits)), len(values))


def polished(problem: JointProblem, fit: JointFit) -> JointFit:
    """A fit that ran out of steps, taken on; it has settled when that gains next to nothing."""
    again = minimise(problem, fit.z, fit.smoothing)
    if not again.converged and fit.objective - again.objective < SETTLED:
        again = replace(again, converged=True)
    return again
