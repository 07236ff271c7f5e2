"""Blends: a property against the fraction."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from mwdlink.figures import shading, style
from mwdlink.figures.columns import Absent, band, bare, find, numbers, unit
from mwdlink.figures.words import interval_of, listed, number, percent, short, value_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from pandas import DataFrame

PROPERTY_WORDS = {
    "eta0": "zero-shear viscosity η₀",
    "Je0": "steady compliance Je⁰",
    "MFR": "melt flow rate",
    "crossover omega": "crossover frequency",
    "crossover G": "crossover modulus",
    "mean time": "mean time",
}


def fraction_header(table: DataFrame) -> str | None:
    """Header of the first fraction column."""
    for h in map(str, table.columns):
        if re.match(r"(weight )?fraction\b|phi\b|w\b", bare(h)):
            return h
    return None


def property_headers(table: DataFrame) -> list[str]:
    """Headers of the properties: all number columns but fractions, lows and highs."""
    out = []
    for h in map(str, table.columns):
        name = bare(h)
        if re.match(r"(weight )?fraction\b|phi\b|w\b", name) or name.endswith((" low", " high")):
            continue
        if numbers(table, h) is not None:
            out.append(h)
    return out


def property_words(header: str) -> str:
    """A property column's name in words, without its unit."""
    name = bare(header)
    words_ = PROPERTY_WORDS.get(name)
    if words_ is None:
        match = re.match(
            r"(MFR|eta|viscosity|tan delta|\|eta\*\|)[\s_@]+(?:at )?([\d.eE+-]+)\s*(.*)$", name
        )
        if match:
            kind = {
                "MFR": "melt flow rate",
                "tan delta": "tan δ",
                "|eta*|": "|η*|",
            }.get(match[1], "viscosity")
            at = match[3] or ("kg" if match[1] == "MFR" else "rad/s")
            words_ = f"{kind} at {match[2]} {at}"
        else:
            words_ = name.replace("_", " ")
    return words_


def property_label(header: str) -> str:
    """Axis label of a property column: quantity / unit."""
    of = unit(header).replace("10min", "10 min").replace("10 min", "(10 min)")
    return (
        f"{property_words(header)} / {of}"
        if of and of not in {"-", "1"}
        else property_words(header)
    )


def target_header(table: DataFrame, target: Any) -> str | None:
    """Header of the column a target speaks of (`viscosity_Pa_s@0.1` is `eta 0.1 [Pa s]`)."""
    if not isinstance(target, Mapping) or not target.get("quantity"):
        return None
    quantity = str(target["quantity"])
    name, _, at = quantity.partition("@")
    stems = {
        "viscosity_Pa_s": ("eta", "viscosity", "|eta*|"),
        "eta0_Pa_s": ("eta0",),
        "MFR_g_per_10min": ("MFR",),
        "tan_delta": ("tan delta", "tan_delta"),
        "crossover_omega_rad_per_s": ("crossover omega", "omega crossover"),
    }
    for stem in stems.get(name, (name,)):
        ends = ("", " rad/s", " kg")
        spellings = (
            [f"{stem}{gap}{at}{end}" for gap in (" ", "@", " at ") for end in ends]
            if at
            else [stem]
        )
        found = find(table, *spellings)
        if found is not None:
            return found
    return None


def range_of(target: Any) -> tuple[float | None, float | None] | None:
    """Ends of the range a target asks for, if it asks for one."""
    ends = target.get("range") if isinstance(target, Mapping) else None
    if not isinstance(ends, Mapping):
        return None
    return value_of(ends.get("low")), value_of(ends.get("high"))


def range_words(ends: tuple[float | None, float | None]) -> str:
    """`1e4 to 2e4`, `up to 2e4` or `from 1e4`."""
    low, high = ends
    if low is None:
        return f"up to {short(high or 0.0)}"
    return f"from {short(low)}" if high is None else f"{short(low)} to {short(high)}"


