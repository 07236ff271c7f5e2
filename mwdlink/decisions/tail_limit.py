"""The smallest tail that a pair of data sets would show: the verdict on imagined copies of it.

A copy has the GPC's own curve with a tail of known weight added, the law, exponent and factors that
the pair asks for, and no noise. Both possibilities (a tail of its own, or the smooth continuation)
are fitted to it as to the pair itself. What noise does to the two fits, to their evidence and to
the GPC's own continuation follows to first order from the fits, and so does what members would look
like. The verdict of `find_tail` is then passed under many such noises.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from scipy.stats import norm

from mwdlink.inversion import joint, joint_fit
from mwdlink.inversion.joint import JointProblem
from mwdlink.inversion.joint_alone import AloneFit, fit_alone
from mwdlink.inversion.joint_ensemble import BESIDE, KernelScan, weight_beyond
from mwdlink.inversion.joint_fit import PUSH, JointScan

# the tail asked about: log-normal, this far beyond the limit and this wide (dispersity)
TAIL_RATIO, TAIL_DISPERSITY = 2.0, 1.3
# how often a tail of that weight is to be found
POWER = 0.9
# noises of the data and, with each of them, members of either possibility
NOISES, MEMBERS = 256, 64
# members drawn for the shape of their distribution
DRAWS = 512
# weights looked between; first steps; how near two weights must be for the limit to lie between
SMALLEST, LARGEST, FIRST, STRIDE, NEAR = 1e-5, 0.05, 2e-3, 1.8, 1.05


def detection_limit(
    scan: KernelScan,
    alone: AloneFit,
    beyond: float,
    level: float,
    worth: float = 0.0,
    stretch: float = 1.0,
) -> float | None:
    """Weight fraction of a tail that nine in ten such pairs of data would show [-].

    Of a tail at twice `beyond`, dispersity 1.3. None where none up to 5 wt% would.

    Parameters
    ----------
    scan : KernelScan
        The kernel of highest evidence.
    alone : AloneFit
        The GPC's own curve.
    beyond : float
        [g/mol]
    level : float
        Probability of the intervals.
    worth : float
        Weight fraction that no model of this kind is better than, one standard deviation [-].
    stretch : float
        Factor on the intervals of a strained pair.

    References
    ----------
    After L. A. Currie, Anal. Chem. 40 (1968) 586 (limits from false alarm and miss; recalled).
    """
    sigma = np.sqrt(np.log(TAIL_DISPERSITY))
    x = scan.free.problem.x
    centre = np.log(TAIL_RATIO * beyond) - 0.5 * sigma**2
    shape = np.exp(-0.5 * ((x * np.log(10.0) - centre) / sigma) ** 2)
    if not shape.sum() > 0:
        return None
    shape = shape / shape.sum()

    def margin(size: float) -> float:
        # above zero where nine copies in ten show their tail
        low = low_ends(copy_with(scan, alone, shape, size), beyond, level, worth, stretch)
        return float(np.quantile(low, 1.0 - POWER))

    return _crossing(margin)


def _crossing(margin: Callable[[float], float]) -> float | None:
    """Weight at which a function of it comes above zero; None where no weight is enough.

    Very large tails need not show better than middling ones: they lift the GPC's continuation.
    """
    at, value = FIRST, margin(FIRST)
    step = STRIDE if value < 0 else 1.0 / STRIDE
    while True:
        last, last_value = at, value
        at *= step
        if at > LARGEST:
            return None
        if at < SMALLEST:
            return last
        value = margin(at)
        if (value < 0) != (last_value < 0):
            break
    (a, fa), (b, fb) = sorted(((at, value), (last, last_value)))
    while b > NEAR * a:
        # on the straight line between the two, but not too near either
        middle = a + float(np.clip(fa / (fa - fb), 0.1, 0.9)) * (b - a)
        value = margin(middle)
        if value < 0:
            a, fa = middle, value
        else:
            b, fb = middle, value
    return float(a + fa / (fa - fb) * (b - a))


@dataclass(frozen=True, eq=False)
class Copy:
    """Fits to a pair without noise whose tail is known.

    Attributes
    ----------
    free, smooth : JointScan
        The curve free beyond the GPC, and only its smooth continuation there.
    alone : AloneFit
        The GPC's own curve.
    """

    free: JointScan
    smooth: JointScan
    alone: AloneFit


def copy_with(scan: KernelScan, alone: AloneFit, shape: np.ndarray, size: float) -> Copy:
    """The pair once more, without noise and with so much of a tail.

    Parameters
    ----------
    shape : ndarray of shape (n,)
        Weights of the tail on the nodes, sum 1.
    size : float
        Weight fraction of the tail.
    """
    problem = scan.free.problem
    p = scan.best.nuisance
    w = (1.0 - size) * alone.w + size * shape
    u = np.log(np.maximum(w, 1e-30))
    data = problem.response.log_moduli(np.append(w, 0.0), p[joint.TIME], p[joint.EXPONENT])[0]
    curve = problem.gpc.model(problem.x, u, p[joint.CALIBRATION], p[joint.BASELINE])[0]
    gpc = replace(problem.gpc, density=curve)
    free = replace(problem, data=data + p[joint.MODULUS], gpc=gpc)
    smooth = free.with_priors(scan.smooth.problem.priors)
    own = fit_alone(problem.x, gpc, alone.smoothing, alone.u)
    one = joint_fit.scan(free, _start(free, u, p), BESIDE)
    two = joint_fit.scan(smooth, _start(smooth, own.u, p), BESIDE, one.best.objective)
    return Copy(one, two, own)


def _start(problem: JointProblem, u: np.ndarray, nuisance: np.ndarray) -> np.ndarray:
    z = joint_fit.start(problem, u)
    z[problem.n + 1 : problem.n + 1 + nuisance.size] = nuisance
    return z


def low_ends(
    copy: Copy, beyond: float, level: float, worth: float = 0.0, stretch: float = 1.0
) -> np.ndarray:
    """Low end of the excess under many noises, as `find_tail` would report it, shape (NOISES,)."""
    free, smooth = _seen(copy.free, beyond), _seen(copy.smooth, beyond)
    own = _continuation(copy, beyond)
    # data push the two fits, the continuation, and the odds (the residuals are their slopes)
    best = copy.free.best, copy.smooth.best
    odds_push = (best[0].residuals[0] - best[1].residuals[0])[: own.push.size]
    pushes = np.stack([free.push, smooth.push, own.push, odds_push])
    noise = _normal(NOISES, 4) @ _root(pushes @ pushes.T).T
    # noise makes any fit worse, the one with fewer ways to follow it more so
    odds = copy.free.total - copy.smooth.total + 0.5 * (free.ways - smooth.ways) + noise[:, 3]
    likely = 1.0 / (1.0 + np.exp(-np.clip(odds, -500.0, 500.0)))
    excess, weight = [], []
    for fit, moved, share in ((free, noise[:, 0], likely), (smooth, noise[:, 1], 1.0 - likely)):
        # the members' own noise of the GPC moves their continuation as well
        alike = PUSH**2 * float(fit.push @ own.push) / (np.std(fit.drawn) * np.std(own.drawn))
        alike = float(np.clip(alike, -0.99, 0.99))
        z = _normal(MEMBERS, 2)
        other = alike * z[:, 0] + np.sqrt(1.0 - alike**2) * z[:, 1]
        part = np.exp(_like(fit.drawn, z[:, 0]) + moved[:, None])
        taken = np.exp(_like(own.drawn, other) + noise[:, 2, None])
        excess.append(part - taken)
        weight.append(np.repeat(share[:, None] / MEMBERS, MEMBERS, axis=1))
    value, low = _quantiles(np.hstack(excess), np.hstack(weight), (0.5, 0.5 * (1.0 - level)))
    more = float(norm.ppf((1.0 + level) / 2.0)) * worth
    return np.asarray(value - np.hypot(stretch * (value - low), more))


@dataclass(frozen=True, eq=False)
class _Seen:
    """A weight beyond M in one kind of fit.

    Attributes
    ----------
    push : ndarray of shape (m,)
        What a standard deviation of each row of data does to its ln.
    drawn : ndarray of shape (DRAWS,)
        Its ln over members, rising.
    ways : float
        In how many ways the fit can follow noise.
    """

    push: np.ndarray
    drawn: np.ndarray
    ways: float = 0.0


def _seen(scan: JointScan, beyond: float) -> _Seen:
    problem, best = scan.problem, scan.best
    n, rows = problem.n, problem.data.size + problem.gpc.size
    share = np.append(weight_beyond(problem.x, np.eye(n), beyond), 1.0)
    every = np.log([max(float(fit.w @ share), 1e-30) for fit in scan.fits])
    slope = best.residuals[1]
    gradient = np.zeros(problem.size)
    gradient[: n + 1] = best.w * (share / max(float(best.w @ share), 1e-30) - 1.0)
    hessian = best.hessian + 1e-9 * np.eye(problem.size)
    solved = np.linalg.solve(hessian, np.column_stack([gradient, slope[:rows].T]))
    reach = solved[:, 0]
    # members are nearly normal in ln of the weight; each takes a lambda by its evidence
    which = np.searchsorted(np.cumsum(scan.weights)[:-1], (np.arange(DRAWS) + 0.5) / DRAWS)
    drawn = every[which] + PUSH * np.sqrt(float(gradient @ reach)) * _draws(1)[:, 0]
    return _Seen(
        slope[:rows] @ reach,
        np.sort(drawn),
        float(np.sum(solved[:, 1:] * slope[:rows].T)),
    )


def _continuation(copy: Copy, beyond: float) -> _Seen:
    problem, alone = copy.free.problem, copy.alone
    share = weight_beyond(problem.x, np.eye(problem.n), beyond)
    hessian = alone.hessian + 1e-9 * np.eye(problem.n)
    solved = np.linalg.solve(hessian, np.hstack([alone.slope.T, alone.rows.T]))
    # members push the rows of the GPC by a part of their error, the smoothness by all of its own
    m = problem.gpc.size
    size = np.concatenate([np.full(m, PUSH), np.ones(solved.shape[1] - m)])
    gradient = alone.w * (share / max(float(alone.w @ share), 1e-30) - 1.0)
    push = np.concatenate([np.zeros(problem.data.size), gradient @ solved[:, :m]])
    return _Seen(push, np.sort(_weights(alone.u, share, solved * size)))


def _weights(u: np.ndarray, share: np.ndarray, push: np.ndarray) -> np.ndarray:
    """ln of the weight beyond M over members, u being linear in what pushes it, shape (DRAWS,)."""
    drawn = u + _draws(push.shape[1]) @ push.T
    w = np.exp(drawn - drawn.max(axis=1, keepdims=True))
    return np.asarray(np.log(np.maximum(w @ share / w.sum(axis=1), 1e-30)))


def _like(drawn: np.ndarray, z: np.ndarray) -> np.ndarray:
    """What stands where standard normal numbers stand, in a sorted sample."""
    place = (np.arange(drawn.size) + 0.5) / drawn.size
    return np.asarray(np.interp(norm.cdf(z), place, drawn))


@lru_cache(maxsize=4)
def _draws(columns: int) -> np.ndarray:
    """Standard normal numbers and their opposites, always the same, shape (DRAWS, columns)."""
    half = np.random.default_rng(0).standard_normal((DRAWS // 2, columns))
    out = np.concatenate([half, -half])
    out.setflags(write=False)
    return out


@lru_cache(maxsize=4)
def _normal(count: int, columns: int) -> np.ndarray:
    """Standard normal numbers spread evenly: a lattice of golden ratios, always the same.

    After H. Weyl, Math. Ann. 77 (1916) 313 (even spread of multiples; recalled).
    """
    ratio = 2.0
    for _ in range(60):
        ratio = (1.0 + ratio) ** (1.0 / (columns + 1))
    steps = ratio ** -np.arange(1.0, columns + 1)
    out = norm.ppf((0.5 + np.arange(1, count + 1)[:, None] * steps) % 1.0)
    out.setflags(write=False)
    return np.asarray(out)


def _root(covariance: np.ndarray) -> np.ndarray:
    """A matrix R with R R' the covariance, which may be short of rank."""
    values, vectors = np.linalg.eigh(covariance)
    return np.asarray(vectors * np.sqrt(np.maximum(values, 0.0)))


def _quantiles(x: np.ndarray, weight: np.ndarray, q: tuple[float, ...]) -> list[np.ndarray]:
    """Weighted quantiles of every row."""
    order = np.argsort(x, axis=1)
    x = np.take_along_axis(x, order, axis=1)
    weight = np.take_along_axis(weight, order, axis=1)
    place = np.cumsum(weight, axis=1) - 0.5 * weight
    rows = np.arange(x.shape[0])
    out = []
    for share in q:
        j = np.clip((place < share).sum(axis=1), 1, x.shape[1] - 1)
        a, b = place[rows, j - 1], place[rows, j]
        t = np.clip((share - a) / np.maximum(b - a, 1e-12), 0.0, 1.0)
        out.append(x[rows, j - 1] + t * (x[rows, j] - x[rows, j - 1]))
    return out
