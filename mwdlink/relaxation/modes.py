"""Positive discrete spectrum of a predicted melt."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.optimize import nnls

from mwdlink.relaxation.operator import log_grid
from mwdlink.relaxation.rouse import rouse_mode_table
from mwdlink.relaxation.spectrum import Spectrum

if TYPE_CHECKING:
    from mwdlink.relaxation.melt_response import Relaxation

MODES_PER_DECADE = 6
# a narrow melt ends in one exponential: modes stand close together in the last decade
FINE_MODES_PER_DECADE = 24
ROUSE_MODES_PER_DECADE = 16
TIMES_PER_DECADE = 24
# where G has fallen to this share of G(0) the fit ends
LEAST_SEEN = 1e-26


def positive_modes(times: np.ndarray, values: np.ndarray, tau: np.ndarray) -> np.ndarray:
    """Non-negative strengths whose exponentials sum to `values` at `times`, shape of tau.

    Rows are weighted so that the long-time end, small but decisive for eta0 and Je0, counts too.

    Parameters
    ----------
    times : ndarray of shape (n_t,)
        [s]
    values : ndarray of shape (n_t,)
        G [Pa], > 0.
    tau : ndarray of shape (n_k,)
        [s]
    """
    top = float(values.max())
    weight = 1.0 / np.maximum(values, LEAST_SEEN * top)
    e = np.exp(-np.outer(times, 1.0 / tau)) * weight[:, None]
    scale = np.sqrt(np.sum(e * e, axis=0))
    try:
        x, _ = nnls(e / scale, values * weight)
    except RuntimeError:  # the active set went round in circles: a coarser set of rows helps
        x, _ = nnls((e / scale)[::2], (values * weight)[::2], maxiter=60 * tau.size)
    return x / scale


def spectrum_of(relaxation: Relaxation, tau_low: float | None = None) -> Spectrum:
    """Positive modes of the network part plus the Rouse part's own modes, on one list of times."""
    d, melt, model = relaxation.distribution, relaxation.melt, relaxation.model
    carried = relaxation.times[np.cumsum(d.mass) > 1e-4]
    low = float(carried.min()) * 1e-3
    if tau_low is not None:
        low = min(low, float(tau_low))
    if model.rouse:
        modes, times = rouse_mode_table(d.molar_mass, melt, 1.0 / low)
        modes, times = (modes * d.mass[:, None]).ravel(), times.ravel()
        slowest_rouse = float(times[modes > 1e-12 * modes.max()].max())
        low = min(low, 1e-3 * slowest_rouse)
    high = float(relaxation.times.max()) * 100.0
    low = min(low, high / 1e4)
    t = log_grid(low * 1e-2, high, TIMES_PER_DECADE)
    g = relaxation.network_modulus(t)
    held = g > max(LEAST_SEEN * g[0], 1e-250)
    if np.any(held):
        t, g = t[held], g[held]
        # the slowest mode that can be seen: the decay at the very end
        slowest = -(t[-1] - t[-2]) / np.log(g[-1] / g[-2])
        last = slowest * 10.0 ** (-np.arange(FINE_MODES_PER_DECADE, -1, -1) / FINE_MODES_PER_DECADE)
        tau = log_grid(low, max(last[0], 2.0 * low), MODES_PER_DECADE)
        tau = np.concatenate([tau[tau < 0.95 * last[0]], last])
        strength = positive_modes(t, g, tau)
    else:
        tau, strength = np.array([low]), np.zeros(1)
    if model.rouse:
        # where Rouse modes matter they want a list of their own, as in unentangled melts
        if slowest_rouse > tau[-1] or modes @ times > 1e-3 * (strength @ tau):
            own = log_grid(low, max(1.01 * slowest_rouse, 2.0 * low), ROUSE_MODES_PER_DECADE)
            both = np.union1d(tau, own)
            there = np.zeros(both.size)
            there[np.searchsorted(both, tau)] = strength
            tau, strength = both, there
        strength = strength + shared_by_neighbours(tau, times, modes)
    if tau_low is not None and tau[0] < tau_low < tau[-1]:
        kept = np.concatenate([[tau_low], tau[tau > 1.05 * tau_low]])
        tau, strength = kept, shared_by_neighbours(kept, tau, strength)
    keep = strength > 0
    return Spectrum(tau[keep], strength[keep])


def shared_by_neighbours(tau: np.ndarray, times: np.ndarray, modes: np.ndarray) -> np.ndarray:
    """Modes moved to a list of times, each shared by two neighbours so that g and g tau are kept.

    Parameters
    ----------
    tau : ndarray of shape (n_k,)
        [s], ascending.
    times, modes : ndarray of shape (n,)
        Times [s] and strengths [Pa]. Faster modes join the first with g tau kept, slower ones are
        left out.

    Returns
    -------
    ndarray of shape (n_k,)
        [Pa], >= 0.
    """
    inside = (times <= tau[-1]) & (modes > 0)
    times, modes = times[inside], modes[inside]
    modes = modes * np.minimum(times / tau[0], 1.0)
    times = np.maximum(times, tau[0])
    if tau.size < 2:
        return np.array([modes.sum()])
    i = np.clip(np.searchsorted(tau, times) - 1, 0, tau.size - 2)
    upper = (times - tau[i]) / (tau[i + 1] - tau[i])
    return np.bincount(i, modes * (1.0 - upper), tau.size) + np.bincount(
        i + 1, modes * upper, tau.size
    )
