"""Positive discrete spectrum of a predicted melt."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.optimize import nnls

from mwdlink.relaxation.operator import log_grid
from mwdlink.relaxation.rouse import rouse_modes
from mwdlink.relaxation.spectrum import Spectrum

if TYPE_CHECKING:
    from mwdlink.relaxation.melt_response import Relaxation

MODES_PER_DECADE = 6
TIMES_PER_DECADE = 20


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
    weight = 1.0 / np.maximum(values, 1e-20 * top)
    e = np.exp(-np.outer(times, 1.0 / tau)) * weight[:, None]
    scale = np.sqrt(np.sum(e * e, axis=0))
    try:
        x, _ = nnls(e / scale, values * weight)
    except RuntimeError:  # the active set went round in circles: a coarser set of rows helps
        x, _ = nnls((e / scale)[::2], (values * weight)[::2], maxiter=60 * tau.size)
    return x / scale


def spectrum_of(relaxation: Relaxation, tau_low: float | None = None) -> Spectrum:
    """Positive modes of the network part plus the Rouse part's own modes, on one list of times."""
    d = relaxation.distribution
    carried = relaxation.times[np.cumsum(d.mass) > 1e-4]
    low = float(carried.min()) * 1e-2 if tau_low is None else float(tau_low)
    high = float(relaxation.times.max()) * 100.0
    low = min(low, high / 1e4)
    t = log_grid(low * 1e-2, high, TIMES_PER_DECADE)
    g = relaxation.network_modulus(t)
    held = g > 1e-20 * g[0]
    # beyond about a twentieth of the time where G has fallen to 1e-20 no mode can be seen
    tau = log_grid(low, float(t[held][-1]) / 30.0, MODES_PER_DECADE)
    strength = positive_modes(t[held], g[held], tau)
    if relaxation.model.rouse:
        strength = strength + _rouse_on_grid(relaxation, tau)
    keep = strength > 0
    return Spectrum(tau[keep], strength[keep])


def _rouse_on_grid(relaxation: Relaxation, tau: np.ndarray) -> np.ndarray:
    """Rouse modes moved to the grid, each shared by two neighbours so that g and g tau are kept."""
    out = np.zeros_like(tau)
    d = relaxation.distribution
    for m, w in zip(d.molar_mass, d.mass, strict=True):
        if w < 1e-12:
            continue
        g, times = rouse_modes(float(m), relaxation.melt, 1.0 / tau[0])
        inside = (times >= tau[0]) & (times <= tau[-1])
        g, times = g[inside], times[inside]
        i = np.clip(np.searchsorted(tau, times) - 1, 0, tau.size - 2)
        upper = (times - tau[i]) / (tau[i + 1] - tau[i])
        np.add.at(out, i, w * g * (1 - upper))
        np.add.at(out, i + 1, w * g * upper)
    return out
