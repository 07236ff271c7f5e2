"""GPC and sweep as one inference: one distribution, seen by two instruments with their own errors.

Unknown are u = ln(mass per node) over the ranges of both instruments, a lump of chains longer than
the sweep can follow, and what neither instrument is sure of: the factor of the time law, the mixing
exponent, the GPC's factor on M, the level of the moduli and the GPC's baseline. Each has a prior;
a wrong time law looks like a tail, and a wrong GPC calibration looks like a wrong time law, so none
of them may be taken as known.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from scipy.linalg.lapack import dposv

from mwdlink.inversion.joint_data import GpcRows
from mwdlink.inversion.joint_response import Response
from mwdlink.inversion.roughness import roughness

# the unknowns beside the distribution, in this order
NUISANCE = ("time law", "exponent", "calibration", "modulus", "baseline")
TIME, EXPONENT, CALIBRATION, MODULUS, BASELINE = range(5)
PINNED = 1e-3
# ln of the weight beyond the sweep's reach: centre and spread of a weak prior
TOP_CENTRE, TOP_SPREAD = float(np.log(1e-4)), 3.0
# where the curve is the smooth continuation of the GPC's the lump is empty
EMPTY_CENTRE, EMPTY_SPREAD = -16.0, 1.0
# near the GPC's end lambda falls to a part of itself (from here, over so many decades of M)
TAIL_FROM, TAIL_RAMP, TAIL_FREEDOM = -0.6, 0.4, 3e-4
# lambda of a curve that may only go on smoothly there
STIFF = 3.0
# Members are pushed by this many standard deviations. With 1 the intervals of the weight beyond the
# GPC covered every one of 103 invented melts (their errors 0.62 of what the intervals said): the
# time law, the exponent and the GPC all err less together than each may alone (docs/tail.md)
PUSH = 0.62
MAX_STEPS = 150
# three steps in a row that gain less than this many tolerances end a fit as well: along narrow
# valleys the linear model promises more than it keeps
IDLE = 5.0
# of the objective, which is a sum over a hundred rows: what is left is nothing beside its scatter
TOLERANCE = 2e-2


@dataclass(frozen=True, eq=False)
class Priors:
    """What is believed of the unknowns beside the distribution, before the data.

    Attributes
    ----------
    centre, spread : ndarray of shape (5,)
        Of ln time-law factor, exponent, ln GPC factor on M, ln level of the moduli, GPC baseline
        (in parts of the peak).
    tail_free : bool
        True where the curve may turn as it likes near the end of the GPC's range; False where it
        has to be the smooth continuation of what is below.
    """

    centre: np.ndarray
    spread: np.ndarray
    tail_free: bool = True

    @property
    def lump(self) -> tuple[float, float]:
        """Centre and spread of ln of the weight beyond the sweep's reach."""
        return (TOP_CENTRE, TOP_SPREAD) if self.tail_free else (EMPTY_CENTRE, EMPTY_SPREAD)

    def with_(self, index: int, spread: float) -> Priors:
        """The same with another spread of one unknown."""
        new = self.spread.copy()
        new[index] = spread
        return replace(self, spread=new)


@dataclass(frozen=True, eq=False)
class Extra:
    """A slow process of its own beside the chains: strength and time, both unknown.

    Attributes
    ----------
    kind : str
        `slow` (a broad relaxation slower than the chains) or `plateau` (an elastic network).
    centre, spread : ndarray of shape (k,)
        Of ln strength [Pa] and, for `slow`, ln time [s].
    """

    kind: str
    centre: np.ndarray
    spread: np.ndarray


