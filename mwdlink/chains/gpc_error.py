"""How far a GPC's curve may be off, and curves that are off by that much.

One model serves every question that rests on a GPC table: `tail` weighs the rows with it, `predict`
and `blend` draw whole curves from it for their bands.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.stats import norm

from mwdlink.chains.distribution import CONVERTED, Distribution
from mwdlink.errors import InputError

RELATIVE_ERROR = 0.03
"""Error of a row as a part of itself [-] (assumed)."""

BASELINE_ERROR = 0.003
"""Error of a row as a part of the curve's peak [-] (assumed)."""

SIGNAL = 1e-3
"""The curve supports what stands above this part of its peak [-]."""

CALIBRATION_SPREAD = {
    "absolute": 0.01,
    "universal": 0.02,
    "equivalent": 0.05,
    CONVERTED: 0.05,
    "unstated": 0.05,
}
"""Standard deviation of ln M by what the molar masses are [-] (assumed; 0.05 recalled)."""

ROW_LENGTH = 0.25
"""Decades of M over which errors of rows go together: detector, broadening (assumed)."""

BASELINE_LENGTH = 1.0
"""Decades of M over which a baseline drifts (assumed)."""


@dataclass(frozen=True)
class GpcError:
    """Errors of a GPC table, each a standard deviation.

    Attributes
    ----------
    relative : float
        Of a row, as a part of itself [-].
    baseline : float
        Of a row, as a part of the peak [-].
    molar_mass : float or None
        Of ln M, common to all rows [-]; None: by the calibration the distribution states.

    Raises
    ------
    InputError
        If one of them is negative, not finite, or above 0.5.
    """

    relative: float = RELATIVE_ERROR
    baseline: float = BASELINE_ERROR
    molar_mass: float | None = None

    def __post_init__(self) -> None:
        for x in (self.relative, self.baseline, self.molar_mass or 0.0):
            if not 0.0 <= x <= 0.5:
                raise InputError(
                    f"a GPC error of {x:g} is out of range.",
                    remedy="Errors are parts of 1, from 0 to 0.5: 0.03 is three per cent.",
                )

    @classmethod
    def of(cls, row: float | None = None, molar_mass: float | None = None) -> GpcError:
        """From the error of a row; the baseline's keeps its usual proportion (a tenth).

        No error of a row, with none of the molar masses given, is no error at all.
        """
        if row is None:
            return cls(molar_mass=molar_mass)
        if row == 0.0 and molar_mass is None:
            return cls(0.0, 0.0, 0.0)
        return cls(row, row * BASELINE_ERROR / RELATIVE_ERROR, molar_mass)

    def spread_of(self, d: Distribution) -> float:
        """Standard deviation of ln M of a distribution [-]."""
        if self.molar_mass is not None:
            return self.molar_mass
        return CALIBRATION_SPREAD[d.calibration]

    def words(self, kinds: Sequence[str] = ()) -> str:
        """What it is, for a sentence."""
        if self.molar_mass is not None:
            factor = f"{100 * self.molar_mass:.2g} %"
        else:
            used = [k for k in CALIBRATION_SPREAD if k in kinds] or ["absolute"]
            factor = " and ".join(f"{100 * CALIBRATION_SPREAD[k]:.2g} % ({k})" for k in used)
        return (
            f"{100 * self.relative:.2g} % of a row, {100 * self.baseline:.2g} % of the peak and "
            f"{factor} on molar masses"
        )


@dataclass(frozen=True, eq=False)
class GpcDraws:
    """Members' versions of some distributions.

    Attributes
    ----------
    mass : tuple of ndarray of shape (m, n_i)
        Weights on the nodes of each distribution, rows summing to 1.
    log_factor : ndarray of shape (m, n)
        ln of what multiplies each distribution's molar masses.
    """

    mass: tuple[np.ndarray, ...]
    log_factor: np.ndarray

    def moments(self, nodes: Sequence[np.ndarray], k: float) -> np.ndarray:
        """Sum of w M^k of each member and distribution, shape (m, n)."""
        own = [w @ m**k for w, m in zip(self.mass, nodes, strict=True)]
        return np.stack(own, axis=1) * np.exp(k * self.log_factor)


