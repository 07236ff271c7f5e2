"""Viscosity against rate: the flow curve, and the complex viscosity of a sweep."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from mwdlink.figures import shading, style
from mwdlink.figures.columns import Absent, band, numbers, positive
from mwdlink.figures.moduli import measured, modelled
from mwdlink.figures.words import number, short

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from pandas import DataFrame

RATE = ("rate", "shear rate")
VISCOSITY = ("eta", "viscosity")


@style.styled
def plot_flow(
    table: DataFrame,
    data: DataFrame | None = None,
    *,
    eta0: float | None = None,
    others: dict[str, DataFrame] | None = None,
    level: float = 0.9,
    ax: Axes | None = None,
) -> Axes:
    """Viscosity against shear rate.

    Parameters
    ----------
    table : DataFrame
        `rate [1/s]`, `eta [Pa s]`, low and high where known; or data with `eta model [Pa s]`.
    data : DataFrame, optional
        Measured flow curve.
    eta0 : float, optional
        Zero-shear viscosity [Pa s], drawn as the level the curve comes from.
    others : dict of str to DataFrame, optional
        Further named curves: thin lines.
    """
    own = ax is None
    ax = style.new_axes(ax)
    rate = numbers(table, *RATE)
    plain, model = numbers(table, *VISCOSITY), numbers(table, *modelled("eta"))
    points = numbers(table, *measured("eta"))
    if model is not None and points is None:
        points = plain
    line = model if model is not None else plain
    if rate is None or line is None:
        raise Absent("the table needs the columns rate [1/s] and eta [Pa s]")
    between = band(table, *modelled("eta"), *VISCOSITY)
    if between is not None:
        good = positive(rate, *between)
        ax.fill_between(
            rate[good],
            between[0][good],
            between[1][good],
            color=style.BLUE,
            alpha=0.22,
            linewidth=0,
            label=f"{100 * level:.0f} % interval",
        )
    ys: list[float] = []
    xs: list[float] = []
    for i, (label, other) in enumerate((others or {}).items()):
        x, y = numbers(other, *RATE), numbers(other, *VISCOSITY)
        if x is None or y is None:
            continue
        good = positive(x, y)
        ax.plot(
            x[good],
            y[good],
            color=style.SOFT,
            linewidth=0.9,
            linestyle=style.DASHES[2 + i % 3],
            label=label,
        )
        ys += [y[good].min(), y[good].max()]
    good = positive(rate, line)
    ax.plot(
        rate[good],
        line[good],
        color=style.BLUE,
        label="model" if points is not None else "viscosity",
        zorder=2,
    )
    xs += [rate[good].min(), rate[good].max()]
    ys += [line[good].min(), line[good].max()]
    sets: list[tuple[np.ndarray | None, np.ndarray | None]] = [(rate, points)]
    if data is not None:
        sets.append((numbers(data, *RATE), numbers(data, *VISCOSITY)))
    for x, y in sets:
        if x is not None and y is not None:
            good = positive(x, y)
            ax.plot(x[good], y[good], **style.data_look(0), label="measured", zorder=3)
            xs += [x[good].min(), x[good].max()]
            ys += [y[good].min(), y[good].max()]
    if eta0 is not None and eta0 > 0:
        ax.axhline(
            eta0,
            color=style.SOFT,
            linewidth=0.9,
            linestyle=(0, (4, 2)),
            zorder=1,
            label="η₀",
        )
        ys.append(eta0)
    if between is not None:
        # the band belongs on the picture, but not where it runs away
        good = positive(rate, *between)
        ys += [max(between[0][good].min(), min(ys) / 10), min(between[1][good].max(), max(ys) * 10)]
    style.log_axes(ax)
    ax.set_xlim(*shading.span_of(xs, 0.02))
    low, high = shading.span_of(ys, 0.06)
    if style.decades_between(low, high) < 2.0:
        # a nearly Newtonian curve would look steep on a short axis
        middle = np.sqrt(low * high)
        low, high = middle / 10, middle * 10
    ax.set_ylim(low, high)
    ax.set_xlabel(r"shear rate $\dot\gamma$ / s$^{-1}$")
    ax.set_ylabel("viscosity η / Pa s")
    rows = style.legend_above(ax)
    style.equal_decades(ax, own_figure=own, rows=rows)
    return ax


def describe_flow(table: DataFrame, eta0: float | None = None) -> str:
    """The picture in words."""
    rate, eta = numbers(table, *RATE), numbers(table, *VISCOSITY, *modelled("eta"))
    if rate is None or eta is None:
        return ""
    good = positive(rate, eta)
    x, y = rate[good], eta[good]
    text = (
        f"Falling from {number(y[0])} Pa s at {short(x[0])} per second to {number(y[-1])} Pa s at "
        f"{short(x[-1])} per second."
    )
    return f"{text} Zero-shear viscosity {number(eta0)} Pa s." if eta0 else text
