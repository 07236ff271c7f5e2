"""Averages, weights and densities of ensemble members: weights on cells and in two lumps."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, eq=False)
class Cells:
    """Ensemble members on the cells of one window.

    Attributes
    ----------
    edges : ndarray of shape (m, n + 1)
        Cell edges [g/mol] of each member (a member's time law may shift them).
    w : ndarray of shape (m, n + 2)
        Weights of cells, lump below (n), lump above (n + 1); sum 1.
    """

    edges: np.ndarray
    w: np.ndarray

    @classmethod
    def make(cls, edges: np.ndarray, w: np.ndarray, scale: np.ndarray | float = 1.0) -> Cells:
        """From common edges (n + 1,) and a factor on the molar masses of each member (m,)."""
        w = np.atleast_2d(w)
        factor = np.broadcast_to(np.asarray(scale, dtype=float), (w.shape[0],))
        return cls(edges[None, :] * factor[:, None], w)

    @property
    def nodes(self) -> np.ndarray:
        """Geometric middles of the cells [g/mol], shape (m, n)."""
        return np.sqrt(self.edges[:, :-1] * self.edges[:, 1:])

    def cumulative(self) -> np.ndarray:
        """Weight up to each edge, the lump below counted first; shape (m, n + 1)."""
        below = self.w[:, -2:-1]
        return np.concatenate([below, below + np.cumsum(self.w[:, :-2], axis=1)], axis=1)

    def above(self, molar_mass: float) -> np.ndarray:
        """Weight above M [g/mol], cells cut in part, the lump above counted whole; shape (m,)."""
        c = self.cumulative()
        x = np.log(molar_mass)
        e = np.log(self.edges)
        total = c[:, -1] + self.w[:, -1]
        return np.array([t - np.interp(x, a, b) for a, b, t in zip(e, c, total, strict=True)])

    def averages(self) -> dict[str, np.ndarray]:
        """Mn, Mw, Mz [g/mol] and dispersity, lumps standing at the outermost edges.

        With weight in the lump above, Mw and Mz are therefore lower bounds; with weight in the
        lump below, Mn is an upper bound.
        """
        m = np.concatenate([self.nodes, self.edges[:, :1], self.edges[:, -1:]], axis=1)
        mw = np.sum(self.w * m, axis=1)
        mn = 1.0 / np.sum(self.w / m, axis=1)
        mz = np.sum(self.w * m * m, axis=1) / mw
        return {"Mn": mn, "Mw": mw, "Mz": mz, "dispersity": mw / mn}

    def mean_within(self, low: float, high: float) -> np.ndarray:
        """Mean molar mass of the weight between two limits [g/mol], shape (m,)."""
        e = np.log(self.edges)
        a = np.maximum(e[:, :-1], np.log(low))
        b = np.minimum(e[:, 1:], np.log(high))
        width = np.clip(b - a, 0.0, None)
        held = width > 0
        with np.errstate(invalid="ignore", divide="ignore"):
            mean = np.where(held, (np.exp(b) - np.exp(a)) / np.where(held, b - a, 1.0), 0.0)
        part = self.w[:, :-2] * width / np.diff(e, axis=1)
        total = part.sum(axis=1)
        return np.where(total > 0, np.sum(part * mean, axis=1) / np.maximum(total, 1e-300), np.nan)

    def density(self, molar_mass: np.ndarray) -> np.ndarray:
        """dW/dlog10 M at given molar masses, shape (m, k); zero beyond the nodes."""
        x = np.log10(molar_mass)
        e = np.log10(self.edges)
        nodes = 0.5 * (e[:, 1:] + e[:, :-1])
        d = self.w[:, :-2] / np.diff(e, axis=1)
        return np.array(
            [np.interp(x, a, b, left=0.0, right=0.0) for a, b in zip(nodes, d, strict=True)]
        )
