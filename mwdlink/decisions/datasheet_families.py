"""Families of distributions that a sheet's melt may have, many members at once.

Nobody knows the shape behind a sheet's averages; three families of different tails stand for what
it may be, and differ in what they say of everything that the sheet leaves open. A fourth, of narrow
fractions, is for sheets that claim one.
"""

from __future__ import annotations

import numpy as np
from scipy.special import gammaln

# unknowns of each family
FAMILIES = {
    "log-normal": ("Mw", "breadth"),
    "generalised exponential": ("Mw", "rise", "cut"),
    "two parts": ("Mw", "breadth", "share", "ratio"),
    "narrow": ("Mw", "breadth"),
}
USUAL = ("log-normal", "generalised exponential", "two parts")
# narrow fractions are looked for only where the sheet speaks of them; ln of how rare they are then
NARROW_BELOW = 1.6
RARITY = {"narrow": 2.3}
# ln of the weight average, before anything is known
MASS_PRIOR = (float(np.log(1.3e5)), 1.0)
NODES = np.linspace(2.0, 7.6, 92)
MASS = 10.0**NODES


def distribution_rows(z: np.ndarray, family: str) -> np.ndarray:
    """Weights on NODES of members of a family, shape (k, n).

    Parameters
    ----------
    z : ndarray of shape (k, number of the family's unknowns)
        In standard deviations of their priors.
    """
    x = NODES * np.log(10.0)
    Mw = MASS_PRIOR[0] + MASS_PRIOR[1] * z[:, 0]
    if family == "log-normal":
        return _lognormal(x, Mw, np.exp(np.log(3.0) + 0.8 * z[:, 1]))
    if family == "narrow":
        return _lognormal(x, Mw, np.exp(np.log(0.1) + 0.8 * z[:, 1]))
    if family == "two parts":
        spread = np.exp(np.log(2.0) + 0.7 * z[:, 1])
        share = 1.0 / (1.0 + np.exp(1.5 - 1.5 * z[:, 2]))
        ratio = np.exp(np.log(6.0) + 0.6 * z[:, 3])
        first = Mw - np.log((1.0 - share) + share * ratio)
        a = _lognormal(x, first, spread)
        b = _lognormal(x, first + np.log(ratio), np.ones_like(first))
        return (1.0 - share)[:, None] * a + share[:, None] * b
    rise = np.exp(0.6 * z[:, 1])
    cut = np.exp(np.log(0.7) + 0.35 * z[:, 2])
    scale = Mw - (gammaln((rise + 2) / cut) - gammaln((rise + 1) / cut))
    r = x - scale[:, None]
    log = (rise + 1)[:, None] * r - np.exp(np.minimum(cut[:, None] * r, 50.0))
    w = np.exp(log - log.max(axis=1, keepdims=True))
    return w / w.sum(axis=1, keepdims=True)


def _lognormal(x: np.ndarray, Mw: np.ndarray, excess: np.ndarray) -> np.ndarray:
    """Log-normals of weight average exp(Mw) and dispersity 1 + excess."""
    s2 = np.log1p(np.maximum(excess, 0.02))
    log = -0.5 * (x - Mw[:, None] + 0.5 * s2[:, None]) ** 2 / s2[:, None]
    w = np.exp(log)
    return w / np.maximum(w.sum(axis=1, keepdims=True), 1e-300)