def draw_curves(
    distributions: Sequence[Distribution],
    errors: Sequence[GpcError | None],
    members: int,
    seed: int = 0,
) -> GpcDraws:
    """Curves as the GPC might have shown them, one set a member.

    The calibration error is one for all distributions (one instrument, one set of standards), each
    by its own spread, and is spread evenly over the members; rows and baseline go wrong in each run
    by themselves. Every member has a child seed of its own.

    Parameters
    ----------
    distributions : sequence of Distribution
    errors : sequence of GpcError or None
        None: exact.
    members : int
        >= 1.
    seed : int

    Returns
    -------
    GpcDraws
    """
    m = int(members)
    root = np.random.SeedSequence([seed, 0x67])
    even = np.random.default_rng(root).permutation(m)
    z = norm.ppf((even + 0.5) / m)
    children = [np.random.default_rng(child) for child in root.spawn(m)]
    spread = [
        0.0 if e is None else e.spread_of(d) for d, e in zip(distributions, errors, strict=True)
    ]
    mass = []
    for d, e in zip(distributions, errors, strict=True):
        if e is None or e.relative == e.baseline == 0.0:
            mass.append(np.broadcast_to(d.mass, (m, d.mass.size)))
            continue
        row, drift = smooth_fields(d, ROW_LENGTH), smooth_fields(d, BASELINE_LENGTH)
        drawn = [
            (r.standard_normal(row.shape[1]), r.standard_normal(drift.shape[1])) for r in children
        ]
        rows = np.stack([a for a, _ in drawn]) @ row.T
        drifts = np.stack([b for _, b in drawn]) @ drift.T
        mass.append(curves_off_by(d, e, rows, drifts))
    return GpcDraws(tuple(mass), z[:, None] * np.array(spread))


def smooth_fields(d: Distribution, length: float) -> np.ndarray:
    """Matrix from standard normal numbers to smooth standard normal errors along log10 M.

    Bumps at every `length`, normalised row by row: unit variance everywhere and a correlation of
    about exp(-distance^2/(2 length^2)).

    Parameters
    ----------
    d : Distribution
    length : float
        [decades]

    Returns
    -------
    ndarray of shape (n, k)
    """
    x = np.log10(d.molar_mass) / length
    places = np.arange(np.floor(x[0]) - 3, np.ceil(x[-1]) + 4)
    bumps = np.exp(-((x[:, None] - places) ** 2))
    return bumps / np.linalg.norm(bumps, axis=1, keepdims=True)


def curves_off_by(
    d: Distribution, error: GpcError, rows: np.ndarray, drifts: np.ndarray
) -> np.ndarray:
    """Weights of curves that are off by given errors in units of their standard deviations.

    A row is multiplied by exp(relative z_1) and moved by baseline z_2 of the peak, as long as it
    stands above the baseline's error; below, where it says nothing, that error is a factor
    exp(z_2). So no signal turns negative, what the table leaves out stays out, and the step is the
    same from the truth to the table and back.

    Parameters
    ----------
    d : Distribution
    error : GpcError
    rows, drifts : ndarray of shape (m, n)
        Standard normal errors along the nodes.

    Returns
    -------
    ndarray of shape (m, n)
        Rows sum to 1.
    """
    signal = np.broadcast_to(d.density / d.density.max(), np.shape(rows))
    if error.baseline > 0:
        y = np.maximum(signal / error.baseline, 1e-300)
        # a scale on which the step is the same everywhere: even above 1, logarithmic below
        u = np.where(y > 1.0, y, 1.0 + np.log(np.minimum(y, 1.0))) + drifts
        moved = error.baseline * np.where(u > 1.0, u, np.exp(np.minimum(u, 1.0) - 1.0))
        signal = np.where(signal > 0, moved, 0.0)
    w = signal * np.exp(error.relative * rows) * np.diff(np.log10(d.edges))
    return w / w.sum(axis=1, keepdims=True)


def perturbed(d: Distribution, error: GpcError, seed: int = 0) -> Distribution:
    """One curve as the GPC might have shown it (what the members of a band are made of).

    Parameters
    ----------
    d : Distribution
    error : GpcError
    seed : int
    """
    rng = np.random.default_rng(np.random.SeedSequence([seed, 0x68]))
    row, drift = smooth_fields(d, ROW_LENGTH), smooth_fields(d, BASELINE_LENGTH)
    rows = rng.standard_normal(row.shape[1]) @ row.T
    drifts = rng.standard_normal(drift.shape[1]) @ drift.T
    w = curves_off_by(d, error, rows[None, :], drifts[None, :])[0]
    factor = float(np.exp(error.spread_of(d) * rng.standard_normal()))
    return replace(d, mass=w).scaled(factor)
