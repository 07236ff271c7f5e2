"""Does a melt superpose: what the common curve leaves over, and a check without any shift."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.stats import chi2 as chi2_law

from mwdlink.measurement.shifts import ShiftFit

# One loading measured at several temperatures repeats its moduli to about this, whatever the
# scatter within a sweep: gap, sample and set point change with temperature (common practice).
ALLOWANCE = 0.015
CONFIDENCE = 0.9995


@dataclass(frozen=True)
class Band:
    """One decade of reduced frequency.

    Attributes
    ----------
    low, high : float
        [rad/s]
    residual : float
        Root mean square relative distance from the common curve [-].
    limit : float
        What noise and the allowance for one loading would reach [-].
    points : int
        Moduli counted, where two temperatures or more overlap.
    """

    low: float
    high: float
    residual: float
    limit: float
    points: int

    def to_dict(self) -> dict[str, Any]:
        return {
            "omega_low_rad_per_s": self.low,
            "omega_high_rad_per_s": self.high,
            "residual": self.residual,
            "limit": self.limit,
            "points": self.points,
        }


@dataclass(frozen=True)
class Superposition:
    """The verdict on a master curve.

    Attributes
    ----------
    residual : float
        Root mean square relative distance from the common curve where temperatures overlap [-].
    passed : bool
        Every band is within what noise and one loading's repeatability explain.
    low_frequency_residual : float
        The same over the lowest overlapping decade [-].
    low_frequency_passed : bool
    noise : float
        Typical relative noise of one modulus [-].
    bands : tuple of Band
    phase_angle_spread_deg : float or None
        Root mean square difference of the phase angle between neighbouring temperatures at equal
        |G*| [degrees]: needs no shift in frequency. None without overlap in |G*|.
    phase_angle_expected_deg : float or None
        What the noise alone would give [degrees].
    """

    residual: float
    passed: bool
    low_frequency_residual: float
    low_frequency_passed: bool
    noise: float
    bands: tuple[Band, ...]
    phase_angle_spread_deg: float | None
    phase_angle_expected_deg: float | None

    def to_dict(self) -> dict[str, Any]:
        return {
            "residual": self.residual,
            "passed": self.passed,
            "low_frequency_residual": self.low_frequency_residual,
            "low_frequency_passed": self.low_frequency_passed,
            "noise": self.noise,
            "bands": [b.to_dict() for b in self.bands],
            "phase_angle_spread_deg": self.phase_angle_spread_deg,
            "phase_angle_expected_deg": self.phase_angle_expected_deg,
        }

    def text(self) -> str:
        """The verdict in words."""
        if self.passed:
            return (
                f"The sweeps superpose: where they overlap they lie on one curve to within "
                f"{100 * self.residual:.1f} %, as noise and the repeatability of one loading allow."
            )
        text = (
            "The sweeps do not superpose: where they overlap they depart from one curve by "
            f"{100 * self.residual:.1f} %"
        )
        if self.bands:
            worst = max(self.bands, key=lambda b: b.residual / b.limit)
            text += (
                f", most between {worst.low:.3g} and {worst.high:.3g} rad/s "
                f"({100 * worst.residual:.1f} %, {100 * worst.limit:.1f} % would be in order)"
            )
        text += "."
        if not self.low_frequency_passed:
            text += (
                " The low end fails, which long-chain branching does, and a second phase, filler, "
                "gel, or a sample that changed during the test as well."
            )
        return text


def judge(
    reduced: list[np.ndarray],
    fit: ShiftFit,
    sigma: list[np.ndarray],
    modulus: list[np.ndarray],
    delta: list[np.ndarray],
) -> tuple[Superposition, list[np.ndarray]]:
    """Verdict from the residuals of the joint fit.

    Parameters
    ----------
    reduced : list of ndarray of shape (n,)
        a_T omega of each temperature [rad/s].
    fit : ShiftFit
    sigma : list of ndarray of shape (2, n)
        Relative standard errors of both moduli [-].
    modulus : list of ndarray of shape (n,)
        b_T |G*| [Pa].
    delta : list of ndarray of shape (n,)
        Phase angle [rad].

    Returns
    -------
    Superposition
    overlap : list of bool ndarray of shape (n,)
        Readings another temperature's range covers.
    """
    overlap = []
    for k, w in enumerate(reduced):
        covered = np.zeros(w.size, dtype=bool)
        for j, other in enumerate(reduced):
            if j != k:
                covered |= (w >= other[0]) & (w <= other[-1])
        overlap.append(covered)
    w = np.concatenate([r[m] for r, m in zip(reduced, overlap, strict=True)])
    r = np.concatenate([e[:, m] for e, m in zip(fit.residual, overlap, strict=True)], axis=1)
    s = np.concatenate([e[:, m] for e, m in zip(sigma, overlap, strict=True)], axis=1)
    # residuals of a fit are smaller than the noise by the parameters it used up
    inflate = np.sqrt(fit.points / max(fit.points - fit.effective_parameters, 1.0))
    allowed = np.sqrt(s**2 + ALLOWANCE**2)
    bands = []
    if w.size:
        edges = np.arange(np.floor(np.log10(w.min())), np.ceil(np.log10(w.max())) + 1.0)
        for low, high in zip(edges[:-1], edges[1:], strict=True):
            inside = (np.log10(w) >= low) & (np.log10(w) < high + 1e-12)
            if inside.sum() >= 3:
                bands.append(_band(10**low, 10**high, r, allowed, inside, inflate))
    lowest = np.log10(w) < np.log10(w.min()) + 1.0 if w.size else np.zeros(0, dtype=bool)
    low_band = _band(0.0, 0.0, r, allowed, lowest, inflate) if lowest.any() else None
    spread, expected = phase_angle_spread(modulus, delta, sigma)
    residual = float(np.sqrt(np.mean(r**2)) * inflate) if r.size else 0.0
    low_passed = low_band is None or low_band.residual <= low_band.limit
    verdict = Superposition(
        residual,
        bool(low_passed and all(b.residual <= b.limit for b in bands)),
        0.0 if low_band is None else low_band.residual,
        bool(low_passed),
        float(np.median(np.concatenate([e.ravel() for e in sigma]))),
        tuple(bands),
        spread,
        expected,
    )
    return verdict, overlap


def _band(
    low: float,
    high: float,
    r: np.ndarray,
    allowed: np.ndarray,
    inside: np.ndarray,
    inflate: float,
) -> Band:
    count = 2 * int(inside.sum())
    size = float(np.sqrt(np.mean(r[:, inside] ** 2)) * inflate)
    mean = float(np.sqrt(np.mean(allowed[:, inside] ** 2)))
    limit = mean * float(np.sqrt(chi2_law.ppf(CONFIDENCE, count) / count))
    return Band(float(low), float(high), size, limit, count)


def phase_angle_spread(
    modulus: list[np.ndarray], delta: list[np.ndarray], sigma: list[np.ndarray]
) -> tuple[float | None, float | None]:
    """Difference of the phase angle between neighbouring temperatures at equal |G*| [degrees].

    References
    ----------
    .. [1] van Gurp & Palmen, Rheol. Bull. 67 (1998) 5 (recalled): phase angle against |G*| shows a
       failure of superposition without any shift in frequency.
    """
    squares, expected = [], []
    for k in range(len(modulus) - 1):
        a, b = np.log(modulus[k]), np.log(modulus[k + 1])
        if np.any(np.diff(a) <= 0) or np.any(np.diff(b) <= 0):
            # a noisy plateau: the angle is no function of |G*| there
            order_a, order_b = np.argsort(a), np.argsort(b)
        else:
            order_a, order_b = np.arange(a.size), np.arange(b.size)
        inside = (b >= a.min()) & (b <= a.max())
        if inside.sum() < 3:
            continue
        da, db = delta[k][order_a], delta[k + 1][order_b]
        difference = np.interp(b[order_b], a[order_a], da) - db
        difference = difference[inside[order_b]]
        squares.append(np.degrees(difference) ** 2)
        # tan delta has error sqrt(2) sigma, delta half of that times sin 2 delta; two sweeps
        size = np.sin(2 * db[inside[order_b]]) * sigma[k + 1][0][order_b][inside[order_b]]
        expected.append(np.degrees(size) ** 2)
    if not squares:
        return None, None
    return (
        float(np.sqrt(np.mean(np.concatenate(squares)))),
        float(np.sqrt(np.mean(np.concatenate(expected)))),
    )