@dataclass(frozen=True, eq=False)
class JointProblem:
    """Data of both instruments, forward maps and priors.

    Attributes
    ----------
    x : ndarray of shape (n,)
        log10 M of the nodes, uniform.
    gpc : GpcRows
    response : Response
    data, sigma : ndarray of shape (2 n_w,)
        ln of G' over G'', and their relative errors.
    priors : Priors
    extra : Extra or None
    """

    x: np.ndarray
    gpc: GpcRows
    response: Response
    data: np.ndarray
    sigma: np.ndarray
    priors: Priors
    extra: Extra | None = None
    _cache: dict = field(default_factory=dict)

    @property
    def n(self) -> int:
        """Number of nodes."""
        return int(self.x.size)

    @property
    def spacing(self) -> float:
        """Decades between nodes."""
        return float(self.x[1] - self.x[0])

    @property
    def size(self) -> int:
        """Number of unknowns: nodes, lump above, nuisance, extra process."""
        return self.n + 1 + len(NUISANCE) + (0 if self.extra is None else self.extra.centre.size)

    def with_priors(self, priors: Priors, extra: Extra | None = None) -> JointProblem:
        """The same data under other priors."""
        return replace(self, priors=priors, extra=extra, _cache={})

    # -- prior ----------------------------------------------------------------------------------
    def prior_rows(self, smoothing: float) -> tuple[np.ndarray, np.ndarray]:
        """Rows and targets of the Gaussian prior, shapes (n_p, size) and (n_p,)."""
        key = float(smoothing)
        if key not in self._cache:
            self._cache[key] = self._prior_rows(key)
        return self._cache[key]

    def _prior_rows(self, smoothing: float) -> tuple[np.ndarray, np.ndarray]:
        n, size = self.n, self.size
        base = roughness(n, self.spacing)
        third = np.sqrt(smoothing) * base.third[:, :n]
        middle = self.x[1:-2] + 0.5 * self.spacing - self.gpc.position[-1]
        if self.priors.tail_free:
            # a tail is a part of its own: where the GPC ends, the curve may turn as it likes
            ramp = np.clip((middle - TAIL_FROM) / TAIL_RAMP, 0.0, 1.0)
            third *= np.sqrt(TAIL_FREEDOM**ramp)[:, None]
        else:
            third[middle > TAIL_FROM] *= np.sqrt(max(STIFF / smoothing, 1.0))
        rows = np.zeros((third.shape[0] + 3 + size - n - 1, size))
        target = np.zeros(rows.shape[0])
        rows[: n - 3, :n] = third
        rows[n - 3 : n, :n] = base.weak[:, :n]
        target[n - 3 : n] = base.weak_centre
        centre, spread = self.priors.centre, self.priors.spread
        if self.extra is not None:
            centre = np.concatenate([centre, self.extra.centre])
            spread = np.concatenate([spread, self.extra.spread])
        at = np.arange(n, rows.shape[0])
        rows[at, np.arange(n + 1, size)] = 1.0 / spread
        target[at] = centre / spread
        return rows, target

    # -- data -----------------------------------------------------------------------------------
    def residuals(self, z: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Residuals of sweep, GPC and lump and their derivatives.

        Returns
        -------
        r : ndarray of shape (n_r,)
        slope : ndarray of shape (n_r, size)
        w : ndarray of shape (n + 1,)
            Weights of nodes and lump.
        """
        n = self.n
        w = weights(z[: n + 1])
        p = z[n + 1 : n + 1 + len(NUISANCE)]
        log_y, dw, d_time, d_exponent = self.response.log_moduli(w, p[TIME], p[EXPONENT])
        log_y = log_y + p[MODULUS]
        slope = np.zeros((self.data.size + self.gpc.size + 1, self.size))
        top = slice(0, self.data.size)
        # d/du through the softmax: J diag(w) - (J w) w'
        slope[top, : n + 1] = dw * w - np.outer(dw @ w, w)
        slope[top, n + 1 + TIME] = d_time
        slope[top, n + 1 + EXPONENT] = d_exponent
        slope[top, n + 1 + MODULUS] = 1.0
        if self.extra is not None:
            q = z[n + 1 + len(NUISANCE) :]
            add, d_add = self.response.extra_process(self.extra.kind, q)
            y = np.exp(log_y)
            share = y / (y + add)
            slope[top] *= share[:, None]
            slope[top, n + 1 + len(NUISANCE) :] = d_add / (y + add)[:, None]
            log_y = np.log(y + add)
        slope[top] /= self.sigma[:, None]
        g, dg_u, dg_c, dg_b = self.gpc.model(self.x, z[:n], p[CALIBRATION], p[BASELINE])
        middle = slice(self.data.size, self.data.size + self.gpc.size)
        slope[middle, :n] = dg_u / self.gpc.sigma[:, None]
        slope[middle, n + 1 + CALIBRATION] = dg_c / self.gpc.sigma
        slope[middle, n + 1 + BASELINE] = dg_b / self.gpc.sigma
        centre, spread = self.priors.lump
        slope[-1, : n + 1] = -w / spread
        slope[-1, n] += 1.0 / spread
        r = np.concatenate(
            [
                (log_y - self.data) / self.sigma,
                (g - self.gpc.density) / self.gpc.sigma,
                [(np.log(max(w[n], 1e-300)) - centre) / spread],
            ]
        )
        return r, slope, w


def weights(u: np.ndarray) -> np.ndarray:
    """softmax(u): positive, unit sum."""
    e = np.exp(u - u.max())
    return e / e.sum()


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
    """
    rows, target = problem.prior_rows(smoothing)
    shift = 0.0 if noise is None else noise.data
    if noise is not None:
        target = target + noise.prior
    precision = rows.T @ rows
    low, high = problem.response.exponent_limits
    at = problem.n + 1 + EXPONENT

    def cost(z: np.ndarray) -> tuple[float, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        r, slope, w = problem.residuals(z)
        r = r - shift
        q = rows @ z - target
        return float(r @ r + q @ q), r, slope, w, q

    z = np.array(z0, dtype=float)
    value, r, slope, w, q = cost(z)
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
            lhs[np.diag_indices_from(lhs)] += damping * diagonal + 1e-12
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


# an objective this far above the best one's is beyond all rescue; steps looked ahead for it
BEYOND_RESCUE, FORESEEN = 60.0, 15.0
# what a hundred more steps may still gain in a fit that counts as converged
SETTLED = 0.5
# values of lambda whose evidence is this many e-folds below the best are not followed further
HOPELESS = 9.0


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
    for direction in (range(middle + 1, len(values)), range(middle - 1, -1, -1)):
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
