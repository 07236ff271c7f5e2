"""Rules held against measured blends: residuals over exponent and time law, robustly weighed.

A bag with a wrong label must not bend the rule for the others, so blends are weighed by a bounded
loss of their root mean square residual: one that lies far off counts as one that lies off, no more.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np
from scipy.stats import t as student

from mwdlink.decisions.blend_sweeps import MeasuredBank
from mwdlink.decisions.ensemble import PRIOR_EXPONENT, PRIOR_SPREAD
from mwdlink.decisions.gpc_band import GpcBand
from mwdlink.decisions.response import Bank, Response, _cubic_rows
from mwdlink.relaxation.operator import log_grid

MEASURED = "measured spectra"
SWEPT_EXPONENTS = np.round(np.arange(1.0, 4.0001, 0.05), 4)
EXPONENTS = np.round(np.arange(1.0, 3.2501, 0.125), 4)
FACTORS = np.geomspace(0.25, 4.0, 61)
LISTED = (1.0, 1.5, 1.75, 2.0, 2.25, 2.5, 3.0)
# spread of the exponent told by one, two other blends
FEW_SPREAD = {1: 0.15, 2: 0.10}


@dataclass(frozen=True, eq=False)
class BlendData:
    """One blend's data within the components' reach.

    Attributes
    ----------
    name : str
    phi : ndarray of shape (n_i,)
        Weighed fractions [-].
    omega : ndarray of shape (n,)
        [rad/s]
    log_moduli : ndarray of shape (2 n,)
        ln G' over ln G''.
    sigma : ndarray of shape (2 n,)
        Relative noise [-].
    """

    name: str
    phi: np.ndarray
    omega: np.ndarray
    log_moduli: np.ndarray
    sigma: np.ndarray


class Rule(Protocol):
    """A mixing rule with one free exponent, and a free factor of the time law where it has one."""

    @property
    def kernel(self) -> str:
        """Kernel, or `measured spectra`."""

    @property
    def route(self) -> str:
        """`sweeps` or `distributions`."""

    @property
    def exponents(self) -> np.ndarray:
        """Exponents tried [-], even."""

    @property
    def factors(self) -> np.ndarray:
        """Factors on the time law tried [-], even in their logarithm."""

    def response(self, phi: np.ndarray, exponent: float, member: int | None = None) -> Response:
        """Blends of fractions (k, n_i)."""


@dataclass(frozen=True, eq=False)
class SweptRule:
    """Through the components' measured spectra."""

    bank: MeasuredBank
    kernel: str = MEASURED
    route: str = "sweeps"
    exponents: np.ndarray = field(default_factory=lambda: SWEPT_EXPONENTS)
    factors: np.ndarray = field(default_factory=lambda: np.ones(1))

    def response(self, phi: np.ndarray, exponent: float, member: int | None = None) -> Response:
        return self.bank.response(phi, exponent, member)


@dataclass(frozen=True, eq=False)
class KernelRule:
    """Through the components' distributions and a kernel."""

    bank: Bank
    kernel: str
    route: str = "distributions"
    exponents: np.ndarray = field(default_factory=lambda: EXPONENTS)
    factors: np.ndarray = field(default_factory=lambda: FACTORS)

    def response(self, phi: np.ndarray, exponent: float, member: int | None = None) -> Response:
        return self.bank.response(phi, self.kernel, exponent)


def residuals(r: Response, row: int, data: BlendData, factors: np.ndarray) -> np.ndarray:
    """log10(predicted/measured) at each factor on the time law, shape (f, 2 n)."""
    if factors.size == 1:
        up, out = r.moduli(data.omega * factors[0])
        both = np.log(np.concatenate([up[row], out[row]]))[None, :]
    else:
        w = log_grid(
            float(data.omega[0] * factors[0]) * 0.9, float(data.omega[-1] * factors[-1]) * 1.1, 12
        )
        up, out = r.moduli(w)
        x, at = np.log(w), np.log(data.omega)[None, :] + np.log(factors)[:, None]
        rows = np.log(np.stack([up[row], out[row]]))
        found = _cubic_rows(x, rows, at.ravel()).reshape(2, factors.size, data.omega.size)
        both = np.concatenate([found[0], found[1]], axis=1)
    return (both - data.log_moduli) / np.log(10.0)


