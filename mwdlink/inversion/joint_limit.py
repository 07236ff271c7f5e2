"""The smallest tail that a pair of data sets could show, from the information it carries itself."""

from __future__ import annotations

import numpy as np

from mwdlink.inversion.joint import JointProblem
from mwdlink.inversion.joint_fit import JointFit

# A part of the weight is reported as a tail when about 3.6 standard deviations speak for it (its
# evidence must make up for the wager); nine times in ten it then takes 1.3 more
DETECTION = 4.9
# the tail asked about: log-normal, this far beyond the limit and this wide (dispersity)
TAIL_RATIO, TAIL_DISPERSITY = 2.0, 1.3


def detection_limit(problem: JointProblem, fit: JointFit, beyond: float) -> float | None:
    """Weight fraction of a tail that nine in ten such pairs of data would show [-].

    The Fisher information on the weight of a tail at twice `beyond`, with everything else unknown
    (distribution, time law, exponent, GPC factor, level, baseline) left to adjust itself.

    Parameters
    ----------
    problem : JointProblem
        With the smooth continuation as its prior.
    fit : JointFit
        Its best fit.
    beyond : float
        [g/mol]

    References
    ----------
    After L. A. Currie, Anal. Chem. 40 (1968) 586 (limits from false alarm and miss; recalled).
    """
    sigma = np.sqrt(np.log(TAIL_DISPERSITY))
    centre = np.log(TAIL_RATIO * beyond) - 0.5 * sigma**2
    shape = np.exp(-0.5 * ((problem.x * np.log(10.0) - centre) / sigma) ** 2)
    if not shape.sum() > 0:
        return None
    r, slope, w = problem.residuals(fit.z)
    n = problem.n
    step = np.append(shape / shape.sum(), 0.0) - w
    # derivative of the residuals when weight is moved into the tail, through du = dw/w: nodes
    # without weight would blow up, so the tail is put in by a small finite step
    size = 1e-4
    z = fit.z.copy()
    z[: n + 1] = np.log(np.maximum(w + size * step, 1e-300))
    base = fit.z.copy()
    base[: n + 1] = np.log(np.maximum(w, 1e-300))
    push = (problem.residuals(z)[0] - problem.residuals(base)[0]) / size
    # the lump's prior is no datum
    push, slope = push[:-1], slope[:-1]
    hessian = fit.hessian + 1e-9 * np.eye(problem.size)
    left = float(push @ push - (slope.T @ push) @ np.linalg.solve(hessian, slope.T @ push))
    if not left > 0:
        return None
    limit = DETECTION / np.sqrt(left)
    return float(limit) if limit < 1.0 else None
