"""The Rouse part: stress inside the tube segments, and chains too short to entangle.

Linear in the weight distribution, so it is one fixed matrix per list of frequencies.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from scipy.special import zeta

from mwdlink.chains.melt import Melt
from mwdlink.relaxation.lattice import POINTS, spread

# modes up to here one by one; a longer run of modes is an integral over p, by Gauss's rule in ln p
SINGLE_MODES = 12
# lattice on which the modes of many chains are gathered, per decade of tau
LATTICE_PER_DECADE = 20
UNKNOWN_REPEAT_UNIT = 100.0
TABLED = 64


def rouse_modes(
    molar_mass: float, melt: Melt, omega_max: float | None
) -> tuple[np.ndarray, np.ndarray]:
    """Strengths and times of the Rouse modes of a melt of one molar mass.

    Per chain tau_R = tau_e Z^2; mode p adds (G_e/Z)[s_p (1/5) exp(-p^2 t/tau_R) + (1 - s_p)
    exp(-2 p^2 t/tau_R)], s_p = clip(Z - p, 0, 1), G_e/Z = G_N M_e/M, p from 1 to the number of
    repeat units. Long runs of modes are gathered into fewer, and those with tau_R/(2 p^2) <
    0.01/omega_max, all but viscous up to omega_max, into one that keeps their sums of g tau and
    g tau^2. The viscosity is kept exactly.

    Parameters
    ----------
    molar_mass : float
        [g/mol]
    melt : Melt
    omega_max : float or None
        Highest frequency of interest [rad/s]; None keeps all modes.

    Returns
    -------
    strength, tau : ndarray of shape (k,)
        [Pa], [s]

    References
    ----------
    .. [1] A. E. Likhtman, T. C. B. McLeish, Macromolecules 35 (2002) 6332, last two sums of the
      relaxation modulus (recalled).
    """
    strength, tau = rouse_mode_table(np.array([molar_mass], dtype=float), melt, omega_max)
    held = strength[0] > 0
    return strength[0][held], tau[0][held]


def rouse_mode_table(
    molar_mass: np.ndarray, melt: Melt, omega_max: float | None
) -> tuple[np.ndarray, np.ndarray]:
    """Rouse modes of many chains at once; see `rouse_modes`.

    Returns
    -------
    strength, tau : ndarray of shape (n_M, k)
        [Pa] (0 where a chain does not use the place), [s].
    """
    z, tau_r, front, last = _chain(molar_mass, melt)
    seen = last if omega_max is None else np.floor(np.sqrt(50.0 * tau_r * omega_max))
    strength, tau = [], []
    viscous, second = np.zeros_like(z), np.zeros_like(z)
    for first, end, share, fold in _runs(z, last):
        if np.any(end >= first):
            p, count = _quadrature(first, np.minimum(end, seen))
            strength.append((front * share)[:, None] * count)
            tau.append(tau_r[:, None] / (fold * p * p))
            fast = np.maximum(first, seen + 1)
            viscous += share * _power_sum(fast, end, 1) / fold
            second += share * _power_sum(fast, end, 2) / fold**2
    held = viscous > 0
    if np.any(held):
        one = np.where(held, tau_r * second / np.where(held, viscous, 1.0), tau_r)
        strength.append((front * tau_r * viscous / one)[:, None])
        tau.append(one[:, None])
    return np.concatenate(strength, axis=1), np.concatenate(tau, axis=1)


def rouse_moduli(omega: np.ndarray, molar_mass: np.ndarray, melt: Melt) -> np.ndarray:
    """Complex modulus of the Rouse part, a column a molar mass.

    Parameters
    ----------
    omega : ndarray of shape (n_w,)
        [rad/s], > 0.
    molar_mass : ndarray of shape (n_M,)
        [g/mol]

    Returns
    -------
    ndarray of shape (n_w, n_M), complex
        [Pa] for a melt of that molar mass alone; multiply by weight fractions.
    """
    w = np.asarray(omega, dtype=float)
    m = np.atleast_1d(np.asarray(molar_mass, dtype=float))
    tau, strength = rouse_on_lattice(m, None, melt, float(w.max()))
    x = np.outer(w, tau)
    d = 1.0 / (1.0 + x * x)
    return (x * x * d) @ strength + 1j * ((x * d) @ strength)


def rouse_on_lattice(
    molar_mass: np.ndarray, mass: np.ndarray | None, melt: Melt, omega_max: float | None
) -> tuple[np.ndarray, np.ndarray]:
    """Modes of many chains gathered on one even list of ln tau.

    The strengths reproduce moduli to about 1e-8 of the part; they may be of either sign.

    Parameters
    ----------
    molar_mass : ndarray of shape (n_M,)
        [g/mol]
    mass : ndarray of shape (n_M,) or None
        Weight fractions [-]; None keeps the chains apart.
    melt : Melt
    omega_max : float or None
        [rad/s]; see `rouse_modes`.

    Returns
    -------
    tau : ndarray of shape (n_k,)
        [s]
    strength : ndarray of shape (n_k,) or (n_k, n_M)
        [Pa]
    """
    strength, tau = rouse_mode_table(molar_mass, melt, omega_max)
    if mass is not None:
        strength = strength * mass[:, None]
    held = np.flatnonzero(strength > 0)
    amount = strength.ravel()[held]
    position = np.log10(tau.ravel()[held]) * LATTICE_PER_DECADE
    start = np.floor(position.min()) - POINTS / 2
    size = int(np.ceil(position.max()) - start) + POINTS // 2
    grid = 10.0 ** ((start + np.arange(size)) / LATTICE_PER_DECADE)
    if mass is not None:
        return grid, spread(position - start, amount, size, POINTS)
    # one long lattice for all chains, each its own stretch
    chain = held // strength.shape[1]
    flat = spread(position - start + chain * size, amount, size * molar_mass.size, POINTS)
    return grid, flat.reshape(molar_mass.size, size).T


def rouse_relaxation(
    t: np.ndarray, molar_mass: np.ndarray, melt: Melt, omega_max: float | None = None
) -> np.ndarray:
    """Relaxation modulus of the Rouse part [Pa], shape (n_t, n_M); see `rouse_moduli`.

    Unless `omega_max` is given, modes faster than a hundredth of the shortest time are left out.
    """
    t = np.asarray(t, dtype=float)
    m = np.atleast_1d(np.asarray(molar_mass, dtype=float))
    top = 1.0 / float(t[t > 0].min()) if omega_max is None and np.any(t > 0) else omega_max
    tau, strength = rouse_on_lattice(m, None, melt, top)
    return np.exp(-np.outer(t, 1.0 / tau)) @ strength


def rouse_viscosity(molar_mass: np.ndarray, melt: Melt) -> np.ndarray:
    """Zero-shear viscosity of the Rouse part [Pa s] of each molar mass, shape (n_M,).

    Exact: the sums over p of p^-2 are differences of tails of one sum.
    """
    return _moment(molar_mass, melt, 1)


def rouse_second_moment(molar_mass: np.ndarray, melt: Melt) -> np.ndarray:
    """Sum of g tau^2 of the Rouse part [Pa s^2] of each molar mass, shape (n_M,), exact."""
    return _moment(molar_mass, melt, 2)


def tube_disengagement_time(z: np.ndarray, equilibration_time: float) -> np.ndarray:
    """tau_d = 3 tau_e Z^3 (1 - 3.38/sqrt Z + 4.17/Z - 1.55/Z^1.5) [s], for Z >= 3.

    References
    ----------
    .. [1] A. E. Likhtman, T. C. B. McLeish, Macromolecules 35 (2002) 6332 (recalled).
    """
    z = np.asarray(z, dtype=float)
    return 3 * equilibration_time * z**3 * (1 - 3.38 / np.sqrt(z) + 4.17 / z - 1.55 / z**1.5)


def _chain(
    molar_mass: np.ndarray, melt: Melt
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Of each chain: Z, tau_R [s], G_e/Z [Pa] and its number of repeat units."""
    m = np.atleast_1d(np.asarray(molar_mass, dtype=float))
    z = np.asarray(melt.Z(m), dtype=float)
    last = np.maximum(np.floor(m / (melt.repeat_unit or UNKNOWN_REPEAT_UNIT)), 1.0)
    front = melt.plateau_modulus * melt.entanglement_molar_mass / m
    return z, melt.equilibration_time * z * z, front, last


