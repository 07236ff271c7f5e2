"""Moduli of the joint inference as a function of weights, time-law factor and mixing exponent.

A factor f on all times moves the curves along the frequency axis, G*(omega; f) = G*(f omega; 1):
the moduli are computed on a fixed list of frequencies and read between them by local cubics in
log-log. The exponent enters through tables of F^(1/beta) at five exponents, read between them by a
polynomial. Both keep exact derivatives and cost nothing beside the fit itself.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from mwdlink.chains.melt import Melt
from mwdlink.inversion.window import Window
from mwdlink.relaxation.mixing import Model, survival_at, survival_matrix
from mwdlink.relaxation.operator import LEAN_MARGIN, LEAN_TIMES, debye, time_operator
from mwdlink.relaxation.rouse import rouse_moduli

# frequencies beyond both ends of the data, for time-law factors up to 3
PAD_DECADES = 0.5
GRID_PER_DECADE = 8
# a process of its own: a spectrum falling as tau^0.5 below its longest time, seven modes
SLOW_RATIOS = 10.0 ** -np.linspace(0.0, 3.0, 7)
SLOW_SHARES = SLOW_RATIOS**-0.5 / np.sum(SLOW_RATIOS**-0.5)
# loss of an elastic network against its modulus (recalled: filled and gelled melts, flat tan delta)
PLATEAU_LOSS = 0.05


# the four cubics through a point's neighbours, as powers of its place among them (0 to 3)
CUBICS = np.array([[6, 0, 0, 0], [-11, 18, -9, 2], [6, -15, 12, -3], [-1, 3, -3, 1]]) / 6.0
CUBIC_SLOPES = CUBICS[1:] * np.array([[1.0], [2.0], [3.0]])


def lagrange_weights(x: np.ndarray, at: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Local cubic interpolation on a uniform grid, as four neighbours each, and its derivative.

    Parameters
    ----------
    x : ndarray of shape (n,)
        Uniform grid.
    at : ndarray of shape (m,)
        Where values are wanted; beyond the grid the end cubics go on.

    Returns
    -------
    column : ndarray of int of shape (m, 4)
        The neighbours.
    value, slope : ndarray of shape (m, 4)
        Their weights, and the derivatives of these with respect to `at`.
    """
    h = float(x[1] - x[0])
    place = (at - x[0]) / h
    first = np.minimum(np.maximum(np.floor(place).astype(int) - 1, 0), x.size - 4)
    t = place - first
    powers = np.empty((at.size, 4))
    powers[:, 0] = 1.0
    powers[:, 1] = t
    powers[:, 2] = t * t
    powers[:, 3] = powers[:, 2] * t
    return first[:, None] + np.arange(4), powers @ CUBICS, powers[:, :3] @ CUBIC_SLOPES / h