@style.styled
def plot_property(
    table: DataFrame,
    header: str | None = None,
    *,
    target: Mapping[str, Any] | None = None,
    fraction: float | None = None,
    component: str = "",
    level: float = 0.9,
    ax: Axes | None = None,
) -> Axes:
    """A property against the fraction: band, target's line, and the fractions that meet it.

    Parameters
    ----------
    table : DataFrame
        `fraction A [-]` and property columns, low and high where known.
    header : str, optional
        Property column; the first one unless given.
    target : mapping, optional
        `wanted` (in the column's unit) and `fractions` (uncertain quantities); or `range` {low,
        high} and `windows` [{low, high}], the fractions over which it is kept.
    fraction : float, optional
        The fraction of the blend whose curves are shown, marked.
    """
    ax = style.new_axes(ax, height=74.0)
    x_header = fraction_header(table)
    header = header or property_headers(table)[0]
    x, y = numbers(table, x_header or ""), numbers(table, header)
    if x is None or y is None:
        raise Absent("the table needs a fraction and a property column")
    x = 100.0 * x if unit(x_header or "") not in {"%", "wt%"} else x
    between = band(table, bare(header))
    ys = [float(v) for v in y[np.isfinite(y)]]
    if between is not None:
        ax.fill_between(
            x,
            *between,
            color=style.BLUE,
            alpha=0.22,
            linewidth=0,
            label=f"{100 * level:.0f} % interval",
        )
        ys += [float(v) for b in between for v in b[np.isfinite(b)]]
    ax.plot(x, y, color=style.BLUE, label="prediction")
    wanted = value_of((target or {}).get("wanted"))
    rising = bool(y[np.argmax(x)] > y[np.argmin(x)])
    if wanted is not None:
        ax.axhline(
            wanted,
            color=style.VERMILION,
            linestyle=style.DASHES[1],
            linewidth=1.2,
            label=f"target {short(wanted)}",
        )
        ys.append(wanted)
        for found in (target or {}).get("fractions") or []:
            at, span = value_of(found), interval_of(found)
            if at is None:
                continue
            if span is not None:
                ax.plot(
                    [100 * s for s in span],
                    [wanted, wanted],
                    color=style.VERMILION,
                    linewidth=4.5,
                    alpha=0.45,
                    solid_capstyle="butt",
                    zorder=3,
                )
            ax.plot(
                [100 * at],
                [wanted],
                marker="D",
                color=style.VERMILION,
                markerfacecolor=style.PAPER,
                zorder=4,
                linestyle="none",
            )
            # near the right edge the label stands on the other side of its mark, off the curve
            inside = at < 0.85
            above = not rising if inside else rising
            ax.annotate(
                f"{short(100 * at)} %",
                (100 * at, wanted),
                xytext=(5 if inside else -5, 5 if above else -6),
                ha="left" if inside else "right",
                va="bottom" if above else "top",
                textcoords="offset points",
                fontsize=8.0,
            )
    ends = range_of(target)
    if ends is not None:
        ys += [v for v in ends if v is not None]
        floor, top = min(ys), max(ys)
        low, high = (floor if ends[0] is None else ends[0]), (top if ends[1] is None else ends[1])
        ax.axhspan(
            low,
            high,
            color=style.VERMILION,
            alpha=0.10,
            linewidth=0,
            zorder=0,
            label=f"target {range_words(ends)}",
        )
        for w in (target or {}).get("windows") or []:
            a, b = value_of(w.get("low")), value_of(w.get("high"))
            if a is None or b is None:
                continue
            kept = (x >= 100 * a - 1e-9) & (x <= 100 * b + 1e-9)
            ax.plot(x[kept], y[kept], color=style.VERMILION, linewidth=3.2, zorder=3)
    if fraction is not None:
        ax.axvline(
            100 * fraction,
            color=style.INK,
            linewidth=0.9,
            linestyle=(0, (1.2, 1.2)),
            zorder=1,
            label=f"this blend: {short(100 * fraction)} %",
        )
    if min(ys) > 0 and max(ys) / min(ys) > 3:
        style.log_axis(ax.yaxis)
        ax.set_ylim(*shading.span_of(ys, 0.06))
    ax.set_xlim(0, 100)
    name = component or re.sub(
        r"^(weight )?fraction\b|^phi\b|^w\b", "", bare(x_header or "")
    ).strip(" _")
    ax.set_xlabel(f"fraction of {name} / wt%" if name else "fraction / wt%")
    ax.set_ylabel(property_label(header))
    style.legend_above(ax)
    return ax


def describe_property(
    table: DataFrame, header: str, target: Mapping[str, Any] | None = None
) -> str:
    """The picture in words."""
    x, y = numbers(table, fraction_header(table) or ""), numbers(table, header)
    if x is None or y is None:
        return ""
    good = np.flatnonzero(np.isfinite(x) & np.isfinite(y))
    first, last = good[np.argmin(x[good])], good[np.argmax(x[good])]
    of = f" {unit(header)}" if unit(header) not in {"", "-"} else ""
    text = (
        f"{number(y[first])}{of} at {percent(x[first])}, {number(y[last])}{of} at "
        f"{percent(x[last])}."
    )
    wanted = value_of((target or {}).get("wanted"))
    if wanted is not None:
        met = [
            percent(value_of(f))
            for f in (target or {}).get("fractions") or []
            if value_of(f) is not None
        ]
        text += (
            f" The target {number(wanted)} is met at {listed(met)}."
            if met
            else f" The target {number(wanted)} is not met."
        )
    ends = range_of(target)
    if ends is not None:
        kept = [
            f"{percent(value_of(w.get('low')))} to {percent(value_of(w.get('high')))}"
            for w in (target or {}).get("windows") or []
        ]
        text += (
            f" The target {range_words(ends)} is kept from {listed(kept)}."
            if kept
            else f" The target {range_words(ends)} is not met."
        )
    return text
