"""The relaxation spectrum: discrete modes as stems, the continuous one as a line with its band."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from mwdlink.figures import shading, style
from mwdlink.figures.columns import Absent, band, numbers, positive
from mwdlink.figures.words import number, short

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from pandas import DataFrame

TIME = ("tau", "relaxation time")
STRENGTH = ("g", "strength")
CONTINUOUS = ("H", "H(tau)", "spectrum")
X_LABEL = "relaxation time τ / s"


@style.styled
def plot_spectrum(
    discrete: DataFrame | None,
    continuous: DataFrame | None = None,
    *,
    supported: tuple[float | None, float | None] | None = None,
    level: float = 0.9,
    ax: Axes | None = None,
) -> Axes:
    """Strength of the modes against relaxation time.

    Parameters
    ----------
    discrete : DataFrame, optional
        `tau [s]`, `g [Pa]`: stems.
    continuous : DataFrame, optional
        `tau [s]`, `H [Pa]` with low and high where known: line and band.
    supported : (low, high), optional
        Relaxation times [s] the data support; what lies outside is shaded.
    """
    ax = style.new_axes(ax)
    xs: list[float] = []
    tops: list[float] = []
    if continuous is not None:
        tau, strength = numbers(continuous, *TIME), numbers(continuous, *CONTINUOUS)
        if tau is not None and strength is not None:
            good = positive(tau, strength)
            between = band(continuous, *CONTINUOUS)
            if between is not None:
                both = positive(tau, between[1])
                ax.fill_between(
                    tau[both],
                    np.maximum(between[0][both], 1e-300),
                    between[1][both],
                    color=style.BLUE,
                    alpha=0.22,
                    linewidth=0,
                    label=f"{100 * level:.0f} % interval",
                )
            ax.plot(
                tau[good],
                strength[good],
                color=style.BLUE,
                label="continuous, H(τ)",
                zorder=2,
            )
            high = good & (strength > strength[good].max() * 1e-7)
            xs += [tau[high].min(), tau[high].max()]
            tops.append(strength[good].max())
    floor_from: list[float] = []
    modes = None
    if discrete is not None:
        tau, strength = numbers(discrete, *TIME), numbers(discrete, *STRENGTH)
        if tau is not None and strength is not None:
            good = positive(tau, strength)
            modes = tau[good], strength[good]
            tops.append(modes[1].max())
            floor_from.append(modes[1].min())
    if not tops:
        raise Absent("neither discrete modes nor a continuous spectrum to show")
    top = max(tops)
    bottom = max(top * 1e-8, min(floor_from, default=top * 1e-6) / 3)
    style.log_axes(ax)
    if modes is not None:
        shown = modes[1] >= bottom
        xs += [modes[0][shown].min(), modes[0][shown].max()]
        ax.vlines(modes[0], bottom / 10, modes[1], color=style.VERMILION, linewidth=0.9, zorder=2.4)
        ax.plot(
            *modes,
            color=style.VERMILION,
            marker="o",
            markersize=3.6 if modes[0].size < 40 else 2.4,
            markerfacecolor=style.PAPER,
            linestyle="none",
            label="discrete modes, g",
            zorder=3,
        )
    if supported:
        xs += [x for x in supported if x is not None]
    ax.set_xlim(*shading.span_of(xs, 0.04))
    ax.set_ylim(bottom, 2.0 * top)
    if supported and any(x is not None for x in supported):
        shading.headroom(ax, 0.16)
        shading.window(
            ax,
            supported[0],
            supported[1],
            inside="supported by the data",
            below="not supported",
            above="not supported",
        )
    ax.set_xlabel(X_LABEL)
    ax.set_ylabel("g, H / Pa" if continuous is not None else "g / Pa")
    style.legend_above(ax)
    return ax


def describe_spectrum(
    discrete: DataFrame | None, supported: tuple[float | None, float | None] | None = None
) -> str:
    """The picture in words."""
    text = ""
    tau, g = numbers(discrete, *TIME), numbers(discrete, *STRENGTH)
    if tau is not None and g is not None:
        good = positive(tau, g)
        text = (
            f"{int(good.sum())} modes from {short(tau[good].min())} to {short(tau[good].max())} s."
        )
    if supported and None not in supported:
        text = (
            f"{text} The data support relaxation times from {number(supported[0])} to "
            f"{number(supported[1])} s."
        ).strip()
    return text
