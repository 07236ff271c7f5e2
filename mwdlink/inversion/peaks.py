"""Peaks of a distribution that the data insist on, not its ripple.

A maximum counts as a peak when it stands clearly above the valleys beside it, holds some weight,
and returns in most members of the ensemble, with every kernel that fits: a narrow melt read with a
kernel that is too sharp fits well and shows a second peak that is not there (made by the power-law
kernel, read by the exponential one: a third of the weight at a quarter of the molar mass). The
weight of a peak is what lies between its valleys; the outermost peaks take what lies beyond the
nodes on their side.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from mwdlink.inversion.window import Window
from mwdlink.quantity import finite, quantiles

# a valley must be lower than this share of the smaller of the two peaks it parts
DEEPEST_SHARE = 0.90
# a peak with less weight than this is not spoken of
LEAST_WEIGHT = 0.01
# share of all members, and of each kernel's, in which a peak must return
PERSISTENCE, PERSISTENCE_EACH = 0.6, 0.3


@dataclass(frozen=True)
class Peak:
    """A peak of dW/dlog10 M.

    Attributes
    ----------
    molar_mass, molar_mass_low, molar_mass_high : float
        Position of the maximum [g/mol] and its interval over the members.
    fraction, fraction_low, fraction_high : float
        Weight between the valleys on both sides [-], of all chains.
    width_decades : float or None
        Full width at half height [decades of M]; None where a valley or the end of the nodes
        comes before half height on both sides.
    height : float
        dW/dlog10 M at the maximum [-].
    persistence : float
        Share of the members that show it [-]; NaN (in JSON null) without members.
    at_edge : bool
        Whether it lies where the data do not resolve molar mass (outside the window).
    """

    molar_mass: float
    molar_mass_low: float
    molar_mass_high: float
    fraction: float
    fraction_low: float
    fraction_high: float
    width_decades: float | None
    height: float
    persistence: float
    at_edge: bool

    def to_dict(self) -> dict[str, Any]:
        """JSON form; molar masses in g/mol."""
        return {
            "M_g_per_mol": finite(self.molar_mass),
            "M_low_g_per_mol": finite(self.molar_mass_low),
            "M_high_g_per_mol": finite(self.molar_mass_high),
            "fraction": finite(self.fraction),
            "fraction_low": finite(self.fraction_low),
            "fraction_high": finite(self.fraction_high),
            "width_decades": finite(self.width_decades),
            "persistence": finite(self.persistence),
            "at_edge": self.at_edge,
        }


@dataclass(frozen=True)
class _Top:
    """A maximum: node of the top, first and last node of its basin."""

    top: int
    first: int
    last: int


def find_peaks(
    nodes: np.ndarray,
    density_members: np.ndarray | None,
    density_central: np.ndarray,
    window: Window | None = None,
    *,
    level: float = 0.9,
    weights: np.ndarray | None = None,
    groups: np.ndarray | None = None,
    above_members: np.ndarray | None = None,
    above_central: float = 0.0,
) -> list[Peak]:
    """Peaks of the central curve that persist over the members, by ascending molar mass.

    Parameters
    ----------
    nodes : ndarray of shape (n,)
        Molar masses [g/mol], uniform in log10.
    density_members : ndarray of shape (m, n) or None
        dW/dlog10 M of the members [-].
    density_central : ndarray of shape (n,)
        dW/dlog10 M [-].
    window : Window, optional
        Its `low` and `high` decide the edge flag; without it only the end nodes do.
    level : float
        Of the intervals.
    weights : ndarray of shape (m,), optional
        Weight of each member.
    groups : ndarray of shape (m,), optional
        Label of each member's kernel: a peak must return, if less often, within every group.
    above_members : ndarray of shape (m,), optional
        Weight of each member beyond the last node [-]; zero unless given. What is then missing
        from one lies below the first node.
    above_central : float
        The same of the central curve [-].

    Returns
    -------
    list of Peak
    """
    x = np.log10(np.asarray(nodes, dtype=float))
    step = float(x[1] - x[0])
    central = np.asarray(density_central, dtype=float)
    tops = _tops(central, step)
    members = None if density_members is None else np.atleast_2d(density_members)
    lump = np.array([above_central])
    if members is None or members.shape[0] == 0:
        alone = [float(_weight(central[None], t, step, lump)[0]) for t in tops]
        return [
            _peak(x, central, t, f, None, None, float("nan"), window, level)
            for t, f in zip(tops, alone, strict=True)
        ]
    share = np.ones(len(members)) if weights is None else np.asarray(weights, dtype=float)
    share = share / share.sum()
    labels = np.zeros(len(members), dtype=int) if groups is None else np.asarray(groups)
    kinds = [labels == g for g in np.unique(labels)]
    while True:
        found = [_matches(members, t, step) for t in tops]
        persistence = [float(share[f[0]].sum()) for f in found]
        each = [_least_share(f[0], share, kinds) for f in found]
        # in units of what is asked of it, the weaker of the two counts
        standing = [
            min(p / PERSISTENCE, e / PERSISTENCE_EACH)
            for p, e in zip(persistence, each, strict=True)
        ]
        weakest = int(np.argmin(standing)) if tops else 0
        if len(tops) < 2 or standing[weakest] >= 1.0:
            break
        tops = _without(tops, weakest, central)
    beyond = np.zeros(len(members)) if above_members is None else np.asarray(above_members)
    out = []
    for top, (held, at), kept in zip(tops, found, persistence, strict=True):
        fraction = float(_weight(central[None], top, step, lump)[0])
        position = np.array([_summit(x, members[i], j) for i, j in zip(held, at, strict=True)])
        weight = _weight(members, top, step, beyond)
        spread = (position, share[held])
        out.append(_peak(x, central, top, fraction, spread, (weight, share), kept, window, level))
    return out


def _weight(members: np.ndarray, top: _Top, step: float, above: np.ndarray) -> np.ndarray:
    """Weight of a basin in each member; the outermost basins hold what lies beyond the nodes."""
    weight = members[:, top.first : top.last + 1].sum(axis=1) * step
    if top.first == 0:
        weight = weight + np.clip(1.0 - members.sum(axis=1) * step - above, 0.0, 1.0)
    if top.last == members.shape[1] - 1:
        weight = weight + above
    return np.clip(weight, 0.0, 1.0)


def _least_share(held: np.ndarray, share: np.ndarray, kinds: list[np.ndarray]) -> float:
    """Share of the members held, in the group where it is smallest."""
    shows = np.zeros(share.size, dtype=bool)
    shows[held] = True
    parts = [share[k & shows].sum() / share[k].sum() for k in kinds if share[k].sum() > 0]
    return float(min(1.0, *parts))


def _tops(density: np.ndarray, step: float) -> list[_Top]:
    """Maxima that stand above their valleys and hold weight."""
    padded = np.concatenate([[-np.inf], density, [-np.inf]])
    rises, falls = padded[1:-1] > padded[:-2], padded[1:-1] >= padded[2:]
    at = [int(i) for i in np.flatnonzero(rises & falls)]
    tops = _basins(at, density)
    while len(tops) > 1:
        # the shallowest valley first: its smaller peak joins the neighbour
        ratios = []
        for a, b in zip(tops[:-1], tops[1:], strict=True):
            smaller = min(density[a.top], density[b.top])
            valley = density[a.top : b.top + 1].min()
            ratios.append(valley / smaller if smaller > 0 else 1.0)
        worst = int(np.argmax(ratios))
        if ratios[worst] > DEEPEST_SHARE:
            a, b = tops[worst], tops[worst + 1]
            tops = _without(tops, worst if density[a.top] < density[b.top] else worst + 1, density)
            continue
        held = [float(density[t.first : t.last + 1].sum()) * step for t in tops]
        least = int(np.argmin(held))
        if held[least] >= LEAST_WEIGHT:
            break
        tops = _without(tops, least, density)
    return tops


def _basins(at: list[int], density: np.ndarray) -> list[_Top]:
    cuts = [0]
    for a, b in zip(at[:-1], at[1:], strict=True):
        cuts.append(a + int(np.argmin(density[a : b + 1])))
    cuts.append(density.size - 1)
    return [
        _Top(top, cuts[i] if i == 0 else cuts[i] + 1, cuts[i + 1]) for i, top in enumerate(at)
    ]


def _without(tops: list[_Top], index: int, density: np.ndarray) -> list[_Top]:
    return _basins([t.top for i, t in enumerate(tops) if i != index], density)


def _matches(members: np.ndarray, top: _Top, step: float) -> tuple[np.ndarray, np.ndarray]:
    """Members with a peak of their own in this basin, and the node of it."""
    held, at = [], []
    for i, density in enumerate(members):
        inside = [t.top for t in _tops(density, step) if top.first <= t.top <= top.last]
        if inside:
            held.append(i)
            at.append(max(inside, key=lambda j: density[j]))
    return np.array(held, dtype=int), np.array(at, dtype=int)


def _summit(x: np.ndarray, density: np.ndarray, top: int) -> float:
    """Position of a maximum between nodes, by a parabola through ln density."""
    if 0 < top < x.size - 1 and density[top - 1 : top + 2].min() > 0:
        left, middle, right = np.log(density[top - 1 : top + 2])
        bend = left - 2 * middle + right
        if bend < 0:
            return float(x[top] + 0.5 * (left - right) / bend * (x[1] - x[0]))
    return float(x[top])


def _half_width(x: np.ndarray, density: np.ndarray, top: _Top) -> float | None:
    """Full width at half height inside the basin; twice one side where the other has no half."""
    half = 0.5 * density[top.top]

    def side(step: int, end: int) -> float | None:
        i = top.top
        while i != end:
            if density[i + step] <= half:
                share = (density[i] - half) / max(density[i] - density[i + step], 1e-300)
                return float(abs(x[i] - x[top.top]) + share * (x[1] - x[0]))
            i += step
        return None

    left, right = side(-1, top.first), side(1, top.last)
    if left is None:
        return None if right is None else 2.0 * right
    return 2.0 * left if right is None else left + right


def _peak(
    x: np.ndarray,
    density: np.ndarray,
    top: _Top,
    fraction: float,
    position: tuple[np.ndarray, np.ndarray] | None,
    weight: tuple[np.ndarray, np.ndarray] | None,
    persistence: float,
    window: Window | None,
    level: float,
) -> Peak:
    ends = [(1 - level) / 2, (1 + level) / 2]
    at = _summit(x, density, top.top)
    low = high = at
    if position is not None and position[0].size:
        a, b = quantiles(position[0], ends, position[1])
        low, high = min(at, float(a)), max(at, float(b))
    few = more = fraction
    if weight is not None:
        a, b = quantiles(weight[0], ends, weight[1])
        few, more = min(fraction, float(a)), max(fraction, float(b))
    edge = top.top in (0, x.size - 1)
    if window is not None:
        edge = edge or not window.low <= 10**at <= window.high
    return Peak(
        10**at,
        10**low,
        10**high,
        fraction,
        few,
        more,
        _half_width(x, density, top),
        float(density[top.top]),
        persistence,
        bool(edge),
    )
