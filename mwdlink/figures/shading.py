"""Ranges shaded and named in words on the picture itself."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from matplotlib.axes import Axes

from mwdlink.figures import style

CHARACTER_MM = 1.55
"""Width of a character of the small letters [mm], for deciding how a name fits."""


def _fraction(ax: Axes, x: float) -> float:
    low, high = ax.get_xlim()
    if ax.get_xscale() == "log":
        return math.log(x / low) / math.log(high / low)
    return (x - low) / (high - low)


def _axes_width_mm(ax: Axes) -> float:
    figure = style.figure_of(ax)
    width = style.WIDTH if figure is None else figure.get_figwidth() / style.MM
    return 0.8 * float(width) * min(1.0, ax.get_position().width / 0.775)


def _wrapped(words: str, width: int) -> str | None:
    """The words on at most three lines of the given number of characters, or None."""
    lines: list[str] = []
    for word in words.split():
        if len(word) > width:
            return None
        if lines and len(lines[-1]) + 1 + len(word) <= width:
            lines[-1] += " " + word
        else:
            lines.append(word)
    return "\n".join(lines) if len(lines) <= 3 else None


def name_range(ax: Axes, low: float, high: float, words: str, *, top: float = 0.97) -> None:
    """Write words at the top of the range low to high (data units), upright where it is narrow."""
    left, right = (min(max(_fraction(ax, v), 0.0), 1.0) for v in (low, high))
    width = (right - left) * _axes_width_mm(ax)
    centre = 0.5 * (left + right)
    look: dict[str, Any] = {
        "transform": ax.transAxes,
        "color": style.SOFT,
        "fontsize": 8.0,
        "va": "top",
        "ha": "center",
        "linespacing": 1.1,
    }
    across = _wrapped(words, int(width / CHARACTER_MM) - 1)
    if across is not None:
        ax.text(centre, top, across, **look)
    elif width > 3.4:
        ax.text(centre, top, words, rotation=90, rotation_mode="default", **look)


def blind_range(ax: Axes, low: float, high: float, words: str) -> None:
    """A range nothing is known about: grey, hatched, bounded by a line, named."""
    left, right = ax.get_xlim()
    low, high = max(low, left), min(high, right)
    if not high > low:
        return
    ax.axvspan(
        low,
        high,
        facecolor=style.SHADE,
        edgecolor=style.SOFT,
        hatch="////",
        linewidth=0.0,
        alpha=0.55,
        zorder=0.5,
    )
    for edge in (low, high):
        if left < edge < right:
            ax.axvline(edge, color=style.SOFT, linewidth=0.8, linestyle=(0, (4, 2)), zorder=0.6)
    name_range(ax, low, high, words)


def window(
    ax: Axes, low: float | None, high: float | None, *, inside: str = "", below: str, above: str
) -> None:
    """Shade what lies outside low to high on both sides and name all three ranges.

    Limits of the x axis must have been set before; None leaves that side open.
    """
    left, right = ax.get_xlim()
    if low is not None and low > left:
        blind_range(ax, left, low, below)
    if high is not None and high < right:
        blind_range(ax, high, right, above)
    if inside:
        name_range(ax, max(left, low or left), min(right, high or right), inside)


def headroom(ax: Axes, share: float = 0.2) -> None:
    """Lift the upper y limit so that names at the top stand clear of the curves."""
    low, high = ax.get_ylim()
    if ax.get_yscale() == "log":
        ax.set_ylim(low, high * (high / low) ** (share / (1.0 - share)))
    else:
        ax.set_ylim(low, low + (high - low) / (1.0 - share))


def span_of(values: Sequence[float], pad: float = 0.04) -> tuple[float, float]:
    """Limits for a log axis around positive values, with a margin as a share of the span."""
    low, high = min(values), max(values)
    if high / low < 1.3:
        low, high = low / 1.3, high * 1.3
    factor = (high / low) ** pad
    return low / factor, high * factor
