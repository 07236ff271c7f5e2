"""Readings denser than any spectrum can bend, averaged before a costly fit."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from mwdlink.measurement.continuous import Continuous
from mwdlink.measurement.modes import mode_moduli
from mwdlink.quantity import readonly

# No spectrum bends within a twentieth of a decade, and a fit's cost goes with the readings.
DENSEST = 20


def averaged(
    omega: np.ndarray,
    storage: np.ndarray,
    loss: np.ndarray,
    sigma_storage: np.ndarray,
    sigma_loss: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Geometric means over bins of a twentieth of a decade, where there are more readings.

    Weighted by the errors; relative errors fall as those of independent readings do.

    Parameters
    ----------
    omega, storage, loss : ndarray of shape (n,)
        [rad/s], [Pa], [Pa]; omega ascending.
    sigma_storage, sigma_loss : ndarray of shape (n,)
        [-]

    Returns
    -------
    tuple of five ndarray of shape (m,)
        The same columns, m <= n; as they came where the readings are not that dense.
    """
    bins = np.floor(np.log10(omega / omega[0]) * DENSEST + 1e-9).astype(int)
    start = np.flatnonzero(np.concatenate([[True], np.diff(bins) > 0]))
    if start.size > 0.8 * omega.size or start.size < 8:
        return omega, storage, loss, sigma_storage, sigma_loss

    def mean(y: np.ndarray, w: np.ndarray) -> np.ndarray:
        return np.exp(np.add.reduceat(w * np.log(y), start) / np.add.reduceat(w, start))

    up, out = sigma_storage**-2.0, sigma_loss**-2.0
    return (
        mean(omega, up + out),
        mean(storage, up),
        mean(loss, out),
        np.add.reduceat(up, start) ** -0.5,
        np.add.reduceat(out, start) ** -0.5,
    )


def at_all_readings(
    c: Continuous,
    omega: np.ndarray,
    storage: np.ndarray,
    loss: np.ndarray,
    sigma_storage: np.ndarray,
    sigma_loss: np.ndarray,
) -> Continuous:
    """The same spectrum with its curves and chi2 at the readings themselves."""
    up, out = (m @ c.H * c.step for m in mode_moduli(omega, c.tau))
    r = np.concatenate([np.log(up / storage) / sigma_storage, np.log(out / loss) / sigma_loss])
    return replace(c, storage=readonly(up), loss=readonly(out), chi2=float(r @ r))
