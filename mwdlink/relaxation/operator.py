"""From G(t) to G'(omega) and G''(omega) by one fixed matrix per list of frequencies.

G on a grid of times is fitted with exponentials on a grid of relaxation times (least squares with
a small ridge, through QR of the augmented matrix: normal equations would square its condition),
and each exponential's moduli are exact. Both steps are linear, so their product is one matrix.
A piecewise-linear quadrature of G(t) is not good enough: its kinks leave errors of per cents in G''
at high frequency.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np
from scipy.linalg import qr, solve_triangular

MODES_PER_DECADE = 8
TIMES_PER_DECADE = 20
MARGIN_DECADES = 4.0
RIDGE = 1e-6
# inside a fit a smaller matrix does: 2e-4 of the moduli at worst, against noise of 1e-2
LEAN_MARGIN = 3.5
LEAN_TIMES = 10
# where the longest time of the melt is known, no mode may stand beyond it, and more modes pay
MELT_MODES_PER_DECADE = 10
MELT_RIDGE = 2e-6
BEYOND_LONGEST = 2.0
TAIL = 40.0


@dataclass(frozen=True, eq=False)
class TimeOperator:
    """The matrix of one list of frequencies.

    Attributes
    ----------
    omega : ndarray of shape (n_w,)
        [rad/s]
    times : ndarray of shape (n_t,)
        Where G(t) is wanted [s].
    tau : ndarray of shape (n_k,)
        Relaxation times of the exponentials [s].
    fit : ndarray of shape (n_k, n_t)
        G(times) -> strengths (of either sign) of the exponentials.
    """

    omega: np.ndarray
    times: np.ndarray
    tau: np.ndarray
    fit: np.ndarray

    @cached_property
    def matrix(self) -> np.ndarray:
        """G(times) -> G' stacked over G'', shape (2 n_w, n_t)."""
        storage, loss = debye(self.omega, self.tau)
        out = np.vstack([storage @ self.fit, loss @ self.fit])
        out.setflags(write=False)
        return out

    def moduli(self, relaxation_modulus: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """G' and G'' [Pa] from G at `times` [Pa]."""
        both = self.matrix @ relaxation_modulus
        n = self.omega.size
        return both[:n], both[n:]


def time_operator(
    omega: np.ndarray, margin: float = MARGIN_DECADES, times_per_decade: float = TIMES_PER_DECADE
) -> TimeOperator:
    """The operator of a list of frequencies [rad/s], > 0; kept for the next call.

    It knows nothing of the melt. Measured where |G*| > 1e-4 of G(0), over six decades: |G*| to
    6e-7 for a single exponential, the hardest case (G' and G'' each to 3e-3, where they are a
    small part of |G*|), to 1e-10 from dispersity 1.05 upwards as long as the melt's times lie
    within its reach. `melt_fit` does better where the longest time is known.

    Parameters
    ----------
    omega : ndarray of shape (n_w,)
    margin : float
        How many decades beyond both ends the times reach at least.
    times_per_decade : float
        20, or fewer inside a fit.

    Raises
    ------
    ValueError
        If a frequency is not a positive number.
    """
    w = np.ascontiguousarray(omega, dtype=float)
    if w.ndim != 1 or w.size == 0 or not np.all(np.isfinite(w)) or np.any(w <= 0):
        raise ValueError("frequencies must be a list of positive numbers")
    return _build(w.tobytes(), float(margin), float(times_per_decade))


def log_grid(low: float, high: float, per_decade: float) -> np.ndarray:
    """Geometric grid from low to high with at least `per_decade` points per decade."""
    count = max(int(np.ceil(np.log10(high / low) * per_decade)), 1) + 1
    return np.geomspace(low, high, count)


def debye(omega: np.ndarray, tau: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Storage and loss of unit exponential modes, each of shape (n_w, n_k)."""
    x = np.outer(omega, tau)
    d = 1.0 / (1.0 + x * x)
    return x * x * d, x * d


def exponential_fit(times: np.ndarray, tau: np.ndarray, ridge: float = RIDGE) -> np.ndarray:
    """Least-squares matrix, values at `times` -> strengths at `tau`, shape (n_k, n_t)."""
    e = np.exp(-np.outer(times, 1.0 / tau))
    stacked = np.vstack([e, ridge * np.eye(tau.size)])
    q, r = qr(stacked, mode="economic")
    return solve_triangular(r, q[: times.size].T)


@lru_cache(maxsize=32)
def _build(raw: bytes, margin: float, times_per_decade: float) -> TimeOperator:
    omega = np.frombuffer(raw, dtype=float)
    low = 10.0**-margin / omega.max()
    decades = int(np.ceil(np.log10(omega.max() / omega.min()) + 2 * margin - 1e-9))
    times, tau, fit = _unit_fit(decades, times_per_decade)
    times, tau = low * times, low * tau
    times.setflags(write=False)
    tau.setflags(write=False)
    return TimeOperator(omega, times, tau, fit)


@lru_cache(maxsize=32)
def _unit_fit(decades: int, times_per_decade: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Times and modes from 1 on, and the fit: it depends on ratios of times only."""
    times = log_grid(1.0, 10.0**decades, times_per_decade)
    tau = log_grid(1.0, 10.0**decades, MODES_PER_DECADE)
    fit = exponential_fit(times, tau)
    fit.setflags(write=False)
    return times, tau, fit


def melt_fit(
    shortest: float, longest: float, relaxed: bool = True
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Times, relaxation times and fit for a melt that has relaxed after its longest time.

    Without modes beyond the longest time the far terminal zone keeps its relative accuracy.
    Measured against the closed double sum where |G*| > 1e-4 G_N, over six decades, worst of G',
    G'' and |G*|: 1e-5 for a single exponential, 3e-7 at dispersity 1.05, 2e-9 from 1.5 upwards.

    Parameters
    ----------
    shortest : float
        Where the times begin at the latest [s].
    longest : float
        Longest relaxation time of the melt [s].
    relaxed : bool
        False if the melt has longer times still; then modes reach as far as the times do.

    Returns
    -------
    times : ndarray of shape (n_t,)
        [s], ascending.
    tau : ndarray of shape (n_k,)
        [s], ascending.
    fit : ndarray of shape (n_k, n_t)
        G(times) -> strengths (of either sign) of the exponentials.
    """
    decades = max(int(np.ceil(np.log10(longest / shortest))), 1)
    times, tau, fit = _unit_melt_fit(decades, relaxed)
    return longest * times, longest * tau, fit


@lru_cache(maxsize=32)
def _unit_melt_fit(decades: int, relaxed: bool) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """For a longest time of 1, from 10^-decades on."""
    back = np.arange(int(np.ceil((decades + np.log10(TAIL)) * TIMES_PER_DECADE)), -1, -1)
    times = TAIL * 10.0 ** (-back / TIMES_PER_DECADE)
    top = BEYOND_LONGEST if relaxed else TAIL
    back = np.arange(int((decades + np.log10(top)) * MELT_MODES_PER_DECADE), -1, -1)
    tau = top * 10.0 ** (-back / MELT_MODES_PER_DECADE)
    fit = exponential_fit(times, tau, MELT_RIDGE)
    fit.setflags(write=False)
    return times, tau, fit
