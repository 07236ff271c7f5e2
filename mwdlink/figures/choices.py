"""How the answer was chosen and what its interval is made of: smoothing, kernels, error budget."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib import rc_context

from mwdlink.figures import shading, style
from mwdlink.figures.columns import Absent, find, numbers, positive
from mwdlink.figures.words import (
    interval_of,
    number,
    short,
    split_unit,
    upper_first,
    value_of,
    with_interval,
)

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from pandas import DataFrame

LAMBDA = ("lambda", "smoothing")
MISFIT = ("chi2 per point", "chi2_per_point", "chi2", "misfit")
CRITERIA = (
    (("log evidence", "ln evidence", "evidence"), "log evidence"),
    (("gcv", "GCV"), "GCV"),
    (("discrepancy",), "discrepancy"),
    (("curvature", "l-curve", "l curve curvature"), "curvature of the L-curve"),
    (("criterion", "score"), "criterion"),
    (("weight", "posterior weight"), "weight in the ensemble"),
)
BUDGET_WORDS = {
    "noise": "noise",
    "smoothing": "smoothing",
    "kernel": "kernel",
    "exponent": "mixing exponent",
    "time_law": "time law",
    "card": "card",
    "gpc": "GPC",
}


def criteria_of(table: DataFrame) -> dict[str, str]:
    """Label to header of the criteria a smoothing table has."""
    out = {}
    for names, label in CRITERIA:
        header = find(table, *names)
        if header is not None and numbers(table, header) is not None:
            out[label] = header
    return out


@style.styled
def plot_smoothing(
    table: DataFrame, *, chosen: float | None = None, ax: Axes | None = None
) -> Axes:
    """The whole scan of the smoothing parameter: its criterion and, on the right, the misfit.

    Parameters
    ----------
    table : DataFrame
        `lambda [-]`, a criterion (`log evidence`, `GCV` ...) and `chi2 per point [-]`; where
        `kernel` stands beside them each kernel gets its own line.
    chosen : float, optional
        The value used.
    """
    ax = style.new_axes(ax, height=74.0)
    lam = numbers(table, *LAMBDA)
    if lam is None:
        raise Absent("the table needs the column lambda [-]")
    criteria = criteria_of(table)
    misfit_header = find(table, *MISFIT)
    label, header = next(iter(criteria.items())) if criteria else ("misfit", misfit_header)
    if header is None:
        raise Absent("the table needs a criterion or a misfit beside lambda")
    groups = _groups(table)
    style.log_axis(ax.xaxis)
    for i, (name, rows) in enumerate(groups.items()):
        order = np.argsort(lam[rows])
        x = lam[rows][order]
        y = np.asarray(table[header], dtype=float)[rows][order]
        look = style.series_look(i)
        ax.plot(
            x,
            y,
            **look,
            marker=style.MARKERS[i],
            markersize=3.4,
            markerfacecolor=style.PAPER,
            label=f"{label}, {name}" if name else label,
        )
    handles = ax.get_legend_handles_labels()[0]
    if misfit_header is not None and header != misfit_header and len(groups) == 1:
        right = ax.twinx()
        y = numbers(table, misfit_header)
        if y is not None:
            good = positive(lam, y)
            order = np.argsort(lam[good])
            right.plot(
                lam[good][order],
                y[good][order],
                color=style.VERMILION,
                linestyle=style.DASHES[1],
                marker="s",
                markersize=3.2,
                markerfacecolor=style.PAPER,
                label="misfit χ² per point (right)",
            )
            if style.decades_between(y[good].min(), y[good].max()) > 1.0:
                style.log_axis(right.yaxis)
            else:
                right.set_ylim(0.0, 1.2 * float(y[good].max()))
            right.set_ylabel("χ² per point")
            ax.tick_params(axis="y", which="both", right=False)
            handles += right.get_legend_handles_labels()[0]
    good = lam[np.isfinite(lam) & (lam > 0)]
    ax.set_xlim(*shading.span_of([good.min(), good.max()], 0.03))
    if chosen is not None and chosen > 0:
        ax.axvline(chosen, color=style.INK, linewidth=1.0, linestyle=(0, (4, 2)), zorder=1)
        low, high = ax.get_xlim()
        late = np.log(chosen / low) / np.log(high / low) > 0.6
        ax.annotate(
            f"chosen: {number(chosen, 2)}",
            (chosen, 0.03),
            xycoords=ax.get_xaxis_transform(),
            xytext=(-4 if late else 4, 0),
            textcoords="offset points",
            fontsize=8.0,
            ha="right" if late else "left",
            va="bottom",
            bbox={"facecolor": style.PAPER, "edgecolor": "none", "alpha": 0.8, "pad": 0.6},
        )
    ax.set_xlabel("smoothing λ  (free ← → smooth)")
    ax.set_ylabel(label)
    style.legend_above(ax, handles=handles)
    return ax


def _groups(table: DataFrame) -> dict[str, np.ndarray]:
    header = find(table, "kernel")
    if header is None:
        return {"": np.arange(len(table))}
    names = [str(v) for v in table[header]]
    out = {name: np.flatnonzero([n == name for n in names]) for name in dict.fromkeys(names)}
    return out if len(out) > 1 else {"": np.arange(len(table))}


def describe_smoothing(table: DataFrame, chosen: float | None = None) -> str:
    """The picture in words."""
    lam = numbers(table, *LAMBDA)
    if lam is None:
        return ""
    text = (
        f"Scan of the smoothing parameter, {len(set(lam.tolist()))} values from "
        f"{short(lam.min())} to {short(lam.max())}."
    )
    return f"{text} The value used is {number(chosen)}." if chosen else text


def kernel_interval(entry: Mapping[str, Any], key: str) -> tuple[float, float] | None:
    """Interval of a kernel's answer: its own, or the keys `Mw_low_g_per_mol` and `... high ...`."""
    name, unit = split_unit(key)
    end = key.removeprefix(name) if unit else ""
    low, high = value_of(entry.get(f"{name}_low{end}")), value_of(entry.get(f"{name}_high{end}"))
    if low is not None and high is not None:
        return low, high
    return interval_of(entry[key])