def _runs(z: np.ndarray, last: np.ndarray) -> list[tuple[np.ndarray, np.ndarray, np.ndarray, int]]:
    """The modes as runs (first p, last p, share, times p^2 per 1/tau_R); last < first is empty.

    With k = floor(Z), s_p is 1 up to k - 1, Z - k at k, and 0 beyond.
    """
    k = np.floor(z)
    one, at = np.ones_like(z), np.where(k >= 1, np.minimum(k, last + 1), 1.0)
    single = np.where((k >= 1) & (k <= last), k, at - 1)  # empty when there is no mode k
    return [
        (one, np.minimum(k - 1, last), one / 5, 1),
        (at, single, (z - k) / 5, 1),
        (at, single, 1 - (z - k), 2),
        (np.maximum(k + 1, 1), last, one, 2),
    ]


def _power_sum(first: np.ndarray, last: np.ndarray, power: int) -> np.ndarray:
    """Sum of p^-2 (power 1) or p^-4 (power 2) over p = first ... last; 0 when last < first."""
    value = _tail(first, power) - _tail(np.maximum(last, first - 1) + 1, power)
    return np.where(last >= first, value, 0.0)


def _tail(first: np.ndarray, power: int) -> np.ndarray:
    """Sum of p^-2 or p^-4 over all p from `first` on, whole numbers >= 1.

    A table for small ones, the series of Euler and Maclaurin beyond (1e-13 there).
    """
    x = np.maximum(first, TABLED)
    if power == 1:
        series = 1 / x + 1 / (2 * x**2) + 1 / (6 * x**3) - 1 / (30 * x**5)
    else:
        series = 1 / (3 * x**3) + 1 / (2 * x**4) + 1 / (3 * x**5) - 1 / (6 * x**7)
    return np.where(
        first < TABLED, _tail_table(power)[np.minimum(first, TABLED).astype(np.intp)], series
    )


