"""How far the members of a joint inference may be believed: what widens their intervals.

Members know of noise, priors, smoothing and the kernels they were drawn with. They do not know of a
kernel that was not asked for and explains the pair better, nor that card, kernel or pairing of the
samples is wrong. Both leave traces, and the traces widen what is reported.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
from scipy.stats import chi2, norm

from mwdlink.inversion.joint_ensemble import HEARD, Joint
from mwdlink.quantity import Uncertain

# sum of squares of the nuisance unknowns' distances from their priors up to which nothing is
# stretched; about 1 to 3 where card, kernel and data belong together
EXPECTED_STRAIN = 2.0
# beyond this sum (one pair in a thousand, if the priors hold) the value is assumed, not resolved
AT_ODDS = float(chi2.ppf(0.999, 5))
# from these shares of the evidence on, kernels that were not asked for put the others in doubt,
# and leave next to nothing of them
DOUBTED, REFUTED = 0.5, 0.99
# weight fraction that kernel, mixing rule and continuation are worth at best, one standard
# deviation (assumed): a hundredth of a per cent is not told from nothing
WORTH = 2e-4
LEAST_SAMPLES = 5


def strain(found: Joint) -> float:
    """Sum of squares of the nuisance unknowns' distances from their priors, in their spreads.

    Of the kernel that the data speak for, whether it was asked for or not: where that one is at
    ease with card and data, the others' strain is the kernel's fault and no news about the card.
    """
    doubted = found.beside is not None and found.doubt > DOUBTED
    best = found.beside.best if doubted and found.beside is not None else found.best
    priors = found.setting.priors
    z = (best.nuisance - priors.centre) / priors.spread
    return float(z @ z)


def stretch(found: Joint) -> float:
    """Factor on the intervals: the root of the strain over what is expected of it, at least 1."""
    return float(np.sqrt(max(1.0, strain(found) / EXPECTED_STRAIN)))


def unresolved(found: Joint) -> bool:
    """Whether a value rests on something the data speak against."""
    return found.doubt > REFUTED or strain(found) > AT_ODDS


def heard(found: Joint) -> Joint | None:
    """The kernels that were not asked for, where enough speaks for them."""
    second = found.beside
    if second is None or found.doubt <= HEARD or second.w.shape[0] < LEAST_SAMPLES:
        return None
    return second


def uncertain(
    own: np.ndarray,
    level: float,
    status: str = "resolved",
    *,
    other: np.ndarray | None = None,
    doubt: float = 0.0,
    budget: Mapping[str, float] | None = None,
) -> Uncertain:
    """Interval of a quantity over members, reaching as far as that over all kernels.

    The value stays that of the kernels asked for. Its interval is drawn out to hold the interval of
    all kernels together, each with its share of the evidence.

    Parameters
    ----------
    own : ndarray of shape (m,)
        Over the members; the first stands alone where there are too few.
    other : ndarray of shape (k,), optional
        Over members of the kernels that were not asked for.
    doubt : float
        Share of these among all.
    budget : mapping, optional
        Of the own interval; what was drawn out goes to the kernel.
    """
    if own.size < LEAST_SAMPLES:
        return Uncertain(float(own[0]), None, None, level, status)
    u = Uncertain.from_samples(own, level=level, status=status, budget=budget)
    if other is None or u.low is None or u.high is None:
        return u
    weights = np.concatenate(
        [np.full(own.size, (1 - doubt) / own.size), np.full(other.size, doubt / other.size)]
    )
    every = Uncertain.from_samples(np.concatenate([own, other]), level=level, weights=weights)
    if every.low is None or every.high is None:
        return u
    low, high = min(u.low, every.low), max(u.high, every.high)
    part = ((u.high - u.low) / max(high - low, 1e-300)) ** 2
    shares = {k: v * part for k, v in u.budget.items()}
    if shares:
        shares["kernel"] = shares.get("kernel", 0.0) + 1.0 - part
    return replace(u, low=low, high=high, budget=shares)


def widened(u: Uncertain, found: Joint, least: float | None = None) -> Uncertain:
    """The interval stretched by the strain, with what no model of this kind is better than.

    A pair that agrees only by stretching what was thought known is as uncertain as it is strained:
    the interval grows by the square root of the strain over what is expected of it.
    """
    if u.value is None or u.low is None or u.high is None:
        return u
    factor = stretch(found)
    more = float(norm.ppf((1 + u.level) / 2)) * WORTH
    low = u.value - float(np.hypot(factor * (u.value - u.low), more))
    high = u.value + float(np.hypot(factor * (u.high - u.value), more))
    return replace(u, low=low if least is None else max(low, least), high=high)
