"""Error budget of an ensemble: how much of each interval comes from where."""

from __future__ import annotations

import numpy as np


def variance_shares(
    value: np.ndarray,
    kernel: np.ndarray,
    exponent: np.ndarray,
    ln_time: np.ndarray,
    smoothing: np.ndarray,
    plateau: np.ndarray,
) -> dict[str, float]:
    """Shares of the variance of a quantity over members, sum 1.

    The law of total variance, step by step: differences between kernels' means, then within a
    kernel what the exponent and the time law explain linearly, then differences between the
    smoothing parameters' means, and the rest is noise.

    Parameters
    ----------
    value : ndarray of shape (m,)
        The quantity; positive ones are taken as logarithms.
    kernel, smoothing, plateau : ndarray of int, shape (m,)
        Labels of each member.
    exponent, ln_time : ndarray of shape (m,)

    Returns
    -------
    dict
        Keys `noise`, `smoothing`, `kernel`, `exponent`, `time_law`, `card`; empty when the
        quantity does not vary.
    """
    x = np.asarray(value, dtype=float)
    good = np.isfinite(x)
    if good.sum() < 10:
        return {}
    x = x[good]
    if np.all(x > 0):
        x = np.log(x)
    parts = {}
    rest = x - x.mean()
    total = float(rest @ rest)
    if not total > 1e-20 * max(1.0, float(x @ x)):
        return {}

    def take(name: str, fitted: np.ndarray) -> None:
        nonlocal rest
        fitted = fitted - fitted.mean()
        before = float(rest @ rest)
        rest = rest - fitted
        parts[name] = max(before - float(rest @ rest), 0.0)

    take("kernel", _group_means(rest, kernel[good]))
    for name, cause in (("time_law", ln_time[good]), ("exponent", exponent[good])):
        fitted = np.zeros_like(rest)
        for k in np.unique(kernel[good]):
            held = kernel[good] == k
            c = cause[held] - cause[held].mean()
            if c @ c > 1e-20 and held.sum() > 3:
                fitted[held] = c * float(c @ rest[held]) / float(c @ c)
        take(name, fitted)
    take("card", _group_means(rest, plateau[good]))
    label = kernel[good] * 1000 + smoothing[good]
    take("smoothing", _shrunk_means(rest, label))
    parts["noise"] = float(rest @ rest)
    scale = sum(parts.values())
    return {k: v / scale for k, v in parts.items()}


def _group_means(x: np.ndarray, label: np.ndarray) -> np.ndarray:
    out = np.zeros_like(x)
    for k in np.unique(label):
        held = label == k
        out[held] = x[held].mean()
    return out


def _shrunk_means(x: np.ndarray, label: np.ndarray) -> np.ndarray:
    """Group means less what chance alone would give groups of this size."""
    out = np.zeros_like(x)
    groups = np.unique(label)
    within = 0.0
    for k in groups:
        held = label == k
        within += float(np.sum((x[held] - x[held].mean()) ** 2))
    within /= max(x.size - groups.size, 1)
    for k in groups:
        held = label == k
        mean = x[held].mean()
        chance = within / held.sum()
        keep = max(1.0 - chance / mean**2, 0.0) if mean != 0 else 0.0
        out[held] = mean * keep
    return out
