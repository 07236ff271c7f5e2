"""What the GPC measured: rows of its curve where it may be trusted, and their errors."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.gpc_error import BASELINE_ERROR, RELATIVE_ERROR, SIGNAL
from mwdlink.errors import InputError
from mwdlink.inversion.joint_response import lagrange_rows


@dataclass(frozen=True, eq=False)
class GpcRows:
    """The GPC's curve as data of the joint inference.

    Attributes
    ----------
    position : ndarray of shape (m,)
        log10 M of the rows, as the GPC has it.
    step : ndarray of shape (m,)
        Decades each row stands for.
    density : ndarray of shape (m,)
        dW/dlog10M normalised over the rows.
    sigma : ndarray of shape (m,)
        Error of each row, in the same unit.
    peak : float
        Highest density.
    low, high : float
        Range of M the rows cover [g/mol].
    """

    position: np.ndarray
    step: np.ndarray
    density: np.ndarray
    sigma: np.ndarray
    peak: float
    low: float
    high: float

    @property
    def size(self) -> int:
        return int(self.position.size)

    def model(
        self, x: np.ndarray, u: np.ndarray, log_factor: float, baseline: float
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """What the GPC would show of exp(u) on nodes x, normalised over its own range.

        Parameters
        ----------
        x : ndarray of shape (n,)
            log10 M of the nodes.
        u : ndarray of shape (n,)
        log_factor : float
            ln of (M of the GPC / true M).
        baseline : float
            Constant part of the curve, in parts of its peak.

        Returns
        -------
        density : ndarray of shape (m,)
        d_u : ndarray of shape (m, n)
        d_factor, d_baseline : ndarray of shape (m,)
        """
        rows, slope = lagrange_rows(x, self.position - log_factor / np.log(10.0))
        value = rows @ u
        d = np.exp(value - value.max())
        d /= d @ self.step
        share = d * self.step
        d_u = d[:, None] * (rows - share @ rows)
        tilt = slope @ u
        d_factor = -d * (tilt - share @ tilt) / np.log(10.0)
        return (
            d + baseline * self.peak,
            d_u,
            d_factor,
            np.full(d.size, self.peak),
        )


def supported_range(distribution: Distribution) -> tuple[float, float]:
    """First and last M [g/mol] at which the curve stands above a thousandth of its peak.

    The running median of five rows decides, so that single noisy rows far out do not.
    """
    d = distribution.density
    if d.size >= 9:
        padded = np.concatenate([d[:1], d[:1], d, d[-1:], d[-1:]])
        middle = np.median(np.lib.stride_tricks.sliding_window_view(padded, 5), axis=1)
    else:
        middle = d
    top = int(np.argmax(middle))
    above = middle > SIGNAL * middle.max()
    first, last = top, top
    while first > 0 and above[first - 1]:
        first -= 1
    while last < d.size - 1 and above[last + 1]:
        last += 1
    return float(distribution.molar_mass[first]), float(distribution.molar_mass[last])


def gpc_rows(
    distribution: Distribution,
    trust_range: tuple[float, float] | None,
    spacing: float,
    relative: float = RELATIVE_ERROR,
    baseline: float = BASELINE_ERROR,
) -> GpcRows:
    """Rows of a GPC's curve within the range it is trusted in.

    Parameters
    ----------
    distribution : Distribution
    trust_range : (float, float) or None
        M [g/mol]; None takes what the curve supports.
    spacing : float
        Decades of the joint grid: finer tables are averaged to it, coarser ones kept.
    relative, baseline : float
        Error of a row as a part of itself and of the peak. A row is a cell of the joint grid, so
        that a finer table brings no more certainty.

    Raises
    ------
    InputError
        If fewer than five rows are left.
    """
    low, high = supported_range(distribution)
    if trust_range is not None:
        low, high = max(low, trust_range[0]), min(high, trust_range[1])
    x = np.log10(distribution.molar_mass)
    inside = (distribution.molar_mass >= low * (1 - 1e-9)) & (
        distribution.molar_mass <= high * (1 + 1e-9)
    )
    if inside.sum() < 5:
        raise InputError(
            f"only {int(inside.sum())} rows of the GPC table are left between {low:.3g} and "
            f"{high:.3g} g/mol.",
            remedy="Give a finer table or a wider trusted range.",
        )
    native = float(np.median(np.diff(x[inside])))
    if native >= 0.75 * spacing:
        position = x[inside]
        edges = np.clip(np.log10(distribution.edges), np.log10(low), np.log10(high))
        step = np.diff(edges)[inside]
        density = distribution.density[inside]
        keep = step > 1e-6
        position, step, density = position[keep], step[keep], density[keep]
    else:
        a, b = np.log10(low), np.log10(high)
        count = max(int(round((b - a) / spacing)), 5)
        edges = np.linspace(a, b, count + 1)
        position = 0.5 * (edges[1:] + edges[:-1])
        step = np.diff(edges)
        density = np.diff(distribution.cumulative(10.0**edges)) / step
    area = float(density @ step)
    if not area > 0:
        raise InputError("the GPC curve holds no weight in the range it is trusted in.")
    density = density / area
    peak = float(density.max())
    sigma = np.hypot(relative * density, baseline * peak)
    return GpcRows(position, step, density, sigma, peak, low, high)
