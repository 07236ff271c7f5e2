"""Many lots in order: one quantity with its intervals, control limits and the lots outside them."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from mwdlink.figures import style
from mwdlink.figures.blend import property_label
from mwdlink.figures.columns import Absent, band, bare, find, numbers, words
from mwdlink.figures.words import listed, number, value_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from pandas import DataFrame

LOT = ("lot", "sample", "name", "input", "path")
WANTED = ("Mw", "eta0", "Mz")


def trend_header(table: DataFrame) -> str | None:
    """The quantity shown unless another is asked for."""
    return find(table, *WANTED)


@style.styled
def plot_trend(
    table: DataFrame,
    header: str | None = None,
    *,
    limits: Mapping[str, Any] | None = None,
    ax: Axes | None = None,
) -> Axes:
    """A quantity over lots.

    Parameters
    ----------
    table : DataFrame
        One row a lot: `lot`, the quantity with low and high where known, and `outlying` where
        judged.
    limits : mapping, optional
        `centre`, `low`, `high`: the control limits, in the column's unit.
    """
    ax = style.new_axes(ax, height=74.0)
    header = header or trend_header(table)
    y = numbers(table, header or "")
    if header is None or y is None:
        raise Absent("the table needs a quantity to show")
    x = np.arange(1, len(y) + 1)
    between = band(table, bare(header))
    if between is not None and len(y) <= 120:
        ax.vlines(x, *between, color=style.SOFT, linewidth=0.9, label="interval", zorder=2)
    elif between is not None:
        ax.fill_between(x, *between, color=style.BLUE, alpha=0.22, linewidth=0, label="interval")
    centre, low, high = (value_of((limits or {}).get(k)) for k in ("centre", "low", "high"))
    flagged = outlying(table, y, low, high)
    inside = np.isfinite(y) & ~flagged
    size = 4.5 if len(y) <= 120 else 2.2
    ax.plot(
        x[inside], y[inside], **style.data_look(0) | {"markersize": size}, label="lot", zorder=3
    )
    if flagged.any():
        ax.plot(
            x[flagged],
            y[flagged],
            marker="X",
            color=style.VERMILION,
            markersize=7.0,
            linestyle="none",
            zorder=4,
            label="outside the limits",
        )
        names = words(table, *LOT) or [str(i) for i in x]
        for k in np.flatnonzero(flagged)[:12]:
            right = x[k] < 0.75 * len(y)
            ax.annotate(
                names[k][-24:],
                (x[k], y[k]),
                xytext=(7 if right else -7, 0),
                ha="left" if right else "right",
                va="center",
                textcoords="offset points",
                fontsize=8.0,
            )
    if centre is not None:
        ax.axhline(centre, color=style.INK, linewidth=0.9, zorder=1, label="centre")
    for k, limit in enumerate((low, high)):
        if limit is not None:
            ax.axhline(
                limit,
                color=style.INK,
                linewidth=0.9,
                linestyle=(0, (4, 2)),
                zorder=1,
                label="control limits" if k == 0 else None,
            )
    ax.set_xlim(0.4, len(y) + 0.6)
    if len(y) <= 15:
        ax.set_xticks(x)
    style.linear_axis(ax.yaxis)
    ax.set_xlabel("lot, in the order of the table")
    ax.set_ylabel(property_label(header))
    style.legend_above(ax)
    return ax


def outlying(table: DataFrame, y: np.ndarray, low: float | None, high: float | None) -> np.ndarray:
    """Which rows were judged outside: the table's own word, else the limits given."""
    marked = find(table, "outlying", "outside", "out of control")
    if marked is not None:
        return np.array(
            [str(v).strip().casefold() in {"true", "yes", "1", "1.0"} for v in table[marked]]
        ) & np.isfinite(y)
    out = np.zeros(y.shape, dtype=bool)
    if low is not None:
        out |= y < low
    if high is not None:
        out |= y > high
    return out & np.isfinite(y)


def describe_trend(
    table: DataFrame, header: str | None = None, limits: Mapping[str, Any] | None = None
) -> str:
    """The picture in words."""
    header = header or trend_header(table)
    y = numbers(table, header or "")
    if header is None or y is None:
        return ""
    low, high = (value_of((limits or {}).get(k)) for k in ("low", "high"))
    flagged = np.flatnonzero(outlying(table, y, low, high))
    names = words(table, *LOT) or [str(i + 1) for i in range(len(y))]
    text = (
        f"{bare(header)} of {len(y)} lots, from {number(np.nanmin(y))} to {number(np.nanmax(y))}."
    )
    if flagged.size:
        return f"{text} Outside the limits: {listed([names[k] for k in flagged[:8]])}."
    return f"{text} No lot is outside the limits." if low is not None or high is not None else text
