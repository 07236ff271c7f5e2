"""Master curve: the shifted sweeps over one another, and the shift factors with their law."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from mwdlink.figures import shading, style
from mwdlink.figures.columns import Absent, band, find, numbers, positive
from mwdlink.figures.moduli import modelled
from mwdlink.figures.words import number, value_of, with_interval

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from pandas import DataFrame

TEMPERATURE = ("measured at", "T", "temperature")
REDUCED = ("omega aT", "omega a_T", "reduced omega", "omega reduced", "omega")
SHIFT = ("aT", "a_T", "shift factor")
VERTICAL = ("bT", "b_T", "vertical shift")


def by_temperature(table: DataFrame) -> dict[str, DataFrame]:
    """Label (`190 °C`) to the rows of each temperature, coldest first."""
    header = find(table, *TEMPERATURE)
    if header is None:
        return {"all": table}
    values = np.asarray(table[header], dtype=float)
    out = {}
    steps = sorted(set(values[np.isfinite(values)].tolist()))
    # a tenth of a degree, as instruments show it, unless steps lie closer
    digits = 1 if len({round(t, 1) for t in steps}) == len(steps) else 6
    for t in steps:
        out[f"{round(t, digits):g} °C"] = table[values == t]
    return out


@style.styled
def plot_master(
    table: DataFrame, *, reference_C: float | None = None, ax: Axes | None = None
) -> Axes:
    """The shifted moduli of all temperatures over one another.

    Parameters
    ----------
    table : DataFrame
        `omega [rad/s]` (already shifted), `G' [Pa]`, `G'' [Pa]` and `T [C]`.
    reference_C : float, optional
        The temperature everything was brought to [C].
    """
    own = ax is None
    ax = style.new_axes(ax)
    xs: list[float] = []
    ys: list[float] = []
    for i, (label, rows) in enumerate(by_temperature(table).items()):
        x = numbers(rows, *REDUCED)
        for name in ("G'", "G''"):
            y = numbers(rows, name)
            if x is None or y is None:
                continue
            good = positive(x, y)
            look = style.data_look(i) | {"markersize": 4.0}
            if name == "G''":
                # the loss modulus: same sign, half filled, so that grey print tells them apart
                look |= {"fillstyle": "left", "markerfacecolor": look["color"]}
            ax.plot(x[good], y[good], **look, label=label if name == "G'" else None)
            xs += [x[good].min(), x[good].max()]
            ys += [y[good].min(), y[good].max()]
    _common_curve(ax, table)
    if not xs:
        raise Absent("the table needs the columns omega [rad/s], G' [Pa] and G'' [Pa]")
    style.log_axes(ax)
    ax.set_xlim(*shading.span_of(xs, 0.02))
    ax.set_ylim(*shading.span_of(ys, 0.03))
    ax.text(
        0.97,
        0.04,
        "open: G′\nhalf filled: G″",
        transform=ax.transAxes,
        ha="right",
        va="bottom",
        fontsize=8.0,
        color=style.SOFT,
    )
    at = "" if reference_C is None else f" (at {reference_C:g} °C)"
    ax.set_xlabel(rf"$\omega\, a_T$ / rad s$^{{-1}}${at}")
    ax.set_ylabel("G′, G″ / Pa")
    rows = style.legend_above(ax)
    style.equal_decades(ax, own_figure=own, rows=rows)
    return ax


def _common_curve(ax: Axes, table: DataFrame) -> None:
    """The smooth curve put through all temperatures, where the table has it."""
    x = numbers(table, *REDUCED)
    for j, name in enumerate(("G'", "G''")):
        y = numbers(table, *modelled(name))
        if x is None or y is None:
            continue
        good = positive(x, y)
        order = np.argsort(x[good], kind="stable")
        ax.plot(
            x[good][order],
            y[good][order],
            color=style.SOFT,
            linewidth=0.9,
            linestyle=style.DASHES[j],
            zorder=1,
            label=None if j else "common curve",
        )


def describe_master(table: DataFrame, superposition: Mapping[str, Any] | None = None) -> str:
    """The picture in words."""
    names = list(by_temperature(table))
    text = f"Sweeps at {', '.join(names)} shifted over one another."
    if superposition:
        residual = value_of(superposition.get("residual"))
        passed = superposition.get("passed")
        if residual is not None:
            text += f" They differ by {number(residual, 2)} in the overlap"
            text += (
                "."
                if passed is None
                else (", which passes." if passed else ", which does not pass.")
            )
    return text


@style.styled
def plot_shifts(
    table: DataFrame,
    *,
    reference_C: float | None = None,
    shift: Mapping[str, Any] | None = None,
    level: float = 0.9,
    ax: Axes | None = None,
) -> Axes:
    """Shift factors against temperature with the laws put through them.

    Parameters
    ----------
    table : DataFrame
        `T [C]`, `a_T [-]` with low and high where known, and `a_T WLF [-]`, `a_T Arrhenius [-]`
        (the laws at the same temperatures) where they were fitted.
    """
    ax = style.new_axes(ax, height=72.0)
    temperature, shifts = numbers(table, *TEMPERATURE), numbers(table, *SHIFT)
    if temperature is None or shifts is None:
        raise Absent("the table needs the columns T [C] and a_T [-]")
    good = positive(shifts) & np.isfinite(temperature)
    between = band(table, *SHIFT)
    for i, (law, label) in enumerate(
        (
            (("aT WLF", "a_T WLF", "WLF"), "WLF"),
            (("aT Arrhenius", "a_T Arrhenius", "Arrhenius"), "Arrhenius"),
            (("aT law", "a_T law", "law"), "law"),
            (("aT card", "a_T card", "card"), "card"),
        )
    ):
        y = numbers(table, *law)
        if y is not None:
            both = positive(y)
            order = np.argsort(temperature[both])
            ax.plot(temperature[both][order], y[both][order], **style.series_look(i), label=label)
    if between is not None:
        both = good & positive(*between)
        ax.vlines(
            temperature[both],
            between[0][both],
            between[1][both],
            color=style.INK,
            linewidth=1.2,
            label=f"{100 * level:.0f} % interval",
        )
    ax.plot(
        temperature[good],
        shifts[good],
        **style.data_look(0) | {"color": style.INK},
        label="$a_T$ from the overlap",
    )
    vertical = numbers(table, *VERTICAL)
    if vertical is not None and np.nanmax(np.abs(vertical - 1.0)) > 1e-9:
        both = positive(vertical)
        ax.plot(temperature[both], vertical[both], **style.data_look(1), label="$b_T$")
    style.log_axis(ax.yaxis)
    ax.set_ylim(*shading.span_of([float(v) for v in shifts[good]], 0.08))
    spread = float(np.ptp(temperature[good])) or 10.0
    ax.set_xlim(temperature[good].min() - 0.06 * spread, temperature[good].max() + 0.06 * spread)
    if reference_C is not None:
        ax.axvline(reference_C, color=style.SOFT, linewidth=0.9, linestyle=(0, (4, 2)), zorder=0.8)
        ax.annotate(
            "reference",
            (reference_C, 0.03),
            xycoords=ax.get_xaxis_transform(),
            xytext=(-3, 0),
            va="bottom",
            textcoords="offset points",
            rotation=90,
            ha="right",
            fontsize=8.0,
            color=style.SOFT,
        )
    ax.set_xlabel("temperature / °C")
    ax.set_ylabel("shift factor / –")
    style.legend_above(ax)
    return ax


def describe_shifts(table: DataFrame, shift: Mapping[str, Any] | None = None) -> str:
    """The picture in words."""
    temperature, shifts = numbers(table, *TEMPERATURE), numbers(table, *SHIFT)
    if temperature is None or shifts is None:
        return ""
    k, m = int(np.nanargmin(temperature)), int(np.nanargmax(temperature))
    text = (
        f"From {number(shifts[k])} at {temperature[k]:.4g} °C to {number(shifts[m])} at "
        f"{temperature[m]:.4g} °C."
    )
    if shift:
        if value_of(shift.get("energy_kJ_per_mol")) is not None:
            text += f" Activation energy {with_interval(shift['energy_kJ_per_mol'], 'kJ/mol')}."
        elif value_of(shift.get("c1")) is not None:
            text += (
                f" WLF c1 {with_interval(shift['c1'])}, c2 {with_interval(shift.get('c2_K'), 'K')}."
            )
    return text
