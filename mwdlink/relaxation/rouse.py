"""The Rouse part: stress inside the tube segments, and chains too short to entangle.

Linear in the weight distribution, so it is one fixed matrix per list of frequencies.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from mwdlink.chains.melt import Melt

# modes up to here one by one, then bundles of modes this much wider in p (error of a bundle about
# width^2/12 of itself: 1e-4 of a part that is itself a small part of the moduli)
SINGLE_MODES = 48
BUNDLE = 1.05


def rouse_modes(molar_mass: float, melt: Melt, omega_max: float | None) -> tuple[np.ndarray, np.ndarray]:
    """Strengths and times of the Rouse modes of a melt of one molar mass.

    Per chain tau_R = tau_e Z^2; mode p adds (G_e/Z)[s_p (1/5) exp(-p^2 t/tau_R) + (1 - s_p)
    exp(-2 p^2 t/tau_R)], s_p = clip(Z - p, 0, 1), G_e/Z = G_N M_e/M, p from 1 to the number of
    repeat units; cut where tau_R/(2 p^2) < 0.01/omega_max.

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
    z = float(melt.Z(molar_mass))
    tau_r = melt.equilibration_time * z * z
    unit = melt.repeat_unit or 100.0
    last = max(int(molar_mass // unit), 1)
    if omega_max is not None:
        last = min(last, max(int(np.sqrt(50.0 * tau_r * omega_max)), 1))
    p, width = _mode_list(last)
    share = np.clip(z - p, 0.0, 1.0)
    front = melt.plateau_modulus * melt.entanglement_molar_mass / molar_mass
    strength = np.concatenate([front * width * share / 5.0, front * width * (1.0 - share)])
    tau = np.concatenate([tau_r / p**2, tau_r / (2.0 * p**2)])
    held = strength > 0
    return strength[held], tau[held]


@lru_cache(maxsize=512)
def _mode_list(last: int) -> tuple[np.ndarray, np.ndarray]:
    """Mode numbers and how many modes each stands for."""
    if last <= SINGLE_MODES:
        p = np.arange(1.0, last + 1)
        return p, np.ones_like(p)
    edges = [SINGLE_MODES + 1]
    while edges[-1] <= last:
        edges.append(max(int(edges[-1] * BUNDLE), edges[-1] + 1))
    edges[-1] = last + 1
    if len(edges) > 1 and edges[-1] <= edges[-2]:
        edges.pop(-2)
    e = np.asarray(edges, dtype=float)
    single = np.arange(1.0, SINGLE_MODES + 1)
    middle = np.sqrt(e[:-1] * (e[1:] - 1))
    return np.concatenate([single, middle]), np.concatenate(
        [np.ones_like(single), np.diff(e)]
    )


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
    out = np.empty((w.size, np.size(molar_mass)), dtype=complex)
    top = float(w.max())
    for j, m in enumerate(np.atleast_1d(molar_mass)):
        g, tau = rouse_modes(float(m), melt, top)
        x = np.outer(w, tau)
        d = 1.0 / (1.0 + x * x)
        out[:, j] = (x * x * d) @ g + 1j * ((x * d) @ g)
    return out


def rouse_relaxation(
    t: np.ndarray, molar_mass: np.ndarray, melt: Melt, omega_max: float | None = None
) -> np.ndarray:
    """Relaxation modulus of the Rouse part [Pa], shape (n_t, n_M); see `rouse_moduli`."""
    t = np.asarray(t, dtype=float)
    out = np.empty((t.size, np.size(molar_mass)))
    top = 1.0 / float(t[t > 0].min()) if omega_max is None and np.any(t > 0) else omega_max
    for j, m in enumerate(np.atleast_1d(molar_mass)):
        g, tau = rouse_modes(float(m), melt, top)
        out[:, j] = np.exp(-np.outer(t, 1.0 / tau)) @ g
    return out


def rouse_viscosity(molar_mass: np.ndarray, melt: Melt) -> np.ndarray:
    """Zero-shear viscosity of the Rouse part [Pa s] of each molar mass, shape (n_M,)."""
    return np.array([g @ tau for g, tau in _all_modes(molar_mass, melt)])


def rouse_second_moment(molar_mass: np.ndarray, melt: Melt) -> np.ndarray:
    """Sum of g tau^2 of the Rouse part [Pa s^2] of each molar mass, shape (n_M,)."""
    return np.array([g @ tau**2 for g, tau in _all_modes(molar_mass, melt)])


def _all_modes(molar_mass: np.ndarray, melt: Melt) -> list[tuple[np.ndarray, np.ndarray]]:
    return [rouse_modes(float(m), melt, None) for m in np.atleast_1d(molar_mass)]


def tube_disengagement_time(z: np.ndarray, equilibration_time: float) -> np.ndarray:
    """tau_d = 3 tau_e Z^3 (1 - 3.38/sqrt Z + 4.17/Z - 1.55/Z^1.5) [s], for Z >= 3.

    References
    ----------
    .. [1] A. E. Likhtman, T. C. B. McLeish, Macromolecules 35 (2002) 6332 (recalled).
    """
    z = np.asarray(z, dtype=float)
    return 3 * equilibration_time * z**3 * (1 - 3.38 / np.sqrt(z) + 4.17 / z - 1.55 / z**1.5)
