"""Rival explanations of what the sweep shows and the GPC does not, weighed by their evidence.

Each is a fit of its own to both data sets: the same distribution and nuisance unknowns, with one
thing allowed that the others do not have. What none of them needs costs evidence, because a prior
spread over possibilities that are not used is a wager lost.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from mwdlink.inversion import joint, joint_fit
from mwdlink.inversion.joint import Extra, JointProblem, Priors
from mwdlink.inversion.joint_ensemble import KernelScan
from mwdlink.inversion.joint_fit import JointScan

NAMES = (
    "tail",
    "time law",
    "gpc baseline",
    "gpc calibration",
    "branching",
    "second phase",
    "none",
)
SMOOTHING = np.geomspace(3.0, 1e-3, 4)
# "none": card and GPC are right as they stand, within this
AS_STATED = 0.02
WIDE_CALIBRATION = 0.15
WIDE_BASELINE = 0.02
# One temperature cannot tell a branched melt from a linear one with long chains: whatever the fits
# say, branching keeps this much support, and this share of what speaks for slow relaxation
LEAST_BRANCHING, BRANCHING_SHARE = 0.05, 0.25


@dataclass(frozen=True)
class Explanation:
    """One explanation and how much speaks for it.

    Attributes
    ----------
    name : str
    support : float
        Share of the evidence among the explanations, all equal beforehand [-].
    log_evidence : float
        Relative to the best one's.
    chi2_per_point : float
        Of the sweep.
    """

    name: str
    support: float
    log_evidence: float
    chi2_per_point: float


def weigh(best: KernelScan) -> tuple[Explanation, ...]:
    """All explanations with the kernel of highest evidence, the best supported first.

    Parameters
    ----------
    best : KernelScan
    """
    free, smooth = best.free.problem, best.smooth.problem
    scans: dict[str, JointScan] = {}
    z = best.smooth.best.z
    scans["tail"] = joint_fit.scan(free, best.free.best.z, SMOOTHING)
    rival = scans["tail"].best.objective
    scans["time law"] = joint_fit.scan(smooth, z, SMOOTHING, rival)
    p = smooth.priors
    for name, priors in (
        ("none", _stated(p)),
        ("gpc baseline", p.with_(joint.BASELINE, WIDE_BASELINE)),
        ("gpc calibration", p.with_(joint.CALIBRATION, WIDE_CALIBRATION)),
    ):
        scans[name] = joint_fit.scan(smooth.with_priors(priors), z, SMOOTHING, rival)
    for name, extra in (("branching", _slow(smooth)), ("second phase", _plateau(smooth))):
        problem = smooth.with_priors(p, extra)
        start = np.concatenate([z, extra.centre])
        scans[name] = joint_fit.scan(problem, start, SMOOTHING, rival)
    totals = np.array([scans[name].total for name in NAMES])
    share = np.exp(totals - totals.max())
    share = _one_temperature(share / share.sum())
    points = smooth.data.size
    out = [
        Explanation(
            name,
            float(share[i]),
            float(totals[i] - totals.max()),
            scans[name].best.chi2_sweep / points,
        )
        for i, name in enumerate(NAMES)
    ]
    return tuple(sorted(out, key=lambda e: -e.support))


def _one_temperature(share: np.ndarray) -> np.ndarray:
    """Keep what cannot be ruled out: branching, beside everything that means slow relaxation."""
    tail, branching = NAMES.index("tail"), NAMES.index("branching")
    least = max(LEAST_BRANCHING, BRANCHING_SHARE * float(share[tail] + share[branching]))
    if share[branching] >= least:
        return share
    rest = 1.0 - share[branching]
    out = share * (1.0 - least) / max(rest, 1e-300)
    out[branching] = least
    return out


def _stated(priors: Priors) -> Priors:
    spread = priors.spread.copy()
    spread[joint.TIME] = min(spread[joint.TIME], AS_STATED)
    spread[joint.CALIBRATION] = min(spread[joint.CALIBRATION], 0.01)
    return replace(priors, spread=spread)


def _slow(problem: JointProblem) -> Extra:
    """A broad slow process, expected about the lowest frequencies, a tenth of the moduli there."""
    n = problem.data.size // 2
    size = 0.5 * np.logaddexp(2 * problem.data[0], 2 * problem.data[n])
    time = -float(problem.response.log_omega[0])
    return Extra("slow", np.array([size + np.log(0.1), time]), np.array([2.0, 1.5]))


def _plateau(problem: JointProblem) -> Extra:
    """An elastic network, expected to be a tenth of G' at the lowest frequency."""
    return Extra("plateau", np.array([problem.data[0] + np.log(0.1)]), np.array([2.0]))