@dataclass(frozen=True, eq=False)
class Surface:
    """Root mean square residual of every blend over exponent and time factor.

    Attributes
    ----------
    rule : Rule
    rms : ndarray of shape (n_e, n_f, n_b)
        [decades]
    scale : float
        Where the bounded loss bends [decades].
    """

    rule: Rule
    rms: np.ndarray
    scale: float

    def loss(self, blends: Sequence[int]) -> np.ndarray:
        """Bounded loss summed over blends, shape (n_e, n_f)."""
        x = self.rms[:, :, list(blends)] ** 2
        return np.sum(x / (x + self.scale**2), axis=2)

    def best(self, blends: Sequence[int]) -> tuple[float, float]:
        """Exponent and factor that suit the blends best, between grid points too."""
        return lowest(self.rule.exponents, self.rule.factors, self.loss(blends))

    def factor_at(self, exponent_index: int, blends: Sequence[int]) -> float:
        """Best factor of a fixed exponent."""
        loss = self.loss(blends)[exponent_index]
        j = int(np.argmin(loss))
        return float(np.exp(_vertex(np.log(self.rule.factors), loss, j)))


def lowest(exponents: np.ndarray, factors: np.ndarray, loss: np.ndarray) -> tuple[float, float]:
    """Exponent and factor of the least loss (n_e, n_f), between grid points too.

    Another exponent wants another factor: the valley is slanted, so each exponent is judged by the
    best factor it can have.
    """
    x = np.log(factors)
    own, depth = [], []
    for row in loss:
        j = int(np.argmin(row))
        at = _vertex(x, row, j)
        own.append(at)
        depth.append(_depth(x, row, j, at))
    i = int(np.argmin(depth))
    e = _vertex(exponents, np.array(depth), i)
    return float(e), float(np.exp(np.interp(e, exponents, own)))


def _depth(x: np.ndarray, y: np.ndarray, i: int, at: float) -> float:
    """Height of the parabola through the lowest point and its neighbours at its vertex."""
    if x.size < 3 or i in (0, x.size - 1):
        return float(y[i])
    slope = (y[i + 1] - y[i - 1]) / (x[i + 1] - x[i - 1])
    return float(max(y[i] + 0.5 * slope * (at - x[i]), 0.0))


def _vertex(x: np.ndarray, y: np.ndarray, i: int) -> float:
    """Minimum of the parabola through the lowest point and its neighbours."""
    if x.size < 3 or i in (0, x.size - 1):
        return float(x[i])
    a, b, c = y[i - 1], y[i], y[i + 1]
    bend = a - 2 * b + c
    if bend <= 0:
        return float(x[i])
    return float(x[i] + 0.5 * (a - c) / bend * (x[i + 1] - x[i]))


def surface(rule: Rule, data: Sequence[BlendData], scale: float | None = None) -> Surface:
    """Residuals of all blends over the rule's exponents and factors."""
    phi = np.stack([d.phi for d in data])
    rms = np.empty((rule.exponents.size, rule.factors.size, len(data)))
    for i, e in enumerate(rule.exponents):
        r = rule.response(phi, float(e))
        for b, d in enumerate(data):
            rms[i, :, b] = np.sqrt(np.mean(residuals(r, b, d, rule.factors) ** 2, axis=1))
    if scale is None:
        # twice what the middle blend leaves at its own best: beyond that it is a bag apart
        own = np.median(rms.min(axis=(0, 1)))
        scale = float(max(2.0 * own, 0.015))
    return Surface(rule, rms, scale)


@dataclass(frozen=True)
class Preferred:
    """The exponent a set of blends prefers.

    Attributes
    ----------
    exponent, spread : float
        Value and standard error [-].
    factor : float
        On the time law [-].
    count : int
        Blends behind it.
    """

    exponent: float
    spread: float
    factor: float
    count: int

    def interval(self, level: float = 0.9) -> tuple[float, float]:
        """Central interval, with Student's t for few blends."""
        q = float(student.ppf(0.5 + level / 2, max(self.count - 1, 2)))
        return max(self.exponent - q * self.spread, 1.0), self.exponent + q * self.spread


