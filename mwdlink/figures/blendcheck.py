"""The mixing rule held against blends that were weighed: fractions, residuals, rules."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from mwdlink.figures import shading, style
from mwdlink.figures.columns import Absent, numbers, positive, words
from mwdlink.figures.words import interval_of, number, percent, upper_first, value_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from pandas import DataFrame


@style.styled
def plot_recovered(
    blends: Sequence[Mapping[str, Any]], *, component: str | None = None, ax: Axes | None = None
) -> Axes:
    """Fraction recovered from the rheology against the fraction weighed, and the agreement.

    Parameters
    ----------
    blends : sequence of mappings
        `name`, `weighed` {component: fraction}, `recovered` {component: uncertain}, `agrees`.
    component : str, optional
        Whose fraction is shown; the first component unless given.
    """
    ax = style.new_axes(ax, height=108.0)
    component = component or next(iter(blends[0]["weighed"]), None)
    ax.plot(
        [0, 100],
        [0, 100],
        color=style.SOFT,
        linewidth=0.9,
        linestyle=(0, (4, 2)),
        label="agreement",
        zorder=1,
    )
    looks: dict[Any, tuple[str, str, str]] = {
        True: ("o", style.BLUE, "agrees"),
        False: ("X", style.VERMILION, "does not agree"),
        None: ("s", style.SOFT, "cannot judge"),
    }
    said: set[Any] = set()
    ends: list[float] = [0.0, 100.0]
    for k, entry in enumerate(blends):
        x = value_of((entry.get("weighed") or {}).get(component))
        found = (entry.get("recovered") or {}).get(component)
        y, between = value_of(found), interval_of(found)
        if x is None or y is None:
            continue
        verdict = entry.get("agrees")
        marker, color, label = looks.get(verdict, looks[None])
        if between is not None:
            ax.plot([100 * x] * 2, [100 * b for b in between], color=color, linewidth=1.3, zorder=2)
            ends += [100 * b for b in between]
        ax.plot(
            [100 * x],
            [100 * y],
            marker=marker,
            color=color,
            markerfacecolor=style.PAPER if marker != "X" else color,
            markersize=6.0,
            linestyle="none",
            zorder=3,
            label=None if verdict in said else label,
        )
        said.add(verdict)
        right = x < 0.72
        ax.annotate(
            str(entry.get("name", "")),
            (100 * x, 100 * y),
            xytext=(7 if right else -7, -9 if k % 2 else 3),
            textcoords="offset points",
            ha="left" if right else "right",
            fontsize=8.0,
        )
    ax.set_xlim(min(ends) - 3, max(ends) + 3)
    ax.set_ylim(min(ends) - 3, max(ends) + 3)
    ax.set_aspect("equal", adjustable="box")
    ax.set_anchor("N")
    ax.set_xlabel(f"{component} weighed / wt%")
    ax.set_ylabel(f"{component} recovered / wt%")
    style.legend_above(ax)
    return ax


def describe_recovered(blends: Sequence[Mapping[str, Any]]) -> str:
    """The picture in words."""
    parts = []
    for entry in blends:
        component = next(iter(entry.get("weighed") or {}), None)
        x = value_of((entry.get("weighed") or {}).get(component))
        y = value_of((entry.get("recovered") or {}).get(component))
        if x is None or y is None:
            continue
        verdicts: dict[Any, str] = {True: "agrees", False: "does not agree"}
        verdict = verdicts.get(entry.get("agrees"), "cannot be judged")
        parts.append(
            f"{entry.get('name')}: {percent(x)} {component} weighed, {percent(y)} recovered, "
            f"{verdict}"
        )
    return f"{'; '.join(parts)}." if parts else ""


@style.styled
def plot_blend_residuals(table: DataFrame, *, ax: Axes | None = None) -> Axes:
    """How far the predicted moduli of each blend lie from the measured ones, by frequency.

    Parameters
    ----------
    table : DataFrame
        `blend`, a frequency (`omega [rad/s]`, or `omega low [rad/s]` and `omega high [rad/s]` for
        decades) and `bias G' [decades]`, `bias G'' [decades]` (or `residual ...`), with
        `scatter G' [decades]` where known.
    """
    ax = style.new_axes(ax, height=82.0)
    names = words(table, "blend", "name", "sample") or [""] * len(table)
    x = numbers(table, "omega", "omega centre")
    if x is None:
        low, high = (
            numbers(table, "omega low", "omega from"),
            numbers(table, "omega high", "omega to"),
        )
        if low is None or high is None:
            raise Absent("the table needs a frequency")
        x = np.sqrt(low * high)
    top = 0.05
    drawn = 0
    for i, name in enumerate(dict.fromkeys(names)):
        rows = np.array([n == name for n in names])
        for j, modulus in enumerate(("G'", "G''")):
            bias = numbers(
                table,
                f"bias {modulus}",
                f"{modulus} bias",
                f"residual {modulus}",
                f"{modulus} residual",
            )
            if bias is None:
                continue
            scatter = numbers(table, f"scatter {modulus}", f"{modulus} scatter")
            look = style.data_look(i)
            if j:
                look |= {"fillstyle": "left", "markerfacecolor": look["color"]}
            good = rows & positive(x) & np.isfinite(bias)
            if not good.any():
                continue
            aside = 10.0 ** (0.035 * (2 * i + j - len(set(names)) + 0.5))
            if scatter is not None:
                ax.vlines(
                    x[good] * aside,
                    (bias - scatter)[good],
                    (bias + scatter)[good],
                    color=look["color"],
                    linewidth=0.9,
                    alpha=0.8,
                )
                top = max(top, float(np.nanmax(np.abs(bias[good]) + scatter[good])))
            ax.plot(x[good] * aside, bias[good], **look, label=name if j == 0 else None)
            top = max(top, float(np.nanmax(np.abs(bias[good]))))
            drawn += 1
    if not drawn:
        raise Absent("the table needs bias or residual columns")
    style.log_axis(ax.xaxis)
    good = positive(x)
    ax.set_xlim(*shading.span_of([x[good].min() / 1.5, x[good].max() * 1.5], 0.02))
    ax.axhline(0.0, color=style.INK, linewidth=0.8, zorder=1)
    ax.set_ylim(-1.2 * top, 1.2 * top)
    ax.text(
        0.02,
        0.03,
        "open: G′, half filled: G″",
        transform=ax.transAxes,
        fontsize=8.0,
        color=style.SOFT,
    )
    ax.set_xlabel("angular frequency ω / rad s⁻¹")
    ax.set_ylabel("predicted against measured / decades")
    style.legend_above(ax)
    return ax


def describe_blend_residuals(table: DataFrame) -> str:
    """The picture in words."""
    parts = []
    for modulus, spoken in (("G'", "storage modulus"), ("G''", "loss modulus")):
        bias = numbers(
            table,
            f"bias {modulus}",
            f"{modulus} bias",
            f"residual {modulus}",
            f"{modulus} residual",
        )
        if bias is not None:
            parts.append(
                f"{spoken}: mean {number(np.nanmean(bias), 2)}, "
                f"largest {number(np.nanmax(np.abs(bias)), 2)} decades"
            )
    return f"{upper_first('; '.join(parts))}." if parts else ""


def rule_label(rule: Mapping[str, Any]) -> str:
    exponent = value_of(rule.get("exponent"))
    return (
        f"{rule.get('kernel')}, {number(exponent)}"
        if exponent is not None
        else str(rule.get("kernel"))
    )


@style.styled
def plot_rules(rules: Sequence[Mapping[str, Any]], *, ax: Axes | None = None) -> Axes:
    """Kernel and exponent ranked by how far they miss a blend that was left out."""
    shown = [r for r in rules if value_of(r.get("scatter_decades")) is not None][:14]
    ax = style.new_axes(ax, height=28.0 + 6.0 * max(len(shown), 2))
    values = [float(value_of(r["scatter_decades"]) or 0.0) for r in shown]
    for row, x in enumerate(values):
        ax.plot([0, x], [row, row], color=style.SOFT, linewidth=0.9, zorder=1)
        ax.plot(
            [x],
            [row],
            marker="o",
            color=style.BLUE,
            markerfacecolor=style.BLUE if row == int(np.argmin(values)) else style.PAPER,
            linestyle="none",
        )
    ax.set_yticks(range(len(shown)), [rule_label(r) for r in shown])
    ax.set_ylim(len(shown) - 0.5, -0.5)
    ax.tick_params(axis="y", which="both", length=0)
    ax.set_xlim(0, 1.12 * max(values))
    ax.set_xlabel("scatter, blend left out / decades")
    return ax


def describe_rules(rules: Sequence[Mapping[str, Any]]) -> str:
    """The picture in words."""
    shown = [r for r in rules if value_of(r.get("scatter_decades")) is not None]
    if not shown:
        return ""
    best = min(shown, key=lambda r: value_of(r["scatter_decades"]) or 0.0)
    worst = max(shown, key=lambda r: value_of(r["scatter_decades"]) or 0.0)
    return (
        f"Scatter on a blend left out: least with {rule_label(best)} "
        f"({number(value_of(best['scatter_decades']), 2)} decades), most with {rule_label(worst)} "
        f"({number(value_of(worst['scatter_decades']), 2)} decades)."
    )
