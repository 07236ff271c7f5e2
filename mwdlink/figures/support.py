"""Rival explanations side by side, and measured against fitted numbers on one line."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from mwdlink.figures import shading, style
from mwdlink.figures.columns import Absent, numbers, positive, words
from mwdlink.figures.words import number, value_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from pandas import DataFrame


@style.styled
def plot_explanations(explanations: Sequence[Mapping[str, Any]], *, ax: Axes | None = None) -> Axes:
    """How much the data support each explanation, as bars; those not weighed are named as such.

    Parameters
    ----------
    explanations : sequence of mappings
        `name` and `support`: a share of 1, or None where the data cannot weigh it.
    """
    ax = style.new_axes(ax, height=26.0 + 6.5 * max(len(explanations), 2))
    shares = [value_of(e.get("support")) for e in explanations]
    known = [s for s in shares if s is not None]
    scale = 100.0 if known and 0 <= min(known) and max(known) <= 1.0 else 1.0
    for row, share in enumerate(shares):
        if share is None:
            ax.text(
                0.0, row, " not weighed by these data", va="center", fontsize=8.0, color=style.SOFT
            )
            continue
        ax.barh(
            [row],
            [scale * share],
            height=0.6,
            color=style.FILLS[0],
            edgecolor=style.INK,
            linewidth=0.7,
        )
        tiny = scale == 100.0 and 0 < scale * share < 0.1
        said = "less than 0.1" if tiny else number(scale * share, 2)
        ax.text(scale * share, row, f" {said}", va="center", fontsize=8.0)
    ax.set_yticks(range(len(explanations)), [str(e.get("name")) for e in explanations])
    ax.set_ylim(len(explanations) - 0.5, -0.5)
    ax.tick_params(axis="y", which="both", length=0)
    if scale == 100.0:
        ax.set_xlim(0, 112)
        ax.set_xticks([0, 25, 50, 75, 100])
        ax.set_xlabel("support by the data / %")
    else:
        low = min([0.0, *known])
        ax.set_xlim(1.15 * low, 1.15 * max([*known, 1e-9]))
        ax.set_xlabel("support by the data")
    return ax


def describe_explanations(explanations: Sequence[Mapping[str, Any]]) -> str:
    """The picture in words."""
    parts = []
    for e in explanations:
        share = value_of(e.get("support"))
        if share is None:
            parts.append(f"{e.get('name')} not weighed")
        else:
            tiny = 0 < share < 1e-3
            parts.append(f"{e.get('name')} {'less than 0.001' if tiny else number(share, 2)}")
    return f"Support of each explanation by the data: {'; '.join(parts)}." if parts else ""


PAIRS = (
    (
        ("eta0 measured", "measured eta0"),
        ("eta0 law", "eta0 fitted", "eta0 model", "eta0 predicted"),
        "η₀ / Pa s",
    ),
    (("measured",), ("predicted", "fitted", "model"), "value"),
)


@style.styled
def plot_parity(table: DataFrame, *, ax: Axes | None = None) -> Axes:
    """Measured against fitted values, sample by sample, on equal decades.

    Parameters
    ----------
    table : DataFrame
        `sample`, `eta0 measured [Pa s]` and `eta0 law [Pa s]` (or `measured` and `predicted`).
    """
    ax = style.new_axes(ax, height=112.0)
    for measured, fitted, label in PAIRS:
        x, y = numbers(table, *fitted), numbers(table, *measured)
        if x is None or y is None:
            continue
        good = positive(x, y)
        ends = shading.span_of([*x[good], *y[good]], 0.08)
        ax.plot(ends, ends, color=style.BLUE, linewidth=1.0, label="law")
        ax.plot(x[good], y[good], **style.data_look(0) | {"color": style.INK}, label="sample")
        names = words(table, "sample", "name")
        for k in np.flatnonzero(good)[:12]:
            if names is not None:
                right = x[k] < ends[0] ** 0.2 * ends[1] ** 0.8
                ax.annotate(
                    names[k],
                    (x[k], y[k]),
                    xytext=(6 if right else -6, -4 if right else 4),
                    textcoords="offset points",
                    fontsize=8.0,
                    ha="left" if right else "right",
                    va="top" if right else "bottom",
                )
        style.log_axes(ax)
        ax.set_xlim(*ends)
        ax.set_ylim(*ends)
        ax.set_aspect("equal", adjustable="box")
        ax.set_anchor("N")
        ax.set_xlabel(f"law, {label}")
        ax.set_ylabel(f"measured, {label}")
        style.legend_above(ax)
        return ax
    raise Absent("the table needs a measured and a fitted column")


def has_pairs(table: DataFrame) -> bool:
    return any(
        numbers(table, *m) is not None and numbers(table, *f) is not None for m, f, _ in PAIRS
    )


def describe_parity(table: DataFrame) -> str:
    """The picture in words."""
    for measured, fitted, _ in PAIRS:
        x, y = numbers(table, *fitted), numbers(table, *measured)
        if x is not None and y is not None:
            off = np.log10(y[positive(x, y)] / x[positive(x, y)])
            return (
                f"Measured against fitted for {len(off)} samples; largest distance "
                f"{number(np.abs(off).max(), 2)} decades."
            )
    return ""


def sample_columns(table: DataFrame) -> dict[str, tuple[np.ndarray, np.ndarray | None]]:
    """Bias [decades] of each modulus by sample, with its scatter where known."""
    out = {}
    for name, symbol in (("G'", "G′"), ("G''", "G″")):
        bias = numbers(table, f"bias {name}", f"{name} bias")
        if bias is not None:
            out[symbol] = bias, numbers(table, f"scatter {name}", f"{name} scatter")
    return out


@style.styled
def plot_samples(table: DataFrame, *, ax: Axes | None = None) -> Axes:
    """How far the fitted moduli lie from each sample's: a dot for the bias, a line for the scatter.

    Parameters
    ----------
    table : DataFrame
        `sample`, `bias G' [decades]`, `scatter G' [decades]` and the same for `G''`.
    """
    columns = sample_columns(table)
    names = words(table, "sample", "name")
    if not columns or names is None:
        raise Absent("the table needs the columns sample and bias G' [decades]")
    ax = style.new_axes(ax, height=30.0 + 7.5 * max(len(names), 2))
    rows = np.arange(len(names), dtype=float)
    top = 0.02
    for i, (symbol, (bias, scatter)) in enumerate(columns.items()):
        aside = rows + (i - 0.5) * 0.26
        look = style.data_look(i)
        if scatter is not None:
            ax.hlines(aside, bias - scatter, bias + scatter, color=look["color"], linewidth=1.2)
            top = max(top, float(np.nanmax(np.abs(bias) + scatter)))
        ax.plot(bias, aside, **look | {"markerfacecolor": style.PAPER}, label=symbol)
        top = max(top, float(np.nanmax(np.abs(bias))))
    ax.axvline(0.0, color=style.SOFT, linewidth=0.9, linestyle=(0, (4, 2)), zorder=0.5)
    ax.set_yticks(rows, names)
    ax.set_ylim(len(names) - 0.5, -0.5)
    ax.tick_params(axis="y", which="both", length=0)
    ax.set_xlim(-1.15 * top, 1.15 * top)
    ax.set_xlabel("fitted against measured / decades")
    style.legend_above(ax)
    return ax


def describe_samples(table: DataFrame) -> str:
    """The picture in words."""
    names = words(table, "sample", "name") or []
    parts = []
    for symbol, (bias, _) in sample_columns(table).items():
        if np.isfinite(bias).any():
            worst = int(np.nanargmax(np.abs(bias)))
            parts.append(
                f"{symbol} is off most in {names[worst]}, {number(bias[worst], 2)} decades"
            )
    return f"{'; '.join(parts)}." if parts else ""
