"""Where pictures are collected, and those that several commands share.

Only tables and JSON keys are looked at, never the class, so that a result read back from disk
can be drawn as well. What is absent is left out without a word.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import partial
from typing import TYPE_CHECKING, Any

import pandas as pd

from mwdlink.figures import choices, decay, distribution, flow, moduli, spectrum, style
from mwdlink.figures.columns import Absent, find
from mwdlink.figures.extract import collect_budgets, level_of, table_of
from mwdlink.figures.picture import Picture
from mwdlink.figures.words import value_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Tables = Mapping[str, pd.DataFrame]
Record = Mapping[str, Any]
KERNEL_QUANTITIES = (
    ("Mw_g_per_mol", "weight-average molar mass Mw / g mol⁻¹", "g/mol"),
    ("fraction", "weight fraction beyond", ""),
)


def _figure(ax: Axes) -> Figure:
    figure = style.figure_of(ax)
    if figure is None:
        raise Absent("axes without a figure")
    return figure


class Shelf:
    """Collects pictures; a picture whose columns are absent is left out."""

    def __init__(self, record: Record, tables: Tables) -> None:
        self.record = record
        self.tables = {str(k): v for k, v in tables.items() if v is not None and len(v)}
        self.pictures: dict[str, Picture] = {}

    def table(self, name: str) -> pd.DataFrame | None:
        return self.tables.get(name)

    def add(
        self,
        name: str,
        title: str,
        data: pd.DataFrame,
        draw: Callable[[], Axes],
        describe: Callable[[], str],
    ) -> None:
        try:
            figure = _figure(draw())
        except Absent:
            return
        self.pictures[name] = Picture(name, figure, title, describe(), data)


def add_distribution(shelf: Shelf) -> None:
    table = shelf.table("distribution.csv")
    if table is None:
        return
    window, averages = shelf.record.get("window"), shelf.record.get("averages")
    said = "blend" if shelf.record.get("command") == "blend" else "distribution"
    shelf.add(
        "distribution",
        "Molecular-weight distribution",
        table,
        lambda: distribution.plot_distribution(
            table, window=window, averages=averages, label=said, level=level_of(shelf.record)
        ),
        lambda: distribution.describe_distribution(table, window, averages),
    )


def _add_moduli(shelf: Shelf, source: str, data: pd.DataFrame | None = None) -> None:
    table = shelf.table(source)
    if table is None or find(table, *moduli.FREQUENCY) is None:
        return
    if all(v is None for name, _ in moduli.SYMBOLS for v in moduli.columns_of(table, name)):
        return
    shelf.add(
        "moduli",
        "Storage and loss modulus",
        table,
        lambda: moduli.plot_moduli(table, data, level=level_of(shelf.record)),
        lambda: moduli.describe_moduli(table),
    )


def _add_relaxation(shelf: Shelf, table: pd.DataFrame) -> None:
    shelf.add(
        "relaxation",
        "Relaxation modulus",
        table,
        lambda: decay.plot_relaxation(table, level=level_of(shelf.record)),
        lambda: decay.describe_relaxation(table),
    )


def add_fit(shelf: Shelf, source: str = "fit.csv") -> None:
    table = shelf.table(source)
    if table is None:
        return
    _add_moduli(shelf, source)
    if find(table, *decay.TIME) is not None:
        _add_relaxation(shelf, table)
    if find(table, *flow.RATE) is not None:
        shelf.add(
            "flow",
            "Flow curve",
            table,
            lambda: flow.plot_flow(table, level=level_of(shelf.record)),
            lambda: flow.describe_flow(table),
        )
    if moduli.residual_columns(table):
        shelf.add(
            "residuals",
            "Residuals of the fit",
            table,
            lambda: moduli.plot_residuals(table),
            lambda: moduli.describe_residuals(table),
        )


def add_spectrum(shelf: Shelf) -> None:
    discrete, continuous = shelf.table("spectrum.csv"), shelf.table("continuous.csv")
    if discrete is None and continuous is None:
        return
    supported = shelf.record.get("supported")
    span = None
    if isinstance(supported, Mapping):
        span = (value_of(supported.get("tau_low_s")), value_of(supported.get("tau_high_s")))
    parts = [t for t in (discrete, continuous) if t is not None]
    shelf.add(
        "spectrum",
        "Relaxation spectrum",
        parts[0] if len(parts) == 1 else pd.concat(parts, ignore_index=True),
        lambda: spectrum.plot_spectrum(
            discrete, continuous, supported=span, level=level_of(shelf.record)
        ),
        lambda: spectrum.describe_spectrum(discrete, span),
    )


def add_curves(shelf: Shelf) -> None:
    """Moduli, relaxation, flow and spectrum of a prediction."""
    _add_moduli(shelf, "sweep.csv")
    curve = shelf.table("flow.csv")
    terminal = shelf.record.get("terminal")
    eta0 = value_of(terminal.get("eta0_Pa_s")) if isinstance(terminal, Mapping) else None
    if curve is not None:
        shelf.add(
            "flow",
            "Flow curve",
            curve,
            lambda: flow.plot_flow(curve, eta0=eta0, level=level_of(shelf.record)),
            lambda: flow.describe_flow(curve, eta0),
        )
    add_spectrum(shelf)
    table = shelf.table("relaxation.csv")
    if table is not None:
        _add_relaxation(shelf, table)


def add_choices(shelf: Shelf) -> None:
    """Kernels, smoothing and budget of an inversion."""
    kernels = [k for k in shelf.record.get("kernels") or [] if isinstance(k, Mapping)]
    for key, label, unit in KERNEL_QUANTITIES:
        if any(value_of(k.get(key)) is not None for k in kernels):
            shelf.add(
                "kernels",
                "The answer by each kernel",
                table_of(kernels),
                partial(choices.plot_kernels, kernels, key=key, label=label),
                partial(choices.describe_kernels, kernels, key, unit),
            )
            break
    budgets = collect_budgets(shelf.record)
    if budgets:
        data = pd.DataFrame.from_dict(budgets, orient="index").rename_axis("quantity").reset_index()
        shelf.add(
            "budget",
            "What the intervals are made of",
            data.fillna(0.0),
            lambda: choices.plot_budget(budgets),
            lambda: choices.describe_budget(budgets),
        )
    table = shelf.table("smoothing.csv")
    if table is not None:
        fit = shelf.record.get("fit")
        chosen = value_of(fit.get("smoothing")) if isinstance(fit, Mapping) else None
        shelf.add(
            "smoothing",
            "Choice of the smoothing",
            table,
            lambda: choices.plot_smoothing(table, chosen=chosen),
            lambda: choices.describe_smoothing(table, chosen),
        )
