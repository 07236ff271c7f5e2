"""The molecular-weight distribution: with its interval, the window and the blind ranges."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from mwdlink.figures import shading, style
from mwdlink.figures.columns import Absent, band, numbers
from mwdlink.figures.words import listed, number, percent, short, value_of, with_interval

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from pandas import DataFrame

MASS = ("M", "molar mass")
DENSITY = ("dW/dlog10M", "dW/dlog10 M", "w")
X_LABEL = "molar mass M / g mol⁻¹"
Y_LABEL = "dW / d log₁₀M"


def limits(
    mass: np.ndarray, tops: list[np.ndarray], keep: list[float], share: float = 2e-3
) -> tuple[float, float]:
    """M range [g/mol] worth showing: where a curve is above a share of its top, and `keep`."""
    low, high = [], []
    for top in tops:
        seen = mass[np.nan_to_num(top) > share * np.nanmax(top)]
        if seen.size:
            low.append(float(seen[0]))
            high.append(float(seen[-1]))
    lowest, highest = min(low), max(high)
    for x in keep:
        if lowest / 30 < x < highest * 30:
            lowest, highest = min(lowest, x / 1.5), max(highest, x * 1.5)
    return shading.span_of([lowest, highest], 0.03)


@style.styled
def plot_distribution(
    table: DataFrame,
    *,
    window: Mapping[str, Any] | None = None,
    averages: Mapping[str, Any] | None = None,
    level: float = 0.9,
    label: str = "distribution",
    ax: Axes | None = None,
) -> Axes:
    """Weight per decade of M against M, with its interval band.

    Parameters
    ----------
    table : DataFrame
        `M [g/mol]`, `dW/dlog10M` and, where known, `dW/dlog10M low` and `... high`.
    window : mapping, optional
        `M_low_g_per_mol`, `M_high_g_per_mol`: what the sweep can see; the rest is shaded.
    averages : mapping, optional
        `Mn_g_per_mol`, `Mw_g_per_mol`, `Mz_g_per_mol` as numbers or uncertain quantities; each is
        marked on the curve's foot.
    level : float
        Probability of the band, for the legend.
    """
    ax = style.new_axes(ax)
    mass = numbers(table, *MASS)
    density = numbers(table, *DENSITY)
    if mass is None or density is None:
        raise Absent("the table needs the columns M [g/mol] and dW/dlog10M")
    order = np.argsort(mass)
    mass, density = mass[order], density[order]
    between = band(table, *DENSITY)
    edges = _edges(window)
    if between is not None:
        low, high = between[0][order], between[1][order]
        ax.fill_between(
            mass,
            low,
            high,
            color=style.BLUE,
            alpha=0.22,
            linewidth=0,
            label=f"{100 * level:.0f} % interval",
            zorder=2,
        )
    ax.plot(mass, density, color=style.BLUE, label=label, zorder=3)
    tops = [density] if between is None else [density, between[1][order]]
    inside = np.ones(mass.shape, dtype=bool)
    style.log_axis(ax.xaxis)
    # a band may open without bound where nothing is seen: the curve sets the scale
    top = float(np.nanmax(density))
    if between is not None:
        top = min(max(top, float(np.nanmax(between[1][inside]))), 1.8 * top)
    ax.set_xlim(*limits(mass, tops[:1], [e for e in edges if e is not None]))
    ax.set_ylim(0.0, 1.05 * top)
    shading.headroom(ax, 0.16 if any(edges) else 0.05)
    mark_averages(ax, averages)
    if any(e is not None for e in edges):
        shading.window(
            ax,
            *edges,
            inside="window: seen by the sweep",
            below="blind: chains too short",
            above="blind: chains too long",
        )
    ax.set_xlabel(X_LABEL)
    ax.set_ylabel(Y_LABEL)
    style.legend_above(ax)
    return ax


def _edges(window: Mapping[str, Any] | None) -> tuple[float | None, float | None]:
    if not window:
        return None, None
    return value_of(window.get("M_low_g_per_mol")), value_of(window.get("M_high_g_per_mol"))


def mark_averages(ax: Axes, averages: Mapping[str, Any] | None) -> None:
    """Mn, Mw and Mz as ticks on the foot of the picture, named, with a bound's direction."""
    if not averages:
        return
    left, right = ax.get_xlim()
    marks = {"lower_bound": "≥ ", "upper_bound": "≤ ", "assumed": "(", "resolved": ""}
    for key, name in (("Mn_g_per_mol", "Mn"), ("Mw_g_per_mol", "Mw"), ("Mz_g_per_mol", "Mz")):
        x = value_of(averages.get(key))
        if x is None or not left < x < right:
            continue
        entry = averages[key]
        status = entry.get("status", "resolved") if isinstance(entry, Mapping) else "resolved"
        before = marks.get(status, "")
        after = ")" if before == "(" else ""
        ax.plot(
            [x, x],
            [0, 0.035],
            transform=ax.get_xaxis_transform(),
            color=style.INK,
            linewidth=1.4,
            zorder=4,
        )
        ax.text(
            x,
            0.045,
            f"{before}{name}{after}",
            transform=ax.get_xaxis_transform(),
            ha="center",
            va="bottom",
            fontsize=8.0,
            zorder=5,
            bbox={"facecolor": style.PAPER, "edgecolor": "none", "alpha": 0.75, "pad": 0.8},
        )