def lagrange_rows(x: np.ndarray, at: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The same as matrices.

    Returns
    -------
    rows, slope : ndarray of shape (m, n)
        Values and derivatives with respect to `at`.
    """
    column, value, change = lagrange_weights(x, at)
    flat = (column + x.size * np.arange(at.size)[:, None]).ravel()
    rows, slope = np.zeros((2, at.size, x.size))
    rows.ravel()[flat] = value.ravel()
    slope.ravel()[flat] = change.ravel()
    return rows, slope


@dataclass(frozen=True, eq=False)
class Response:
    """From weights on nodes and in the lump above to ln G' and ln G'' at the data's frequencies.

    Attributes
    ----------
    log_omega : ndarray of shape (n_w,)
        ln of the data's frequencies.
    grid : ndarray of shape (n_g,)
        ln of the frequencies of the computation, uniform.
    exponents : ndarray of shape (n_b,)
    tables : ndarray of shape (n_b, n_t, n + 1)
        F^(1/beta) at each exponent.
    rows : ndarray of shape (2 n_g, n_t)
        G(t)/G_N to moduli [Pa].
    linear : ndarray of shape (2 n_g, n + 1)
        Rouse part [Pa].
    floor : float
        Smallest modulus that is told from zero [Pa].
    """

    log_omega: np.ndarray
    grid: np.ndarray
    exponents: np.ndarray
    tables: np.ndarray
    rows: np.ndarray
    linear: np.ndarray
    floor: float

    @cached_property
    def _both(self) -> np.ndarray:
        """What acts on the relaxation and what acts on the weights, side by side."""
        return np.hstack([self.rows, self.linear])

    @cached_property
    def _coefficients(self) -> np.ndarray:
        """Polynomial through all exponents: powers of (beta - first) to weights of the tables."""
        steps = self.exponents - self.exponents[0]
        return np.linalg.inv(np.vander(steps, increasing=True))

    @property
    def exponent_limits(self) -> tuple[float, float]:
        """Exponents within which the tables may be read."""
        if self.exponents.size == 1:
            return float(self.exponents[0]), float(self.exponents[0])
        edge = 0.5 * float(self.exponents[1] - self.exponents[0])
        return max(float(self.exponents[0]) - edge, 1.0), float(self.exponents[-1]) + edge

    def log_moduli(
        self, w: np.ndarray, log_factor: float, exponent: float
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """ln of G' over G'' and its derivatives.

        Returns
        -------
        value : ndarray of shape (2 n_w,)
        d_weight : ndarray of shape (2 n_w, n + 1)
        d_factor, d_exponent : ndarray of shape (2 n_w,)
        """
        power = (exponent - self.exponents[0]) ** np.arange(self.exponents.size)
        share = power @ self._coefficients
        d_share = (np.arange(1, power.size) * power[:-1]) @ self._coefficients[1:]
        k = (share @ self.tables.reshape(share.size, -1)).reshape(self.tables.shape[1:])
        s = np.maximum(k @ w, 1e-30)
        ds = (self.tables @ w).T @ d_share
        p = s ** (exponent - 1.0)
        net = p * s
        y = self.rows @ net + self.linear @ w
        good = y > self.floor
        y = np.maximum(y, self.floor)
        d_beta = np.where(good, self.rows @ (net * np.log(s) + exponent * p * ds), 0.0) / y
        # between the frequencies of the grid: four neighbours of G' and of G'' each
        column, a, da = lagrange_weights(self.grid, self.log_omega + log_factor)
        column = np.concatenate([column, column + self.grid.size])
        a, da = np.concatenate([a, a]), np.concatenate([da, da])
        log_y = np.log(y)[column]
        value = (a * log_y).sum(axis=1)
        d_factor = (da * log_y).sum(axis=1)
        d_exponent = (a * d_beta[column]).sum(axis=1)
        part = a * np.where(good, 1.0 / y, 0.0)[column]
        # (interpolation of rows) times k is a smaller product than rows times k
        read = (part[:, None, :] @ self._both[column])[:, 0]
        times = self.rows.shape[1]
        d_weight = (read[:, :times] * (exponent * p)) @ k + read[:, times:]
        return value, d_weight, d_factor, d_exponent

    def extra_process(self, kind: str, q: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """G' over G'' of a process of its own [Pa] and its derivatives in q.

        Parameters
        ----------
        kind : str
            `slow` (q = ln strength, ln longest time) or `plateau` (q = ln strength).
        """
        n = self.log_omega.size
        strength = np.exp(min(q[0], 40.0))
        if kind == "plateau":
            add = strength * np.concatenate([np.ones(n), np.full(n, PLATEAU_LOSS)])
            return add, add[:, None]
        omega = np.exp(self.log_omega)

        def shape(log_time: float) -> np.ndarray:
            storage, loss = debye(omega, np.exp(log_time) * SLOW_RATIOS)
            return np.concatenate([storage @ SLOW_SHARES, loss @ SLOW_SHARES])

        add = strength * shape(q[1])
        step = 1e-4
        d_time = strength * (shape(q[1] + step) - shape(q[1] - step)) / (2 * step)
        return add, np.column_stack([add, d_time])


def sweep_response(
    omega: np.ndarray,
    melt: Melt,
    kernel: str,
    nodes: np.ndarray,
    window: Window,
    exponents: np.ndarray,
    rouse: bool = True,
) -> Response:
    """The response of a list of frequencies [rad/s] on given nodes [g/mol].

    Parameters
    ----------
    exponents : ndarray of shape (n_b,)
        Exponents of the tables: one, where it is fixed.
    """
    low, high = np.log10(omega.min()) - PAD_DECADES, np.log10(omega.max()) + PAD_DECADES
    count = max(int(np.ceil((high - low) * GRID_PER_DECADE)) + 1, 8)
    grid = np.linspace(low, high, count)
    frequencies = 10.0**grid
    operator = time_operator(frequencies, LEAN_MARGIN, LEAN_TIMES)
    tables = np.zeros((exponents.size, operator.times.size, nodes.size + 1))
    for i, beta in enumerate(exponents):
        model = Model(kernel, float(beta), rouse)
        tables[i, :, :-1] = survival_matrix(operator.times, nodes, melt, model)
        tables[i, :, -1] = survival_at(
            operator.times / window.top_time, float(nodes[-1]), melt, model
        )
    linear = np.zeros((2 * count, nodes.size + 1))
    if rouse:
        # twice the last node stands for the lump: its own mass is not known
        part = rouse_moduli(frequencies, np.append(nodes, 2.0 * nodes[-1]), melt)
        linear = np.vstack([part.real, part.imag])
    return Response(
        np.log(omega),
        np.log(frequencies),
        np.asarray(exponents, dtype=float),
        tables,
        operator.matrix * melt.plateau_modulus,
        linear,
        1e-11 * melt.plateau_modulus,
    )