@lru_cache(maxsize=2)
def _tail_table(power: int) -> np.ndarray:
    """Tails from p = 0 (unused) to TABLED."""
    return np.concatenate([[np.inf], zeta(2.0 * power, np.arange(1.0, TABLED + 1))])


def _moment(molar_mass: np.ndarray, melt: Melt, power: int) -> np.ndarray:
    z, tau_r, front, last = _chain(molar_mass, melt)
    total = np.zeros_like(z)
    for first, end, share, fold in _runs(z, last):
        total += share * _power_sum(first, end, power) / fold**power
    return front * tau_r**power * total


def _quadrature(first: np.ndarray, last: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Mode numbers and how many modes each stands for, over runs first ... last, shape (n, k)."""
    single = np.arange(1.0, SINGLE_MODES + 1)
    single = single[(single >= first.min()) & (single <= last.max())]
    count = ((single >= first[:, None]) & (single <= last[:, None])).astype(float)
    p = np.broadcast_to(single, count.shape)
    begin = np.maximum(first, SINGLE_MODES + 1.0)
    long = last >= begin
    if not np.any(long):
        return p, count
    # ends of the integral such that int p^-2 dp is the sum of p^-2, near begin - 1/2 and last + 1/2
    low = 1.0 / _tail(begin, 1)
    high = 1.0 / _tail(np.maximum(last, begin) + 1.0, 1)
    half = 0.5 * np.log(high / low)
    x, weight = _gauss(int(6 + np.ceil(8 * half[long].max())))
    run = low[:, None] * np.exp(half[:, None] * (1.0 + x))
    run_count = np.where(long[:, None], run * weight * half[:, None], 0.0)
    return np.concatenate([p, run], axis=1), np.concatenate([count, run_count], axis=1)


@lru_cache(maxsize=64)
def _gauss(points: int) -> tuple[np.ndarray, np.ndarray]:
    return np.polynomial.legendre.leggauss(points)
