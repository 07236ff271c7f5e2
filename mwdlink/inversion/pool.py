"""Members of all branches side by side."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from mwdlink.inversion.budget import variance_shares
from mwdlink.inversion.ensemble import Branch, Members
from mwdlink.inversion.quantities import Cells


@dataclass(frozen=True, eq=False)
class Pool:
    """Members of all branches side by side.

    Attributes
    ----------
    cells : tuple of Cells
        One per branch (branches have their own nodes).
    kernel, smoothing, plateau, branch : ndarray of int, shape (m,)
        Labels: of the kernel, of lambda, of the plateau modulus, of the branch in `cells`.
    exponent, ln_time : ndarray of shape (m,)
    """

    cells: tuple[Cells, ...]
    kernel: np.ndarray
    smoothing: np.ndarray
    exponent: np.ndarray
    ln_time: np.ndarray
    plateau: np.ndarray
    branch: np.ndarray

    def gather(self, f: Any) -> np.ndarray:
        """A quantity of every member, f(Cells) -> (m_b,) or (m_b, k)."""
        return np.concatenate([f(c) for c in self.cells])

    def shares(self, value: np.ndarray) -> dict[str, float]:
        return variance_shares(
            value,
            self.kernel,
            self.exponent,
            self.ln_time,
            self.smoothing,
            self.plateau,
        )


def make_pool(branches: Sequence[Branch], drawn: Sequence[Members]) -> Pool | None:
    """Members of the admissible branches; those that did not converge are left out."""
    if not drawn:
        return None
    cells, kernel, smooth, exponent, ln_time = [], [], [], [], []
    plateau, branch = [], []
    names = sorted({b.kernel for b in branches})
    for i, (b, m) in enumerate(zip(branches, drawn, strict=True)):
        ok = m.converged
        # eta0 = K M^a: a law `factor` times higher reads the same times as shorter chains
        scale = np.exp(-m.ln_time[ok] / b.melt.law_exponent)
        cells.append(Cells.make(b.problem.window.edges, m.w[ok], scale))
        count = int(ok.sum())
        kernel.append(np.full(count, names.index(b.kernel)))
        plateau.append(np.full(count, round(1000 * b.plateau_factor)))
        branch.append(np.full(count, i))
        smooth.append(m.smoothing_index[ok])
        exponent.append(m.exponent[ok])
        ln_time.append(m.ln_time[ok])
    return Pool(
        tuple(cells),
        np.concatenate(kernel),
        np.concatenate(smooth),
        np.concatenate(exponent),
        np.concatenate(ln_time),
        np.concatenate(plateau),
        np.concatenate(branch),
    )
