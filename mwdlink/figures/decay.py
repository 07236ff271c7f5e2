"""Decays in time: the relaxation modulus, and how long to wait before the next test."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from mwdlink.figures import shading, style
from mwdlink.figures.columns import Absent, band, numbers, positive
from mwdlink.figures.moduli import measured, modelled
from mwdlink.figures.words import interval_of, number, short, upper_first, value_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from pandas import DataFrame

TIME = ("t", "time")


@style.styled
def plot_relaxation(table: DataFrame, *, level: float = 0.9, ax: Axes | None = None) -> Axes:
    """Relaxation modulus against time.

    Parameters
    ----------
    table : DataFrame
        `t [s]`, `G [Pa]` with low and high where known; or data with `G model [Pa]` beside it.
    """
    own = ax is None
    ax = style.new_axes(ax)
    time = numbers(table, *TIME)
    plain, model, data = (
        numbers(table, "G"),
        numbers(table, *modelled("G")),
        numbers(table, *measured("G")),
    )
    if model is not None and data is None:
        data = plain
    line = model if model is not None else plain
    if time is None or line is None:
        raise Absent("the table needs the columns t [s] and G [Pa]")
    floor = float(np.nanmax(line)) * 1e-6
    between = band(table, *modelled("G"), "G")
    if between is not None:
        good = positive(time, *between)
        ax.fill_between(
            time[good],
            between[0][good],
            between[1][good],
            color=style.BLUE,
            alpha=0.22,
            linewidth=0,
            label=f"{100 * level:.0f} % interval",
        )
    good = positive(time, line) & (line > floor)
    ax.plot(time[good], line[good], color=style.BLUE, label="G(t)" if data is None else "model")
    xs = [time[good].min(), time[good].max()]
    ys = [line[good].min(), line[good].max()]
    if data is not None:
        seen = positive(time, data)
        ax.plot(time[seen], data[seen], **style.data_look(0), label="measured")
        xs += [time[seen].min(), time[seen].max()]
        ys += [data[seen].min(), data[seen].max()]
    style.log_axes(ax)
    ax.set_xlim(*shading.span_of(xs, 0.02))
    ax.set_ylim(*shading.span_of(ys, 0.04))
    ax.set_xlabel("time t / s")
    ax.set_ylabel("relaxation modulus G / Pa")
    rows = style.legend_above(ax)
    style.equal_decades(ax, own_figure=own, rows=rows)
    return ax


def describe_relaxation(table: DataFrame) -> str:
    """The picture in words."""
    time, modulus = numbers(table, *TIME), numbers(table, "G", *modelled("G"))
    if time is None or modulus is None:
        return ""
    good = positive(time, modulus)
    t, g = time[good], modulus[good]
    text = (
        f"Falling from {number(g[0])} Pa at {short(t[0])} s to {number(g[-1])} Pa at "
        f"{short(t[-1])} s."
    )
    hundredth = np.flatnonzero(g < 0.01 * g[0])
    if hundredth.size:
        text += f" It is below a hundredth of its first value after {number(t[hundredth[0]])} s."
    return text


REST_COLUMNS = (
    (("after step", "step", "residual after step", "G/G_N", "G(t)/G_N"), "after a step"),
    (
        (
            "after steady flow",
            "steady flow",
            "residual after steady flow",
            "eta-/eta0",
            "eta_minus/eta0",
        ),
        "after steady flow",
    ),
)


@style.styled
def plot_rest(
    table: DataFrame, *, rest: Sequence[Mapping[str, Any]] = (), ax: Axes | None = None
) -> Axes:
    """Residual stress against waiting time, after a step and after steady flow.

    Parameters
    ----------
    table : DataFrame
        `t [s]` with `after step [-]` and `after steady flow [-]`, low and high where known.
    rest : sequence of mappings, optional
        `residual`, `after` ("step" or "steady flow") and `time_s`: the marked answers.
    """
    ax = style.new_axes(ax)
    time = numbers(table, *TIME)
    if time is None:
        raise Absent("the table needs the column t [s]")
    smallest = min((float(r["residual"]) for r in rest if r.get("residual")), default=0.01)
    floor = smallest / 10
    xs: list[float] = []
    for i, (names, label) in enumerate(REST_COLUMNS):
        y = numbers(table, *names)
        if y is None:
            continue
        good = positive(time, y)
        look = style.series_look(i)
        between = band(table, *names)
        if between is not None:
            both = positive(time, between[1])
            ax.fill_between(
                time[both],
                np.maximum(between[0][both], floor / 100),
                between[1][both],
                color=look["color"],
                alpha=0.2,
                linewidth=0,
            )
        ax.plot(time[good], y[good], **look, label=label)
        shown = good & (y > floor) & (y < 0.8)
        if shown.any():
            xs += [time[shown].min(), time[shown].max()]
    for entry in rest:
        x, level = value_of(entry.get("time_s")), value_of(entry.get("residual"))
        if x is None or level is None:
            continue
        i = 0 if entry.get("after") == "step" else 1
        span = interval_of(entry.get("time_s"))
        if span is not None:
            ax.plot(
                span,
                [level, level],
                color=style.SERIES[i],
                linewidth=3.0,
                alpha=0.5,
                solid_capstyle="butt",
                zorder=3,
            )
        ax.plot(
            [x],
            [level],
            color=style.SERIES[i],
            marker=style.MARKERS[i],
            markersize=5.5,
            markerfacecolor=style.PAPER,
            zorder=4,
            linestyle="none",
        )
        xs.append(x)
    style.log_axes(ax)
    if xs:
        ax.set_xlim(*shading.span_of(xs, 0.06))
    ax.set_ylim(floor, 1.5)
    for level in sorted({float(r["residual"]) for r in rest if r.get("residual")}):
        ax.axhline(level, color=style.SOFT, linewidth=0.8, linestyle=(0, (4, 2)), zorder=0.8)
        ax.annotate(
            f"{100 * level:g} % left",
            (0.015, level),
            xycoords=ax.get_yaxis_transform(),
            xytext=(0, 2),
            textcoords="offset points",
            fontsize=8.0,
            color=style.SOFT,
        )
    ax.set_xlabel("waiting time t / s")
    ax.set_ylabel("stress left, as a share")
    style.legend_above(ax)
    return ax


def duration(seconds: float) -> str:
    """A time as people say it: 0.095 s, 25 min, 6.3 h, 4.1 d."""
    for size, unit in ((86400.0, "d"), (3600.0, "h"), (60.0, "min")):
        if seconds >= 2.0 * size:
            return f"{short(seconds / size, 2)} {unit}"
    return f"{short(seconds, 2)} s"


def waiting(time: Any) -> str:
    """A waiting time with its interval and, where it is one, its being a bound."""
    value, between = value_of(time), interval_of(time)
    if value is None:
        return "not known"
    text = duration(value)
    if between is not None:
        text += f" ({duration(between[0])} to {duration(between[1])})"
    bound = {"lower_bound": "at least ", "upper_bound": "at most "}
    return bound.get(str(time.get("status")) if isinstance(time, Mapping) else "", "") + text


def describe_rest(rest: Sequence[Mapping[str, Any]]) -> str:
    """The picture in words."""
    parts = [
        f"{waiting(r.get('time_s'))} until {100 * float(r['residual']):g} % is left after "
        f"{'a step' if r.get('after') == 'step' else r.get('after')}"
        for r in rest
        if value_of(r.get("time_s")) is not None and r.get("residual") is not None
    ]
    return f"{upper_first('; '.join(parts))}." if parts else "Two curves of decay."