@style.styled
def plot_kernels(
    kernels: Sequence[Mapping[str, Any]],
    *,
    key: str = "Mw_g_per_mol",
    label: str = "weight-average molar mass Mw / g mol⁻¹",
    ax: Axes | None = None,
) -> Axes:
    """One line per kernel: its answer with its interval; rejected ones open, dashed and said so.

    Parameters
    ----------
    kernels : sequence of mappings
        `kernel`, `admissible`, `chi2_per_point` and the quantity `key` (number or uncertain).
    """
    shown = [k for k in kernels if value_of(k.get(key)) is not None]
    ax = style.new_axes(ax, height=26.0 + 9.0 * max(len(shown), 2))
    names = []
    xs: list[float] = []
    for row, entry in enumerate(shown):
        good = bool(entry.get("admissible", True))
        x = float(value_of(entry[key]) or 0.0)
        color = style.BLUE if good else style.SOFT
        between = kernel_interval(entry, key)
        xs.append(x)
        if between is not None:
            ax.plot(
                between,
                [row, row],
                color=color,
                linewidth=1.4,
                linestyle="-" if good else (0, (3, 2)),
                label="interval" if row == 0 else None,
            )
            xs += list(between)
        ax.plot(
            [x], [row], marker="o" if good else "x", markersize=5.5, color=color, linestyle="none"
        )
        chi = value_of(entry.get("chi2_per_point"))
        said = "" if chi is None else f"χ² {number(chi, 2)}"
        names.append(f"{entry.get('kernel')}\n{said}{'' if good else ', rejected'}".strip())
    ax.set_yticks(range(len(shown)), names)
    ax.set_ylim(len(shown) - 0.5, -0.5)
    ax.tick_params(axis="y", which="both", length=0)
    if xs and min(xs) > 0 and max(xs) / min(xs) > 4.0:
        style.log_axis(ax.xaxis)
        ax.set_xlim(*shading.span_of(xs, 0.12))
    elif xs:
        style.linear_axis(ax.xaxis)
        # a difference of a per cent should look like one
        middle = 0.5 * (min(xs) + max(xs))
        half = max(0.62 * (max(xs) - min(xs)), 0.1 * abs(middle))
        ax.set_xlim(middle - half, middle + half)
    ax.set_xlabel(label)
    return ax