def preferred(s: Surface, blends: Sequence[int], noise: float = 0.0) -> Preferred:
    """What the given blends prefer; without any, the prior.

    The spread is the jackknife's over blends, `noise` (of the components' spectra) and, while the
    blends are few, the prior 2.0 +- 0.2, put together by their weights.
    """
    blends = list(blends)
    if not blends:
        return Preferred(PRIOR_EXPONENT, PRIOR_SPREAD, 1.0, 0)
    e, f = s.best(blends)
    n = len(blends)
    if n < 3:
        spread = FEW_SPREAD[n]
    else:
        each = np.array([s.best([b for b in blends if b != left])[0] for left in blends])
        spread = float(np.sqrt((n - 1) / n * np.sum((each - each.mean()) ** 2)))
    spread = float(np.sqrt(spread**2 + noise**2 + 0.01**2))
    if n < 3:
        w, p = 1 / spread**2, 1 / PRIOR_SPREAD**2
        e, spread = (w * e + p * PRIOR_EXPONENT) / (w + p), (w + p) ** -0.5
    return Preferred(float(e), spread, f, n)


def exponent_noise(
    rule: SweptRule, data: Sequence[BlendData], centre: float, scale: float, refits: int = 12
) -> float:
    """Standard error of the exponent from the noise of the components' sweeps [-]."""
    phi = np.stack([d.phi for d in data])
    grid = np.clip(centre + 0.1 * np.arange(-2, 3), 1.0, 8.0)
    found = []
    for k in range(min(refits, rule.bank.members)):
        loss = []
        for e in grid:
            r = rule.response(phi, float(e), k)
            x = np.array(
                [np.mean(residuals(r, b, d, rule.factors) ** 2) for b, d in enumerate(data)]
            )
            loss.append(float(np.sum(x / (x + scale**2))))
        found.append(_vertex(grid, np.array(loss), int(np.argmin(loss))))
    return float(np.std(found)) if len(found) > 2 else 0.0


def exponent_of_versions(
    rule: KernelRule,
    gpc: GpcBand | None,
    data: Sequence[BlendData],
    centre: float,
    scale: float,
    versions: int = 16,
) -> float:
    """Standard error of the exponent from errors of the components' GPC curves [-].

    All blends share the components' curves, so that leaving one of them out does not show it. The
    calibration of the molar masses is left to the factor on the time law.
    """
    if gpc is None:
        return 0.0
    phi = np.stack([d.phi for d in data])
    grid = np.clip(centre + 0.125 * np.arange(-3, 4), 1.0, 8.0)
    found = []
    for k in range(versions):
        loss = np.zeros((grid.size, rule.factors.size))
        for i, e in enumerate(grid):
            r = rule.bank.response(phi, rule.kernel, float(e), version=gpc.version(k))
            for b, d in enumerate(data):
                x = np.mean(residuals(r, b, d, rule.factors) ** 2, axis=1)
                loss[i] += x / (x + scale**2)
        found.append(lowest(grid, rule.factors, loss)[0])
    return float(np.std(found))


def ranking(
    surfaces: Sequence[Surface], data: Sequence[BlendData], blends: Sequence[int]
) -> list[dict[str, Any]]:
    """Rules by how far they miss a blend that was left out, best first.

    For each rule the exponents of `LISTED` and the one the other blends prefer; the factor on the
    time law is always the other blends'.
    """
    rows: list[dict[str, Any]] = []
    blends = list(blends)
    for s in surfaces:
        every: list[tuple[float | None, list[float]]] = [(e, []) for e in LISTED]
        every.append((None, []))
        for left in blends:
            rest = [b for b in blends if b != left]
            for e, errors in every:
                if e is None:
                    p = preferred(s, rest)
                    exponent, factor = p.exponent, p.factor
                else:
                    i = int(np.argmin(np.abs(s.rule.exponents - e)))
                    exponent = e
                    factor = s.factor_at(i, rest) if rest else 1.0
                r = s.rule.response(data[left].phi[None, :], exponent)
                miss = residuals(r, 0, data[left], np.array([factor]))[0]
                errors.append(float(np.sqrt(np.mean(miss**2))))
        everything = preferred(s, blends)
        for e, errors in every:
            rows.append(
                {
                    "kernel": s.rule.kernel,
                    "route": s.rule.route,
                    "exponent": everything.exponent if e is None else e,
                    "fitted": e is None,
                    "scatter_decades": float(np.sqrt(np.mean(np.square(errors)))),
                }
            )
    return sorted(rows, key=lambda row: row["scatter_decades"])
