"""Storage and loss modulus, phase angle and residuals: what was measured against what is said."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from mwdlink.figures import shading, style
from mwdlink.figures.columns import Absent, band, find, numbers, positive, unit, words
from mwdlink.figures.words import number, short, upper_first

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from pandas import DataFrame

FREQUENCY = ("omega", "angular frequency")
SYMBOLS = (("G'", "G′"), ("G''", "G″"))
X_LABEL = "angular frequency ω / rad s⁻¹"
DEEPEST = 9.0
"""Decades below its top a model line is followed: the terminal slope needs no more."""


def measured(name: str) -> tuple[str, ...]:
    return (f"{name} measured", f"{name} data", f"measured {name}")


def modelled(name: str) -> tuple[str, ...]:
    return (f"{name} model", f"{name} fit", f"{name} fitted", f"{name} predicted", f"model {name}")


def columns_of(
    table: DataFrame, name: str
) -> tuple[np.ndarray | None, np.ndarray | None, str | None]:
    """Data column, model column and the name a band stands under, for G' or G''.

    A plain `G' [Pa]` is data where a model column stands beside it, else the model.
    """
    data, model = numbers(table, *measured(name)), numbers(table, *modelled(name))
    plain = numbers(table, name)
    if data is None and model is not None and plain is not None:
        data = plain
    elif model is None and plain is not None:
        model = plain
    for candidate in (*modelled(name), name):
        if band(table, candidate) is not None:
            return data, model, candidate
    return data, model, None


@style.styled
def plot_moduli(
    model: DataFrame | None = None,
    data: DataFrame | None = None,
    *,
    others: dict[str, DataFrame] | None = None,
    level: float = 0.9,
    ax: Axes | None = None,
) -> Axes:
    """G' and G'' against frequency; a decade has the same length on both axes.

    Parameters
    ----------
    model : DataFrame, optional
        `omega [rad/s]`, `G' [Pa]`, `G'' [Pa]` with low and high where known; or a fit table with
        data and `G' model [Pa]` side by side.
    data : DataFrame, optional
        `omega [rad/s]`, `G' [Pa]`, `G'' [Pa]` as measured: open symbols.
    others : dict of str to DataFrame, optional
        Further named curves (the components of a blend): thin lines.
    """
    own = ax is None
    ax = style.new_axes(ax)
    seen_x: list[float] = []
    tops: list[float] = []
    bottoms: list[float] = []
    line_bottoms: list[float] = []
    names = {"G'": style.BLUE, "G''": style.VERMILION}
    dashes = {"G'": "-", "G''": (0, (5, 1.6))}
    marks = {"G'": "o", "G''": "s"}

    def points(x: np.ndarray, y: np.ndarray, name: str, symbol: str) -> None:
        good = positive(x, y)
        if not good.any():
            return
        thin = slice(None, None, max(1, math.ceil(good.sum() / 80)))
        ax.plot(
            x[good][thin],
            y[good][thin],
            color=names[name],
            marker=marks[name],
            linestyle="none",
            markerfacecolor="none",
            markeredgewidth=0.9,
            label=f"{symbol} measured",
            zorder=3,
        )
        seen_x.extend((x[good].min(), x[good].max()))
        tops.append(y[good].max())
        bottoms.append(y[good].min())

    if others:
        for i, (label, table) in enumerate(others.items()):
            x = numbers(table, *FREQUENCY)
            for name, _ in SYMBOLS:
                y = columns_of(table, name)[1]
                if x is None or y is None:
                    continue
                good = positive(x, y)
                ax.plot(
                    x[good],
                    y[good],
                    color=style.SOFT,
                    linewidth=0.9,
                    linestyle=style.DASHES[2 + i % 3],
                    label=label if name == "G'" else None,
                    zorder=1.5,
                )
                tops.append(y[good].max())
    x = numbers(model, *FREQUENCY)
    if model is not None and x is not None:
        table = model
        banded = False
        for name, symbol in SYMBOLS:
            found, line, low_high = columns_of(table, name)
            if found is not None:
                points(x, found, name, symbol)
            if low_high is not None:
                low, high = band(table, low_high)  # type: ignore[misc]
                good = positive(x, low, high)
                # one entry stands for both bands
                ax.fill_between(
                    x[good],
                    low[good],
                    high[good],
                    color=names[name],
                    alpha=0.22,
                    linewidth=0,
                    label=None if banded else f"{100 * level:.0f} % interval",
                    zorder=1,
                )
                banded = True
            other = numbers(table, f"{name} without tail", f"{name} without the tail")
            if other is not None:
                good = positive(x, other)
                ax.plot(
                    x[good],
                    other[good],
                    color=style.INK,
                    linewidth=1.0,
                    linestyle=style.DASHES[2],
                    label="without the tail" if name == "G'" else None,
                    zorder=1.8,
                )
            if line is not None:
                good = positive(x, line)
                said = "model" if (found is not None or data is not None) else ""
                ax.plot(
                    x[good],
                    line[good],
                    color=names[name],
                    linestyle=dashes[name],
                    label=f"{symbol} {said}".strip(),
                    zorder=2,
                )
                seen_x.extend((x[good].min(), x[good].max()))
                tops.append(line[good].max())
                line_bottoms.append(line[good].min())
    if data is not None:
        x = numbers(data, *FREQUENCY)
        for name, symbol in SYMBOLS:
            y = numbers(data, name, *measured(name))
            if x is not None and y is not None:
                points(x, y, name, symbol)
    style.log_axes(ax)
    if seen_x and tops:
        top = max(tops)
        # as many decades down as across: deeper only repeats the terminal slope
        across = style.decades_between(min(seen_x), max(seen_x))
        floor = top / 10.0 ** min(max(across, 5.0), DEEPEST)
        bottom = min([*bottoms, max(floor, min(line_bottoms, default=floor))])
        ax.set_xlim(*shading.span_of(seen_x, 0.02))
        ax.set_ylim(*shading.span_of([bottom, top], 0.03))
    ax.set_xlabel(X_LABEL)
    ax.set_ylabel("G′, G″ / Pa")
    handles, labels = ax.get_legend_handles_labels()
    rank = ("measured", "model")
    order = sorted(
        range(len(handles)),
        key=lambda i: next((r for r, w in enumerate(rank) if labels[i].endswith(w)), len(rank)),
    )
    rows = style.legend_above(ax, handles=[handles[i] for i in order])
    if seen_x:
        style.equal_decades(ax, own_figure=own, rows=rows)
    return ax


def describe_moduli(model: DataFrame | None, data: DataFrame | None = None) -> str:
    """The picture in words."""
    table = model if model is not None else data
    if table is None:
        return ""
    x = numbers(table, *FREQUENCY)
    if x is None:
        return ""
    text = f"From {short(np.nanmin(x))} to {short(np.nanmax(x))} rad/s."
    parts = []
    for name, spoken in (("G'", "storage modulus"), ("G''", "loss modulus")):
        found, line, _ = columns_of(table, name)
        y = line if line is not None else found
        if y is not None:
            good = positive(x, y)
            if good.any():
                parts.append(
                    f"the {spoken} runs from {number(y[good][0])} to {number(y[good][-1])} Pa"
                )
    return f"{text} {upper_first(' and '.join(parts))}." if parts else text


@style.styled
def plot_residuals(table: DataFrame, *, ax: Axes | None = None) -> Axes:
    """Relative residuals of a fit, point by point, against frequency.

    Parameters
    ----------
    table : DataFrame
        A fit table: `omega [rad/s]` (or `t [s]`, `rate [1/s]`) with residual columns
        (`residual G' [-]`, `residual G'' [-]`), in parts of the value or of sigma as the header
        says; `row` names the line of the source for the outliers.
    """
    ax = style.new_axes(ax, height=64.0)
    x_header = find(table, *FREQUENCY, "t", "time", "rate", "shear rate", "row")
    columns = residual_columns(table)
    if x_header is None or not columns:
        raise Absent("the table needs a frequency, time or rate and a residual column")
    x = numbers(table, x_header)
    if x is None:
        raise Absent(f"the column {x_header!r} holds no numbers")
    rows = words(table, "row", "line")
    top = 0.0
    in_sigma = any(
        unit(h) in {"sigma"} or "sigma" in h.casefold().split("[")[0].split()[-1:]
        for h in columns.values()
    )
    percent = not in_sigma
    for i, (symbol, header) in enumerate(columns.items()):
        y = np.asarray(table[header], dtype=float) * (
            100.0 if percent and unit(header) not in {"%", "percent"} else 1.0
        )
        ax.plot(x, y, **style.data_look(i), label=symbol, zorder=3)
        finite = np.abs(y[np.isfinite(y)])
        if finite.size == 0:
            continue
        top = max(top, float(finite.max()))
        spread = float(np.median(finite)) * 1.4826
        for k in np.argsort(-np.abs(np.nan_to_num(y)))[:2]:
            if rows is not None and rows[k] and abs(y[k]) > 4.0 * spread > 0:
                ax.annotate(
                    f"row {rows[k].removesuffix('.0')}",
                    (x[k], y[k]),
                    xytext=(4, 3),
                    textcoords="offset points",
                    fontsize=8.0,
                )
    ax.axhline(0.0, color=style.INK, linewidth=0.8, zorder=1)
    name = x_header.split(" [")[0].casefold()
    if name != "row":
        style.log_axis(ax.xaxis)
        good = x[np.isfinite(x) & (x > 0)]
        ax.set_xlim(*shading.span_of([good.min(), good.max()], 0.03))
    top = top or 1.0
    ax.set_ylim(-1.35 * top, 1.35 * top)
    ax.set_xlabel(
        {
            "t": "time t / s",
            "time": "time t / s",
            "rate": r"shear rate $\dot\gamma$ / s$^{-1}$",
            "row": "row of the source",
        }.get(name, X_LABEL)
    )
    ax.set_ylabel("measured − model, in %" if percent else "(measured − model) / σ")
    style.legend_above(ax)
    return ax


def residual_columns(table: DataFrame) -> dict[str, str]:
    """Symbol to header of the residual columns a fit table has."""
    out: dict[str, str] = {}
    for name, symbol in (("G'", "G′"), ("G''", "G″"), ("G", "G"), ("eta", "η")):
        ticks = name.removeprefix("G") if name.startswith("G'") else name
        header = find(
            table,
            f"residual {name}",
            f"{name} residual",
            f"residual{ticks}",
            f"relative residual {name}",
            f"{name} relative residual",
            f"residual {name} sigma",
        )
        if header is not None and numbers(table, header) is not None:
            out[symbol] = header
    if not out:
        header = find(table, "residual", "relative residual")
        if header is not None and numbers(table, header) is not None:
            out["all points"] = header
    return out


def describe_residuals(table: DataFrame) -> str:
    """The picture in words."""
    parts = []
    for symbol, header in residual_columns(table).items():
        y = np.asarray(table[header], dtype=float)
        y = y[np.isfinite(y)]
        if y.size:
            parts.append(
                f"{symbol}: mean {number(y.mean(), 2)}, largest {number(np.abs(y).max(), 2)}"
            )
    return (
        f"Measured less model, point by point, in relative parts. {'; '.join(parts)}."
        if parts
        else ""
    )


@style.styled
def plot_phase_angle(curves: dict[str, DataFrame], *, ax: Axes | None = None) -> Axes:
    """Phase angle against the magnitude of the complex modulus: temperatures fall together or not.

    Parameters
    ----------
    curves : dict of str to DataFrame
        Name to table with `|G*| [Pa]` and `delta [deg]`, or `G' [Pa]` and `G'' [Pa]`.
    """
    ax = style.new_axes(ax, height=72.0)
    for i, (label, table) in enumerate(curves.items()):
        size, angle = numbers(table, "|G*|"), numbers(table, "delta", "phase angle")
        if size is None or angle is None:
            storage, loss = numbers(table, "G'"), numbers(table, "G''")
            if storage is None or loss is None:
                continue
            size, angle = np.hypot(storage, loss), np.degrees(np.arctan2(loss, storage))
        good = positive(size, angle)
        size, angle = size[good], angle[good]
        ax.plot(size, angle, **style.data_look(i) | {"markersize": 4.0}, label=label)
    style.log_axis(ax.xaxis)
    ax.set_ylim(0, 95)
    ax.set_yticks([0, 15, 30, 45, 60, 75, 90])
    ax.set_xlabel("|G*| / Pa")
    ax.set_ylabel("phase angle δ / °")
    style.legend_above(ax)
    return ax


def describe_phase_angle(curves: dict[str, DataFrame]) -> str:
    """The picture in words."""
    return (
        f"Curves for {', '.join(curves)}. "
        "Where all points fall on one curve, one shift in frequency brings the temperatures "
        "together."
    )


def drift_columns(table: DataFrame) -> dict[str, np.ndarray]:
    """Ratio after to before of each modulus."""
    out = {}
    for name, symbol in SYMBOLS:
        ratio = numbers(table, f"{name} after/before", f"{name} after over before")
        if ratio is not None:
            out[symbol] = ratio
    return out


@style.styled
def plot_drift(table: DataFrame, *, ax: Axes | None = None) -> Axes:
    """Change of the moduli between a sweep before and one after, by frequency.

    Parameters
    ----------
    table : DataFrame
        `omega [rad/s]`, `G' after/before [-]`, `G'' after/before [-]`.
    """
    x, columns = numbers(table, *FREQUENCY), drift_columns(table)
    if x is None or not columns:
        raise Absent("the table needs omega [rad/s] and G' after/before [-]")
    ax = style.new_axes(ax, height=64.0)
    top = 1.0
    for i, (symbol, ratio) in enumerate(columns.items()):
        change = 100.0 * (ratio - 1.0)
        ax.plot(x, change, **style.data_look(i), label=symbol)
        top = max(top, float(np.nanmax(np.abs(change))))
    ax.axhline(0.0, color=style.INK, linewidth=0.8, zorder=1)
    style.log_axis(ax.xaxis)
    good = positive(x)
    ax.set_xlim(*shading.span_of([x[good].min(), x[good].max()], 0.03))
    ax.set_ylim(-1.2 * top, 1.2 * top)
    ax.set_xlabel(X_LABEL)
    ax.set_ylabel("change after the test / %")
    style.legend_above(ax)
    return ax


def describe_drift(table: DataFrame) -> str:
    """The picture in words."""
    parts = [
        f"{symbol} changed by {number(100 * (np.nanmean(ratio) - 1), 2)} % on average"
        for symbol, ratio in drift_columns(table).items()
    ]
    return f"{upper_first('; '.join(parts))}." if parts else ""
