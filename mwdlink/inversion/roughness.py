"""The prior on u = ln(mass per node): smooth third differences, weak everything else.

The null space of the third difference holds every quadratic, that is every log-normal: where the
data say nothing the answer falls back to the trade's default shape (after B. W. Silverman, Ann.
Stat. 10 (1982) 795, recalled). A quadratic may open upwards, so a weak proper prior on level, slope
and curvature keeps it a distribution.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property, lru_cache

import numpy as np

# curvature of u per decade^2: a log-normal of dispersity 3 has -(ln 10)^2/ln 3 = -4.8; this prior
# holds dispersities from about 1.2 (-29) to beyond 10 (-2.3) without pulling
CURVATURE, CURVATURE_SPREAD = -6.0, 12.0
SLOPE_SPREAD = 25.0
LEVEL_SPREAD = 10.0
# ln of the weight in a lump: centre and spread of a weak prior
LUMP_CENTRE, LUMP_SPREAD = float(np.log(2e-3)), 3.0


@dataclass(frozen=True, eq=False)
class Roughness:
    """Rows of the prior for n nodes and two lumps (columns n and n + 1).

    Attributes
    ----------
    third : ndarray of shape (n - 3, n + 2)
        Third differences; their squares times lambda integrate (d3u/dx3)^2 over decades x.
    weak : ndarray of shape (3, n + 2)
        Level, slope and curvature of u, each divided by its spread.
    weak_centre : ndarray of shape (3,)
    """

    third: np.ndarray
    weak: np.ndarray
    weak_centre: np.ndarray

    def precision(self, smoothing: float) -> np.ndarray:
        """Precision matrix of the linear rows, shape (n + 2, n + 2)."""
        return smoothing * self.rough + self.soft

    @cached_property
    def rough(self) -> np.ndarray:
        """Of the third differences, at lambda 1."""
        return self.third.T @ self.third

    @cached_property
    def soft(self) -> np.ndarray:
        """Of the weak rows."""
        return self.weak.T @ self.weak

    @cached_property
    def _log_det_at_one(self) -> float:
        # third differences and weak rows are together as many as the nodes
        n = self.third.shape[1] - 2
        square = np.vstack([self.third, self.weak])[:, :n]
        return 2.0 * float(np.linalg.slogdet(square)[1]) - 4.0 * float(np.log(LUMP_SPREAD))

    def log_det(self, smoothing: float) -> float:
        """ln det of `precision` and the lumps' own prior."""
        return self._log_det_at_one + self.third.shape[0] * float(np.log(smoothing))


# below this share of its highest weight a smooth ln w is a belief, not an observation: the prior is
# relaxed in proportion (else a Schulz-Zimm melt's steep end is read as a log-normal's, and its
# interval is too narrow)
RELIEF_LEVEL, RELIEF_FLOOR = 0.1, 1e-3


def relieved(prior: Roughness, w: np.ndarray) -> Roughness:
    """The prior with less smoothness asked for where a first fit finds next to no weight.

    Parameters
    ----------
    prior : Roughness
    w : ndarray of shape (n + 2,)
        Weights of a first fit.
    """
    share = w[:-2] / w[:-2].max()
    keep = np.clip(share / RELIEF_LEVEL, RELIEF_FLOOR, 1.0)
    middle = np.minimum(keep[1:-2], keep[2:-1])
    return replace(prior, third=prior.third * np.sqrt(middle)[:, None])


@lru_cache(maxsize=16)
def roughness(n: int, spacing: float) -> Roughness:
    """Prior rows for n nodes `spacing` decades apart.

    lambda multiplies int (d3u/dx3)^2 dx with x in decades, so it does not depend on the spacing.
    """
    d3 = np.diff(np.eye(n), n=3, axis=0) * spacing**-2.5
    x = (np.arange(n) - 0.5 * (n - 1)) * spacing
    # least-squares quadratic through u: u ~ c0 + c1 x + c2 x^2
    basis = np.vander(x, 3, increasing=True)
    fit = np.linalg.pinv(basis)
    rows = np.vstack(
        [fit[0] / LEVEL_SPREAD, fit[1] / SLOPE_SPREAD, 2.0 * fit[2] / CURVATURE_SPREAD]
    )
    pad = np.zeros((n - 3, 2))
    # the level of u is only a gauge of the softmax; its row keeps u near ln(1/n)
    centre = np.array([np.log(1.0 / n) / LEVEL_SPREAD, 0.0, CURVATURE / CURVATURE_SPREAD])
    made = (np.hstack([d3, pad]), np.hstack([rows, np.zeros((3, 2))]), centre)
    for part in made:
        part.setflags(write=False)
    return Roughness(*made)
