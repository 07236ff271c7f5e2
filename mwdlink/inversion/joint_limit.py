"""The smallest tail that a pair of data sets could show, from the information it carries itself."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.stats import norm

from mwdlink.inversion.joint import NUISANCE, JointProblem
from mwdlink.inversion.joint_alone import AloneFit
from mwdlink.inversion.joint_ensemble import KernelScan, weight_beyond
from mwdlink.inversion.joint_fit import PUSH

# the tail asked about: log-normal, this far beyond the limit and this wide (dispersity)
TAIL_RATIO, TAIL_DISPERSITY = 2.0, 1.3
# how often a tail of that weight is to be found
POWER = 0.9
# the evidence for a tail has to make up for the wager on one; this many e-folds at least (as the
# pair itself says where it has no tail, else assumed)
LEAST_WAGER = 5.0
# small enough for a derivative, large enough for nodes that hold next to nothing
STEP = 1e-4
# the moduli's logarithms grow ever less with a tail: what one of the limit's own size does counts
ROUNDS = 4


def detection_limit(
    scan: KernelScan,
    alone: AloneFit,
    beyond: float,
    level: float,
    worth: float = 0.0,
    stretch: float = 1.0,
) -> float | None:
    """Weight fraction of a tail that nine in ten such pairs of data would show [-].

    A tail is found where the interval of the excess stays above zero. Two things must come
    together: the excess (what of the tail lies beyond and is not taken for the GPC's own
    continuation) must outgrow its interval, and the evidence must speak for a tail. Both are worked
    out at the GPC's smooth curve without a tail, with everything else unknown (distribution, time
    law, exponent, GPC factor, level, baseline) left to adjust itself.

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
    problem = scan.smooth.problem
    sigma = np.sqrt(np.log(TAIL_DISPERSITY))
    centre = np.log(TAIL_RATIO * beyond) - 0.5 * sigma**2
    shape = np.exp(-0.5 * ((problem.x * np.log(10.0) - centre) / sigma) ** 2)
    if not shape.sum() > 0:
        return None
    shape = shape / shape.sum()
    # what a unit of tail adds to the excess, and how well the excess is known
    own, spread, taken = _continuation(problem, alone, shape, beyond)
    visible = float(weight_beyond(problem.x, shape, beyond)) - own - taken
    if not visible > 0:
        return None
    miss = float(norm.ppf(POWER))
    edge = float(norm.ppf((1 + level) / 2))
    # ln odds of a tail that leave less than the interval's lower end to chance
    wager = max(scan.smooth.total - scan.free.total, LEAST_WAGER)
    wager += float(np.log((1 + level) / (1 - level)))
    information = _information(problem, scan, alone, np.append(shape, 0.0))
    limit = STEP
    for _ in range(ROUNDS):
        carried = information(limit)
        if not carried > 0:
            return None
        # a continuation that a tail has lifted is as uncertain in proportion
        lifted = spread * (1.0 + taken * limit / max(own, STEP))
        known = stretch * float(np.hypot(lifted, visible / np.sqrt(carried)))
        by_interval = (edge + miss) * float(np.hypot(known, worth)) / visible
        by_evidence = (miss + np.sqrt(2.0 * wager)) / np.sqrt(carried)
        limit = float(max(by_interval, by_evidence))
        if not limit < 1.0:
            return None
    return limit


def _information(
    problem: JointProblem, scan: KernelScan, alone: AloneFit, shape: np.ndarray
) -> Callable[[float], float]:
    """Information on the weight of a tail of given size, the other unknowns adjusting themselves.

    Where the pair has a tail, the smooth curve fits it badly: the answer is worked out at the GPC's
    own curve and the nuisance unknowns of the best fit.
    """
    n = problem.n
    z = np.zeros(problem.size)
    z[:n] = alone.u
    z[n] = np.log(np.exp(alone.u).sum()) + problem.priors.lump[0]
    z[n + 1 : n + 1 + len(NUISANCE)] = scan.best.nuisance
    r, slope, w = problem.residuals(z)
    z[: n + 1] = np.log(np.maximum(w, 1e-300))
    rows, _ = problem.prior_rows(scan.best.smoothing)
    hessian = slope.T @ slope + rows.T @ rows + 1e-9 * np.eye(problem.size)

    def information(size: float) -> float:
        pushed = z.copy()
        pushed[: n + 1] = np.log(np.maximum(w + size * (shape - w), 1e-300))
        # the lump's prior is no datum
        push = (problem.residuals(pushed)[0] - r)[:-1] / size
        pull = slope[:-1].T @ push
        return float(push @ push - pull @ np.linalg.solve(hessian, pull))

    return information


def _continuation(
    problem: JointProblem, alone: AloneFit, shape: np.ndarray, beyond: float
) -> tuple[float, float, float]:
    """Weight of the GPC's continuation beyond M, its spread, and how much it takes of a tail.

    The lower flank of a tail stands in what the GPC sees, and lifts the continuation.
    """
    n = problem.n
    share = weight_beyond(problem.x, np.eye(n), beyond)
    own = float(alone.w @ share)
    gradient = alone.w * (share - own)
    reach = np.linalg.solve(alone.hessian + 1e-9 * np.eye(n), gradient)
    # members push the rows of the GPC by a part of their error, the smoothness by all of its own
    rows = PUSH * (alone.slope @ reach)
    spread = float(np.sqrt(np.sum(rows**2) + np.sum((alone.rows @ reach) ** 2)))
    gpc = problem.gpc
    mixed = (1 - STEP) * alone.w + STEP * shape
    before = gpc.model(problem.x, alone.u, 0.0, 0.0)[0]
    after = gpc.model(problem.x, np.log(np.maximum(mixed, 1e-300)), 0.0, 0.0)[0]
    taken = float(reach @ (alone.slope.T @ ((after - before) / gpc.sigma))) / STEP
    return own, spread, max(taken, 0.0)
