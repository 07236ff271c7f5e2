"""Families of distributions with known averages: log-normal, Schulz-Zimm, generalised exponential.

Each is given on nodes equally spaced in log M, where the trapezoid rule reproduces the averages
closely, over the range that holds them. Where a family has countless chains of next to no mass
(Schulz-Zimm of high dispersity), these stand together in one node that keeps Mn.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
from scipy import optimize, special

from mwdlink.chains.distribution import Distribution
from mwdlink.errors import ModelError

# lowest node of a family, in units of its own scale
LEAST_RATIO = 1e-6
FAMILIES = ("log-normal", "schulz-zimm", "generalised-exponential")
# ln a and ln b of the generalised exponential
GEX_BOUNDS = ([-6.0, -3.2], [7.0, 4.0])


def lognormal(Mw: float, dispersity: float, points: int | None = None, **more: Any) -> Distribution:
    """Log-normal: Mw/Mn = Mz/Mw = exp(sigma^2), sigma of ln M.

    Parameters
    ----------
    Mw : float
        Weight average [g/mol], > 0.
    dispersity : float
        > 1.
    points : int, optional
        Nodes; default about 40 per standard deviation times its range.

    Raises
    ------
    ModelError
        If the averages are impossible.
    """
    _check(Mw, dispersity)
    sigma = np.sqrt(np.log(dispersity))
    centre = np.log(Mw) - 0.5 * sigma**2
    x = _nodes(centre - 7.5 * sigma, centre + 9.5 * sigma, points)
    return _on_nodes(x, -0.5 * ((x - centre) / sigma) ** 2, **more)


def schulz_zimm(
    Mw: float, dispersity: float, points: int | None = None, **more: Any
) -> Distribution:
    """Schulz-Zimm: w(M) dM ~ M^k exp(-k M/Mn), Mn : Mw : Mz = k : k+1 : k+2.

    Dispersity (k + 1)/k; 2 is the most probable (Flory) distribution.

    Raises
    ------
    ModelError
        If the averages are impossible.
    """
    _check(Mw, dispersity)
    k = 1.0 / (dispersity - 1.0)
    scale = Mw / (k + 1.0)
    return _gamma_like(k, 1.0, scale, points, **more)


def generalised_exponential(
    M0: float, a: float, b: float, points: int | None = None, **more: Any
) -> Distribution:
    """Generalised exponential: w(M) dM ~ M^a exp(-(M/M0)^b).

    Parameters
    ----------
    M0 : float
        Scale [g/mol], > 0.
    a : float
        > 0 (Mn finite).
    b : float
        > 0; 1 is Schulz-Zimm.

    Raises
    ------
    ModelError
        If a parameter is out of range.
    """
    if not (M0 > 0 and a > 0 and b > 0 and np.all(np.isfinite([M0, a, b]))):
        raise ModelError("a generalised exponential needs M0 > 0, a > 0, b > 0")
    return _gamma_like(a, b, M0, points, **more)


def mixture(parts: Sequence[tuple[Distribution, float]], **more: Any) -> Distribution:
    """Weighted sum of family members on one fine grid (see `Distribution.blend`)."""
    return Distribution.blend(parts, **more)


def mixture_of_lognormals(
    Mw: Sequence[float],
    dispersity: Sequence[float],
    fractions: Sequence[float],
    points: int | None = None,
    **more: Any,
) -> Distribution:
    """Sum of log-normals on one common grid: exact averages, no merging of nodes."""
    shares = np.asarray(fractions, dtype=float)
    shares = shares / shares.sum()
    sigma = np.sqrt(np.log(np.asarray(dispersity, dtype=float)))
    centre = np.log(np.asarray(Mw, dtype=float)) - 0.5 * sigma**2
    low, high = np.min(centre - 7.5 * sigma), np.max(centre + 9.5 * sigma)
    if points is None:
        points = int(np.clip(np.ceil((high - low) / (0.12 * sigma.min())), 120, 1200))
    x = np.linspace(low, high, points)
    w = np.sum(shares * np.exp(-0.5 * ((x[:, None] - centre) / sigma) ** 2) / sigma, axis=1)
    return Distribution.from_nodes(np.exp(x), w, **more)


def from_averages(
    Mw: float | None = None,
    Mn: float | None = None,
    dispersity: float | None = None,
    Mz: float | None = None,
    family: str = "log-normal",
    **more: Any,
) -> Distribution:
    """The member of a family with given averages [g/mol].

    Two of Mn, Mw and dispersity fix a log-normal or a Schulz-Zimm; the generalised exponential
    takes Mz as third.

    Raises
    ------
    ModelError
        If averages are missing, contradict each other, or no member has them.
    """
    if family not in FAMILIES:
        raise ModelError(f"unknown family {family!r}; use one of {', '.join(FAMILIES)}")
    given = [v is not None for v in (Mw, Mn, dispersity)]
    if sum(given) < 2:
        raise ModelError("give two of Mw, Mn and dispersity")
    if Mw is None:
        Mw = Mn * dispersity  # type: ignore[operator]
    implied = Mw / Mn if Mn is not None else dispersity
    if dispersity is not None and abs(implied / dispersity - 1) > 0.02:  # type: ignore[operator]
        raise ModelError(f"Mw/Mn is {implied:.3g}, not the dispersity given ({dispersity:.3g})")
    _check(Mw, implied)
    if family == "generalised-exponential":
        if Mz is None:
            raise ModelError("the generalised exponential needs Mz as third average")
        a, b, M0 = gex_from_averages(Mw / implied, Mw, Mz)  # type: ignore[operator]
        return generalised_exponential(M0, a, b, **more)
    make: Callable[..., Distribution] = lognormal if family == "log-normal" else schulz_zimm
    return make(Mw, implied, **more)


def gex_averages(a: float, b: float, M0: float) -> tuple[float, float, float]:
    """Mn, Mw, Mz of a generalised exponential from gamma functions."""
    g = [special.gammaln((a + k) / b) for k in range(4)]
    return tuple(float(M0 * np.exp(g[k + 1] - g[k])) for k in range(3))  # type: ignore[return-value]


def gex_from_averages(Mn: float, Mw: float, Mz: float) -> tuple[float, float, float]:
    """Parameters (a, b, M0) of the generalised exponential with these averages.

    Raises
    ------
    ModelError
        If no member has them (the pair of ratios lies outside the family's range).
    """
    want = np.log([Mw / Mn, Mz / Mw])
    if not (want[0] > 0 and want[1] > 0):
        raise ModelError("averages must rise: Mn < Mw < Mz")

    def miss(p: np.ndarray) -> np.ndarray:
        a, b = np.exp(p)
        n, w, z = gex_averages(a, b, 1.0)
        return np.log([w / n, z / w]) - want

    starts = np.log([(1.0, 1.0), (2.0, 0.5), (5.0, 0.3), (0.3, 2.0), (20.0, 0.15)])
    best = optimize.least_squares(miss, starts[0], bounds=GEX_BOUNDS)
    for start in starts[1:]:
        if best.cost < 1e-18:
            break
        found = optimize.least_squares(miss, start, bounds=GEX_BOUNDS)
        best = found if found.cost < best.cost else best
    if best.cost > 1e-9:
        raise ModelError(
            f"no generalised exponential has Mw/Mn {Mw / Mn:.3g} with Mz/Mw {Mz / Mw:.3g}"
        )
    a, b = np.exp(best.x)
    return float(a), float(b), float(Mn / gex_averages(a, b, 1.0)[0])


def _check(Mw: Any, dispersity: Any) -> None:
    if Mw is None or not (np.isfinite(Mw) and Mw > 0):
        raise ModelError("Mw must be positive")
    if dispersity is None or not (np.isfinite(dispersity) and dispersity > 1.0):
        raise ModelError("the dispersity must be greater than 1")


def _nodes(low: float, high: float, points: int | None) -> np.ndarray:
    return np.linspace(low, high, 160 if points is None else int(points))


def _on_nodes(x: np.ndarray, log_density: np.ndarray, **more: Any) -> Distribution:
    w = np.exp(log_density - log_density.max())
    return Distribution.from_nodes(np.exp(x), w, **more)


def _gamma_like(a: float, b: float, scale: float, points: int | None, **more: Any) -> Distribution:
    # per ln M the density is M^(a+1) exp(-(M/M0)^b): (M/M0)^b follows a gamma law of order (a+1)/b
    # by weight and a/b by number
    low = max(float(special.gammaincinv(a / b, 1e-13)), LEAST_RATIO**b)
    high = float(special.gammainccinv((a + 4) / b, 1e-15))
    x = _nodes(np.log(low) / b, np.log(high) / b, points or 240)
    w = np.exp((a + 1) * x - np.exp(b * x))
    below = float(special.gammainc(a / b, low))
    if below < 1e-9:
        return Distribution.from_nodes(scale * np.exp(x), w, **more)
    # the chains below the first node, by weight exactly, at the mass that gives the whole its Mn
    w[0] *= 0.5
    share = float(special.gammainc((a + 1) / b, low))
    w *= (1.0 - share) / w.sum()
    number = np.exp(special.gammaln(a / b) - special.gammaln((a + 1) / b))
    mass = share / (number - float(np.sum(w * np.exp(-x))))
    nodes = np.concatenate([[mass], np.exp(x)])
    return Distribution.from_nodes(scale * nodes, np.concatenate([[share], w]), **more)
