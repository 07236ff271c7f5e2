"""Model moduli as a function of u = ln(mass per node), and their exact derivatives."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np

from mwdlink.chains.melt import Melt
from mwdlink.inversion.roughness import LUMP_CENTRE, LUMP_SPREAD, Roughness, roughness
from mwdlink.inversion.window import Window, find_window
from mwdlink.relaxation.mixing import Model, survival_at, survival_matrix
from mwdlink.relaxation.operator import LEAN_MARGIN, LEAN_TIMES, TimeOperator, time_operator
from mwdlink.relaxation.rouse import rouse_moduli


@dataclass(frozen=True, eq=False)
class Forward:
    """From weights on nodes and in two lumps to ln G' and ln G''.

    The lump below (index n) holds chains too short to see: they carry no network stress, they
    dilute. The lump above (index n + 1) holds chains too long to see: one decade slower than the
    last node. (A constant is wrong: the power-law kernel's F^(1/2) is still 0.67 there.)

    Attributes
    ----------
    survival : ndarray of shape (n_t, n + 2)
    rows : ndarray of shape (n_r, n_t)
        G(t)/G_N -> data rows (G' over G'' for a sweep) [Pa].
    linear : ndarray of shape (n_r, n + 2)
        Rouse part of each unit weight [Pa].
    exponent : float
    times : ndarray of shape (n_t,)
        [s]
    """

    survival: np.ndarray
    rows: np.ndarray
    linear: np.ndarray
    exponent: float
    times: np.ndarray | None = None

    def evaluate(self, w: np.ndarray) -> tuple[np.ndarray, Any]:
        """Data rows [Pa], shape (n_r,), of weights w of shape (n + 2,), and what `slope` needs."""
        s = self.survival @ w
        p = s ** (self.exponent - 1.0)
        return self.rows @ (p * s) + self.linear @ w, p

    def slope(self, known: Any) -> np.ndarray:
        """Derivatives of the data rows with respect to w, shape (n_r, n + 2), after `evaluate`."""
        return self.rows @ ((self.exponent * known)[:, None] * self.survival) + self.linear

    def values(self, w: np.ndarray) -> np.ndarray:
        """Data rows [Pa], shape (n_r,), of weights w of shape (n + 2,)."""
        return self.evaluate(w)[0]

    def values_of_many(self, w: np.ndarray) -> np.ndarray:
        """Data rows [Pa] of many weights, shapes (m, n + 2) and (m, n_r)."""
        return (w @ self.survival.T) ** self.exponent @ self.rows.T + w @ self.linear.T

    def values_and_slope(self, w: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Data rows and their derivatives with respect to w, shapes (n_r,) and (n_r, n + 2)."""
        values, known = self.evaluate(w)
        return values, self.slope(known)


def sweep_forward(omega: np.ndarray, melt: Melt, model: Model, window: Window) -> Forward:
    """The forward map of a frequency sweep on the nodes of a window; kept for the next lot."""
    return _sweep_forward(np.asarray(omega, dtype=float).tobytes(), melt, model, window)


# three kernels at three exponents are nine; lots of one kind of measurement share them, and an
# exponent that a lot's own data moved comes and goes (0.2 MB each)
@lru_cache(maxsize=24)
def _sweep_forward(omega_bytes: bytes, melt: Melt, model: Model, window: Window) -> Forward:
    operator = time_operator(np.frombuffer(omega_bytes), LEAN_MARGIN, LEAN_TIMES)
    rows, linear = _sweep_rows(omega_bytes, melt, model.rouse, window)
    survival = time_columns(operator.times, melt, model, window)
    survival.setflags(write=False)
    return Forward(survival, rows, linear, model.exponent, operator.times)


@lru_cache(maxsize=8)
def _sweep_rows(
    omega_bytes: bytes, melt: Melt, rouse: bool, window: Window
) -> tuple[np.ndarray, np.ndarray]:
    """What no exponent enters: the operator in Pa, and the Rouse part of each node."""
    omega = np.frombuffer(omega_bytes)
    operator: TimeOperator = time_operator(omega, LEAN_MARGIN, LEAN_TIMES)
    r = rouse_columns(omega, melt, Model(rouse=rouse), window)
    rows, linear = operator.matrix * melt.plateau_modulus, np.vstack([r.real, r.imag])
    rows.setflags(write=False)
    linear.setflags(write=False)
    return rows, linear


def time_columns(times: np.ndarray, melt: Melt, model: Model, window: Window) -> np.ndarray:
    """F^(1/beta) of all nodes and both lumps at given times, shape (n_t, n + 2)."""
    nodes = window.nodes
    k = np.zeros((times.size, nodes.size + 2))
    k[:, :-2] = survival_matrix(times, nodes, melt, model)
    k[:, -1] = survival_at(times / window.top_time, float(nodes[-1]), melt, model)
    return k


def rouse_columns(omega: np.ndarray, melt: Melt, model: Model, window: Window) -> np.ndarray:
    """Complex Rouse moduli of all nodes and both lumps [Pa], shape (n_w, n + 2)."""
    nodes = window.nodes
    out = np.zeros((omega.size, nodes.size + 2), dtype=complex)
    if model.rouse:
        # the lumps' own masses are unknown; half of the first and twice the last node stand for
        # them (a Rouse part is a per cent of the modulus there)
        masses = np.concatenate([nodes, [0.5 * nodes[0], 2.0 * nodes[-1]]])
        out[:] = rouse_moduli(omega, masses, melt)
    return out


@dataclass(frozen=True, eq=False)
class Problem:
    """One inversion problem: data, noise, forward map, prior.

    Attributes
    ----------
    data : ndarray of shape (n_r,)
        ln of the measured rows.
    sigma : ndarray of shape (n_r,)
        Relative noise of each row, > 0.
    forward : Forward
    prior : Roughness
    window : Window
    """

    data: np.ndarray
    sigma: np.ndarray
    forward: Forward
    prior: Roughness
    window: Window

    @property
    def size(self) -> int:
        """Number of unknowns, n + 2."""
        return self.forward.survival.shape[1]

    def misfit(self, w: np.ndarray) -> np.ndarray:
        """(ln model - ln data)/sigma of each row."""
        return (np.log(self.forward.values(w)) - self.data) / self.sigma

    def chi2(self, w: np.ndarray) -> float:
        """Sum of squared misfits."""
        r = self.misfit(w)
        return float(r @ r)


def weights(u: np.ndarray) -> np.ndarray:
    """softmax(u): positive, unit sum."""
    e = np.exp(u - u.max())
    return e / e.sum()


def lump_rows(w: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Weak prior on ln of the two lumps' weights: residuals (2,) and slopes in u (2, n + 2)."""
    lumps = np.maximum(w[-2:], 1e-300)
    slope = np.tile(-w, (2, 1)) / LUMP_SPREAD
    slope[0, -2] += 1.0 / LUMP_SPREAD
    slope[1, -1] += 1.0 / LUMP_SPREAD
    return (np.log(lumps) - LUMP_CENTRE) / LUMP_SPREAD, slope


def sweep_problem(
    omega: np.ndarray,
    storage: np.ndarray,
    loss: np.ndarray,
    sigma: np.ndarray,
    melt: Melt,
    model: Model,
    window: Window | None = None,
) -> Problem:
    """The problem of a sweep.

    Parameters
    ----------
    omega, storage, loss : ndarray of shape (n_w,)
        [rad/s], [Pa], [Pa]
    sigma : ndarray of shape (2 n_w,)
        Relative noise of G' over that of G''.
    """
    window = window or find_window(omega, melt, model)
    forward = sweep_forward(omega, melt, model, window)
    data = np.log(np.concatenate([storage, loss]))
    prior = roughness(window.nodes.size, window.spacing)
    return Problem(data, np.asarray(sigma, dtype=float), forward, prior, window)
