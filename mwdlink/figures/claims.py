"""A data sheet's claims, each against what all the others lead one to expect."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from mwdlink.figures import style
from mwdlink.figures.words import interval_of, listed, number, upper_first, value_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes

LOOKS = {
    "consistent": ("o", style.BLUE),
    "strained": ("D", style.PURPLE),
    "inconsistent": ("X", style.VERMILION),
    "cannot judge": ("s", style.SOFT),
}


def spoken(quantity: str) -> str:
    """A claim's key in words and symbols."""
    plain = {
        "Mn_g_per_mol": "Mn",
        "Mw_g_per_mol": "Mw",
        "Mz_g_per_mol": "Mz",
        "dispersity": "dispersity",
        "eta0_Pa_s": "η₀",
        "flow_rate_ratio": "flow rate ratio",
        "intrinsic_viscosity": "[η]",
        "activation_energy": "activation energy",
    }
    if quantity in plain:
        return plain[quantity]
    # where a sheet gives both rates of one test
    for end, kind in ((" MVR", "volume flow"), (" MFR", "mass flow")):
        if quantity.endswith(end):
            quantity = quantity.removesuffix(end).replace("melt_flow", kind)
    text = quantity.replace("_", " ")
    for key, words in (
        ("crossover omega rad per s", "crossover frequency"),
        ("crossover G Pa", "crossover modulus"),
    ):
        text = text.replace(key, words)
    return text.removesuffix(" C") + " °C" if text.endswith(" C") else text


def spoken_plain(quantity: str) -> str:
    """The same without symbols, for descriptions."""
    return (
        spoken(quantity).replace("[η]", "intrinsic viscosity").replace("η₀", "zero-shear viscosity")
    )


@style.styled
def plot_claims(claims: Sequence[Mapping[str, Any]], *, ax: Axes | None = None) -> Axes:
    """Each claim as a dot over what the others lead one to expect, relative to that; z beside it.

    Parameters
    ----------
    claims : sequence of mappings
        `quantity`, `claimed`, `tolerance` (relative half-width), `expected` (uncertain), `z`,
        `verdict`.
    """
    own = ax is None
    ax = style.new_axes(ax, height=34.0 + 8.5 * max(len(claims), 2))
    said: set[str] = set()
    ends: list[float] = [-0.3, 0.3]
    rows = []
    for row, claim in enumerate(claims):
        claimed, middle = value_of(claim.get("claimed")), value_of(claim.get("expected"))
        verdict = str(claim.get("verdict") or "cannot judge")
        marker, color = LOOKS.get(verdict, LOOKS["cannot judge"])
        rows.append(spoken(str(claim.get("quantity"))))
        z = value_of(claim.get("z"))
        if claimed is None or middle is None or claimed <= 0 or middle <= 0:
            ax.text(
                0.0,
                row,
                "the others do not determine it",
                ha="center",
                va="center",
                fontsize=8.0,
                color=style.SOFT,
                bbox={"facecolor": style.PAPER, "edgecolor": "none", "pad": 1.0},
            )
            continue
        between = interval_of(claim.get("expected"))
        if between is not None and min(between) > 0:
            span = np.log10(np.asarray(between) / middle)
            ax.plot(
                span,
                [row, row],
                color=style.SOFT,
                linewidth=6.0,
                alpha=0.35,
                solid_capstyle="butt",
                zorder=1,
                label=None if "band" in said else "expected from the others",
            )
            said.add("band")
            ends += [float(v) for v in span]
        x = float(np.log10(claimed / middle))
        tolerance = value_of(claim.get("tolerance"))
        if tolerance is not None and 0 < tolerance < 1:
            error = np.log10([1 - tolerance, 1 + tolerance]) + x
            ax.plot(error, [row, row], color=color, linewidth=1.3, zorder=2)
            ends += [float(v) for v in error]
        ax.plot(
            [x],
            [row],
            marker=marker,
            color=color,
            markersize=6.5,
            linestyle="none",
            zorder=3,
            markerfacecolor=color if marker == "X" else style.PAPER,
            label=None if verdict in said else f"claimed: {verdict}",
        )
        said.add(verdict)
        ends.append(x)
        if z is not None:
            ax.annotate(
                "z = " + (f"{z:+.1f}".replace("-", "−") if abs(z) >= 0.05 else "0.0"),
                (1.0, row),
                xycoords=ax.get_yaxis_transform(),
                xytext=(4, 0),
                textcoords="offset points",
                va="center",
                fontsize=8.0,
            )
    ax.axvline(0.0, color=style.SOFT, linewidth=0.9, linestyle=(0, (4, 2)), zorder=0.5)
    ax.set_yticks(range(len(claims)), rows)
    ax.set_ylim(len(claims) - 0.5, -0.5)
    ax.tick_params(axis="y", which="both", length=0)
    reach = min(1.12 * max(abs(min(ends)), abs(max(ends))), 6.0)
    ax.set_xlim(-reach, reach)
    _mark_factors(ax, reach)
    ax.set_xlabel("claimed / expected from all the others")
    style.legend_above(ax, over_figure=own)
    return ax


# what a factor below one is written as: a fraction where that reads more easily
FACTORS = {1.1: "0.91", 1.25: "0.8", 1.5: "0.67", 2.0: "1/2", 3.0: "1/3", 5.0: "1/5",
           10.0: "0.1", 100.0: "0.01", 1000.0: "0.001", 1e4: "1e−4", 1e5: "1e−5"}  # fmt: skip


def _mark_factors(ax: Axes, reach: float) -> None:
    """Ticks in pairs of a factor up and the same factor down, far enough apart for their labels."""
    chosen: list[float] = []
    nearest = reach
    for f in sorted(FACTORS, reverse=True):
        x = float(np.log10(f))
        if x <= 0.95 * reach and x > 0.26 * reach and (not chosen or nearest - x > 0.26 * reach):
            chosen.append(f)
            nearest = x
    ticks = [-np.log10(f) for f in chosen] + [0.0] + [np.log10(f) for f in reversed(chosen)]
    labels = [FACTORS[f] for f in chosen] + ["1"] + [f"{f:g}" for f in reversed(chosen)]
    ax.set_xticks([float(t) for t in ticks], labels)


def describe_claims(claims: Sequence[Mapping[str, Any]]) -> str:
    """The picture in words."""
    groups: dict[str, list[str]] = {}
    for claim in claims:
        z = value_of(claim.get("z"))
        beside = "" if z is None else f" (z {number(z, 2)})"
        groups.setdefault(str(claim.get("verdict")), []).append(
            spoken_plain(str(claim.get("quantity"))) + beside
        )
    parts = [f"{verdict}: {listed(names)}" for verdict, names in groups.items()]
    return (
        f"Each against what the others lead one to expect. {upper_first('; '.join(parts))}."
        if parts
        else ""
    )
