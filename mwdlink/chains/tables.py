"""From the columns of a table to weights in cells: kinds of curve, order, baseline, areas."""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy.interpolate import PchipInterpolator

from mwdlink.errors import Caution, InputError

KINDS = (
    "dW/dlog10M",
    "dW/dlnM",
    "dW/dM",
    "cumulative",
    "slice_weight",
    "dN/dlog10M",
    "dN/dlnM",
    "dN/dM",
    "slice_number",
)
LN10 = float(np.log(10.0))


def edges_between(molar_mass: np.ndarray) -> np.ndarray:
    """Edges halfway in log M between nodes, half a cell beyond the ends.

    Parameters
    ----------
    molar_mass : ndarray of shape (n,)
        Nodes [g/mol], ascending.

    Returns
    -------
    ndarray of shape (n + 1,)
    """
    x = np.log(molar_mass)
    if x.size == 1:
        # one node is a monodisperse melt: a cell narrow enough to count as a step
        return np.exp(np.array([x[0] - 1e-4, x[0] + 1e-4]))
    middle = 0.5 * (x[1:] + x[:-1])
    first = x[0] - (middle[0] - x[0])
    last = x[-1] + (x[-1] - middle[-1])
    return np.exp(np.concatenate([[first], middle, [last]]))


def resampled(molar_mass: np.ndarray, density: np.ndarray, at: np.ndarray) -> np.ndarray:
    """A curve at other molar masses, >= 0 and without overshoot, zero beyond its ends.

    Parameters
    ----------
    molar_mass, density : ndarray of shape (n,)
        [g/mol], [-]
    at : ndarray of shape (m,)
        [g/mol]
    """
    curve = PchipInterpolator(np.log(molar_mass), density, extrapolate=False)
    return np.nan_to_num(curve(np.log(at)), nan=0.0)


def weights_from_table(
    molar_mass: Any, values: Any, kind: str
) -> tuple[np.ndarray, np.ndarray, np.ndarray, list[Caution]]:
    """Nodes, weights, edges and what was done to the table; see `Distribution.from_table`."""
    if kind not in KINDS:
        raise InputError(
            f"unknown kind of distribution {kind!r}.", remedy="Use one of " + ", ".join(KINDS) + "."
        )
    m = np.asarray(molar_mass, dtype=float)
    v = np.asarray(values, dtype=float)
    if m.ndim != 1 or m.shape != v.shape:
        raise InputError("molar masses and values must be two columns of the same length")
    if not (np.all(np.isfinite(m)) and np.all(np.isfinite(v))):
        raise InputError("the distribution holds a number that is not finite")
    if np.any(m <= 0):
        raise InputError("molar masses must be positive")
    if m.size < 3:
        raise InputError(
            f"a distribution needs at least 3 rows, this one has {m.size}.",
            remedy="Give averages instead, or export more of the curve.",
        )
    notes: list[Caution] = []
    m, v = _in_order(m, v, kind, notes)
    if kind == "cumulative":
        nodes, mass, edges = _from_cumulative(m, v, notes)
    else:
        nodes, mass, edges = _from_differential(m, v, kind, notes)
    return nodes, mass, edges, notes


def _in_order(
    m: np.ndarray, v: np.ndarray, kind: str, notes: list[Caution]
) -> tuple[np.ndarray, np.ndarray]:
    steps = np.diff(m)
    if np.all(steps < 0):
        m, v = m[::-1].copy(), v[::-1].copy()
    elif not np.all(steps > 0):
        order = np.argsort(m, kind="stable")
        backwards = int(min(np.sum(steps <= 0), np.sum(steps >= 0)))
        m, v = m[order], v[order]
        notes.append(
            Caution(
                "molar_mass_sorted",
                f"The molar masses are not monotonic ({backwards} steps against the trend, as "
                "light scattering gives at the ends of a peak); rows were sorted by M.",
            )
        )
        same = np.diff(m) == 0
        if np.any(same):
            start = np.concatenate([[True], ~same])
            group = np.cumsum(start) - 1
            count = np.bincount(group)
            total = np.bincount(group, weights=v)
            # slices of one molar mass add up; points of one curve are averaged
            v = total if kind.startswith("slice") else total / count
            m = m[start]
            notes.append(
                Caution(
                    "molar_mass_merged",
                    f"{int(same.sum())} rows repeat a molar mass and were merged.",
                )
            )
            if m.size < 3:
                raise InputError("fewer than 3 different molar masses in the distribution")
    return m, v


def _zero_negative(v: np.ndarray, weight: np.ndarray, notes: list[Caution]) -> np.ndarray:
    negative = v < 0
    if np.any(negative):
        lost = float(-np.sum(v[negative] * weight[negative]))
        kept = float(np.sum(v[~negative] * weight[~negative]))
        if not kept > 0:
            raise InputError(
                "the distribution holds no positive weight.",
                remedy="Check the sign of the detector signal and the baseline.",
            )
        share = lost / kept
        notes.append(
            Caution(
                "negative_slices",
                f"{int(negative.sum())} rows are negative ({100 * share:.2g} % of the area), a "
                "baseline matter; they were set to zero. The baseline's error on the other side "
                "of zero stays in the curve.",
            )
        )
        if share > 0.2:
            raise InputError(
                f"{100 * share:.0f} % of the area is negative.",
                remedy="Redraw the baseline before exporting the curve.",
            )
        v = np.where(negative, 0.0, v)
    return v