def describe_kernels(
    kernels: Sequence[Mapping[str, Any]], key: str = "Mw_g_per_mol", unit: str = "g/mol"
) -> str:
    """The picture in words."""

    def whole(k: Mapping[str, Any]) -> Any:
        between = kernel_interval(k, key)
        return (
            k[key]
            if between is None
            else {"value": value_of(k[key]), "low": between[0], "high": between[1]}
        )

    parts = [
        f"{k.get('kernel')} {with_interval(whole(k), unit)}"
        f"{'' if k.get('admissible', True) else ' (rejected by its misfit)'}"
        for k in kernels
        if value_of(k.get(key)) is not None
    ]
    return f"{upper_first('; '.join(parts))}." if parts else ""


HATCHES = ("", "//", "..", "", "\\\\", "++", "--")


@style.styled
def plot_budget(budgets: Mapping[str, Mapping[str, float]], *, ax: Axes | None = None) -> Axes:
    """What each interval is made of: shares of its variance as one bar a quantity.

    Parameters
    ----------
    budgets : mapping of str to mapping
        Quantity to shares by source, each set adding up to 1.
    """
    own = ax is None
    ax = style.new_axes(ax, height=30.0 + 8.0 * max(len(budgets), 2))
    parts = [p for p in BUDGET_WORDS if any((b.get(p) or 0) > 0 for b in budgets.values())]
    lefts = np.zeros(len(budgets))
    for i, part in enumerate(parts):
        share = np.array([100.0 * float(b.get(part) or 0.0) for b in budgets.values()])
        with rc_context({"hatch.color": style.INK}):
            ax.barh(
                range(len(budgets)),
                share,
                left=lefts,
                height=0.62,
                color=style.FILLS[i % len(style.FILLS)],
                hatch=HATCHES[i % len(HATCHES)],
                edgecolor=style.INK,
                linewidth=0.6,
                label=BUDGET_WORDS[part],
            )
        for row, value in enumerate(share):
            if value >= 12:
                ax.text(
                    lefts[row] + value / 2,
                    row,
                    f"{value:.0f}",
                    ha="center",
                    va="center",
                    fontsize=8.0,
                    bbox={"facecolor": style.PAPER, "edgecolor": "none", "alpha": 0.85, "pad": 1.0},
                )
        lefts += share
    ax.set_yticks(range(len(budgets)), [str(k) for k in budgets])
    ax.set_ylim(len(budgets) - 0.5, -0.5)
    ax.tick_params(axis="y", which="both", length=0)
    ax.set_xlim(0, 100)
    ax.set_xlabel("share of the interval's variance / %")
    style.legend_above(ax, over_figure=own)
    return ax


def describe_budget(budgets: Mapping[str, Mapping[str, float]]) -> str:
    """The picture in words."""
    parts = []
    for name, shares in budgets.items():
        largest = max(shares, key=lambda p: shares.get(p) or 0.0)
        parts.append(
            f"{name} mostly {BUDGET_WORDS.get(largest, largest)} "
            f"({100 * float(shares[largest] or 0):.0f} %)"
        )
    return f"Shares of the variance: {'; '.join(parts)}." if parts else ""
