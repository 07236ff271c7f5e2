"""Exact pair form for mixing exponent 2: G* = w' P(omega) w.

With F^(1/2) written as a sum of exponentials on one list of times, S^2 is a sum over pairs with
rates 1/tau_i + 1/tau_j, whose moduli are exact. It needs no transform of G(t) and is bilinear in
two melts, which is what blends want.
"""

from __future__ import annotations

import numpy as np


def pair_moduli(
    omega: np.ndarray, tau: np.ndarray, first: np.ndarray, second: np.ndarray | None = None
) -> np.ndarray:
    """sum_ij a_i b_j i omega T_ij/(1 + i omega T_ij), 1/T_ij = 1/tau_i + 1/tau_j.

    Parameters
    ----------
    omega : ndarray of shape (n_w,)
        [rad/s]
    tau : ndarray of shape (n_k,)
        Times of the exponentials of S(t) = sum a_i exp(-t/tau_i) [s].
    first, second : ndarray of shape (n_k,)
        Strengths a and b; b = a unless given.

    Returns
    -------
    ndarray of shape (n_w,), complex
        G*/G_N.
    """
    b = first if second is None else second
    i, j = np.triu_indices(tau.size)
    product = first[i] * b[j] + np.where(i == j, 0.0, first[j] * b[i])
    rate = 1.0 / tau[i] + 1.0 / tau[j]
    out = np.empty(omega.size, dtype=complex)
    for k, w in enumerate(omega):
        x = w / rate
        d = 1.0 / (1.0 + x * x)
        out[k] = (x * x * d) @ product + 1j * ((x * d) @ product)
    return out


def pair_terminal(tau: np.ndarray, strength: np.ndarray) -> tuple[float, float]:
    """sum a_i a_j T_ij and sum a_i a_j T_ij^2 [s], [s^2]: eta0/G_N and eta0^2 Je0/G_N."""
    t = 1.0 / (1.0 / tau[:, None] + 1.0 / tau)
    return float(strength @ t @ strength), float(strength @ t**2 @ strength)