def describe_distribution(
    table: DataFrame,
    window: Mapping[str, Any] | None = None,
    averages: Mapping[str, Any] | None = None,
) -> str:
    """The picture in words."""
    mass, density = numbers(table, *MASS), numbers(table, *DENSITY)
    if mass is None or density is None:
        return ""
    peak = int(np.nanargmax(density))
    text = f"Highest at {short(mass[peak])} g/mol ({number(density[peak], 2)} per decade)."
    if averages:
        said = [
            f"{name} {with_interval(averages[key], 'g/mol')}"
            for key, name in (
                ("Mn_g_per_mol", "Mn"),
                ("Mw_g_per_mol", "Mw"),
                ("Mz_g_per_mol", "Mz"),
            )
            if value_of(averages.get(key)) is not None
        ]
        if said:
            text += f" {listed(said)}."
    low, high = _edges(window)
    if low is not None and high is not None:
        text += f" The sweep sees {short(low)} to {short(high)} g/mol; outside it is blind."
    return text


@style.styled
def plot_tail(
    joint: DataFrame,
    gpc: DataFrame | None = None,
    *,
    beyond: float | None = None,
    gpc_high: float | None = None,
    window: Mapping[str, Any] | None = None,
    fraction: Any = None,
    level: float = 0.9,
    ax: Axes | None = None,
) -> Axes:
    """The joint distribution with its band beside the GPC's own, on a log scale that shows a tail.

    Parameters
    ----------
    joint, gpc : DataFrame
        `M [g/mol]`, `dW/dlog10M` (joint with low and high).
    beyond : float, optional
        Molar mass the tail begins at [g/mol].
    gpc_high : float, optional
        Last molar mass the GPC supports [g/mol]; left out, the last with signal in its table.
    """
    ax = style.new_axes(ax)
    mass, density = numbers(joint, *MASS), numbers(joint, *DENSITY)
    if mass is None or density is None:
        raise Absent("the table needs the columns M [g/mol] and dW/dlog10M")
    top = float(np.nanmax(density))
    floor = top * 1e-4
    between = band(joint, *DENSITY)
    if between is not None:
        ax.fill_between(
            mass,
            np.maximum(between[0], floor / 10),
            np.maximum(between[1], floor / 10),
            color=style.BLUE,
            alpha=0.22,
            linewidth=0,
            label=f"{100 * level:.0f} % interval",
            zorder=2,
        )
    ax.plot(
        mass,
        np.where(density > floor / 10, density, np.nan),
        color=style.BLUE,
        label="GPC and sweep together",
        zorder=3,
    )
    keep = [x for x in (beyond, gpc_high) if x is not None]
    tops = [density]
    if gpc is not None:
        m, w = numbers(gpc, *MASS), numbers(gpc, *DENSITY)
        if m is not None and w is not None:
            seen = np.where(w > floor / 10, w, np.nan)
            thin = slice(None, None, max(1, int(np.isfinite(seen).sum() // 45)))
            ax.plot(
                m[thin],
                seen[thin],
                **style.data_look(1) | {"markersize": 3.6},
                label="GPC alone",
                zorder=2.5,
            )
            if gpc_high is None and np.isfinite(seen).any():
                gpc_high = (
                    float(m[np.isfinite(seen) & (w > floor)][-1]) if (w > floor).any() else None
                )
    smooth = numbers(joint, "GPC continuation dW/dlog10M", "continuation")
    if smooth is not None:
        ax.plot(
            mass,
            np.where(smooth > floor / 10, smooth, np.nan),
            color=style.INK,
            linewidth=1.0,
            linestyle=style.DASHES[2],
            label="continuation of the GPC",
            zorder=2.6,
        )
    style.log_axes(ax)
    ax.set_xlim(*limits(mass, tops, keep, share=3e-4))
    ax.set_ylim(floor, 1.6 * top)
    shading.headroom(ax, 0.14)
    edges = _edges(window)
    right = ax.get_xlim()[1]
    if gpc_high is not None and gpc_high < right:
        end = min(right, edges[1]) if edges[1] is not None else right
        if end > gpc_high:
            shading.blind_range(ax, gpc_high, end, "blind for the GPC")
        if edges[1] is not None and edges[1] < right:
            shading.blind_range(
                ax, max(edges[1], gpc_high), right, "GPC blind; sweep sees weight, not M"
            )
    if beyond is not None:
        ax.axvline(beyond, color=style.INK, linewidth=1.0, zorder=2.2)
        said = f"beyond {short(beyond)} g/mol"
        if value_of(fraction) is not None:
            said = f"{percent(value_of(fraction))} {said}"
        ax.annotate(
            said,
            (beyond, 0.03),
            xycoords=ax.get_xaxis_transform(),
            xytext=(-4, 0),
            textcoords="offset points",
            ha="right",
            va="bottom",
            fontsize=8.0,
            zorder=5,
            bbox={"facecolor": style.PAPER, "edgecolor": "none", "alpha": 0.8, "pad": 0.8},
        )
    ax.set_xlabel(X_LABEL)
    ax.set_ylabel(Y_LABEL)
    style.legend_above(ax)
    return ax


def describe_tail(joint: DataFrame, tail: Mapping[str, Any] | None) -> str:
    """The picture in words."""
    text = (
        "The distribution read from GPC and sweep together, beside the GPC's own, on a log scale."
    )
    if not tail:
        return text
    share = tail.get("fraction")
    beyond = value_of(tail.get("M_g_per_mol"))
    if value_of(share) is not None and beyond is not None:
        text += f" Beyond {short(beyond)} g/mol lie {_share(share)}."
    limit = value_of(tail.get("detection_limit"))
    if limit is not None:
        text += f" The smallest tail these data could show is {percent(limit)}."
    return text


def _share(share: Any) -> str:
    scaled = (
        {
            k: (100.0 * v if k in ("value", "low", "high") and v is not None else v)
            for k, v in share.items()
        }
        if (isinstance(share, Mapping))
        else 100.0 * float(share)
    )
    return with_interval(scaled, "wt%")