def _from_differential(
    m: np.ndarray, v: np.ndarray, kind: str, notes: list[Caution]
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    edges = edges_between(m)
    if kind.startswith("slice"):
        weight = np.ones_like(m)
        width = weight
    else:
        # trapezoid rule: half cells at the ends
        x = np.log10(m)
        step = np.diff(x)
        weight = np.zeros_like(x)
        weight[:-1] += 0.5 * step
        weight[1:] += 0.5 * step
        width = weight
        edges = edges.copy()
        edges[0], edges[-1] = m[0], m[-1]
        # the end nodes stand on the edge of their half cells; a hair inside keeps nodes in cells
        edges[0] *= 1 - 1e-9
        edges[-1] *= 1 + 1e-9
        if kind.endswith("dlnM"):
            weight = weight * LN10
        elif kind.endswith("dM"):
            weight = weight * LN10 * m
    if kind in ("dN/dlog10M", "dN/dlnM", "dN/dM", "slice_number"):
        weight = weight * m
    v = _zero_negative(v, weight, notes)
    mass = v * weight
    area = float(mass.sum())
    if not area > 0:
        raise InputError("the distribution holds no weight (all values are zero).")
    if kind in ("dW/dlog10M", "dW/dlnM", "dW/dM"):
        _judge_area(area, kind, notes)
    # heights, not weights: the end cells are half as wide as the others
    _judge_ends(mass / width, notes)
    return m, mass / area, edges


def _judge_area(area: float, kind: str, notes: list[Caution]) -> None:
    for scale in (1.0, 100.0):
        a = area / scale
        near = abs(a - LN10) < 0.12 or abs(a - 1 / LN10) < 0.03
        if near and kind != "dW/dM":
            other = "ln" if kind == "dW/dlog10M" else "log10"
            notes.append(
                Caution(
                    "ln_log10_mixup",
                    f"The area under {kind} is {a:.3f}, not 1: that is ln 10 or its inverse, so "
                    f"the column may be per {other} M. It makes no difference here: the curve is "
                    "normalised, and both have the same shape.",
                )
            )
            return
        if abs(a - 1) < 0.02:
            if scale == 100.0:
                notes.append(Caution("percent", "The curve sums to 100: read as percent."))
            return
    notes.append(Caution("normalised", f"The area under {kind} is {area:.4g}; normalised to 1."))


# a curve that ends higher than this share of its highest point is cut; at the high end less will
# do, because the longest chains make the viscosity (a log-normal of dispersity 4 that is cut at 5 %
# loses 45 % of it, at 3 % 35 %; computed)
CUT_LOW, CUT_HIGH = 0.1, 0.02


def _judge_ends(height: np.ndarray, notes: list[Caution]) -> None:
    top = float(height.max())
    for name, value, most in (("low", height[0], CUT_LOW), ("high", height[-1], CUT_HIGH)):
        if value > most * top and height.size > 3:
            text = (
                f"The curve does not come down at its {name} end ({100 * value / top:.0f} % of "
                "its highest point): part of the distribution is outside the table."
            )
            if name == "high":
                text += (
                    " What is missing there are the longest chains: zero-shear viscosity, "
                    "compliance and relaxation times read from the table are too low, and no "
                    "interval holds that."
                )
            notes.append(Caution(f"cut_at_{name}_end", text))


def _from_cumulative(
    m: np.ndarray, v: np.ndarray, notes: list[Caution]
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    span = float(v.max() - v.min())
    if not span > 0:
        raise InputError("the cumulative curve does not rise")
    if v[0] > v[-1]:
        # weight above M: what lies beyond the rows shows only against the whole, 1 or 100
        whole = float(v.max())
        for total in (1.0, 100.0):
            if 0.5 * total < whole <= 1.005 * total:
                whole = max(whole, total)
        v = whole - v
        notes.append(
            Caution("cumulative_falls", "The cumulative curve falls with M: read as weight above.")
        )
    top = float(v[-1])
    scale = 100.0 if 80.0 < top <= 101.0 else 1.0
    if scale == 100.0:
        notes.append(Caution("percent", "The curve ends near 100: read as percent."))
    v = v / scale
    if not 0.98 <= v[-1] <= 1.005:
        notes.append(
            Caution("normalised", f"The cumulative curve ends at {v[-1]:.4g}; normalised to 1.")
        )
    step = np.diff(v)
    step = _zero_negative(step, np.ones_like(step), notes)
    first = float(v[0])
    if first > 0.005 * v[-1]:
        notes.append(
            Caution(
                "cumulative_starts_above_zero",
                f"{100 * first / v[-1]:.2g} % of the weight lies below the first row; it is put at "
                "the first molar mass.",
            )
        )
    nodes = np.sqrt(m[:-1] * m[1:])
    mass = step.copy()
    if first > 0:
        mass[0] += first
    return nodes, mass / mass.sum(), m
