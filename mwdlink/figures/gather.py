"""Which pictures a result has: chosen by its command from the tables and keys it carries.

Only tables and JSON keys are looked at, never the class, so that a result read back from disk
can be drawn as well. What is absent is left out without a word.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import partial
from typing import TYPE_CHECKING, Any

import pandas as pd

from mwdlink.figures import (
    blend,
    blendcheck,
    choices,
    claims,
    decay,
    distribution,
    flow,
    master,
    moduli,
    spectrum,
    style,
    support,
    trend,
)
from mwdlink.figures.columns import Absent, bare, find, numbers
from mwdlink.figures.extract import collect_budgets, level_of, table_of
from mwdlink.figures.picture import Picture
from mwdlink.figures.words import upper_first, value_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Tables = Mapping[str, pd.DataFrame]
Record = Mapping[str, Any]
MOST_PROPERTIES = 6
MOST_TRENDS = 6
KERNEL_QUANTITIES = (
    ("Mw_g_per_mol", "weight-average molar mass Mw / g mol⁻¹", "g/mol"),
    ("fraction", "weight fraction beyond", ""),
)


def _figure(ax: Axes) -> Figure:
    figure = style.figure_of(ax)
    if figure is None:
        raise Absent("axes without a figure")
    return figure


class _Shelf:
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


def _distribution(shelf: _Shelf) -> None:
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


def _moduli(shelf: _Shelf, source: str, data: pd.DataFrame | None = None) -> None:
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


def _fit(shelf: _Shelf, source: str = "fit.csv") -> None:
    table = shelf.table(source)
    if table is None:
        return
    _moduli(shelf, source)
    if find(table, *decay.TIME) is not None:
        shelf.add(
            "relaxation",
            "Relaxation modulus",
            table,
            lambda: decay.plot_relaxation(table, level=level_of(shelf.record)),
            lambda: decay.describe_relaxation(table),
        )
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


def _spectrum(shelf: _Shelf) -> None:
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


def _curves(shelf: _Shelf) -> None:
    """Moduli, relaxation, flow and spectrum of a prediction."""
    _moduli(shelf, "sweep.csv")
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
    _spectrum(shelf)
    table = shelf.table("relaxation.csv")
    if table is not None:
        shelf.add(
            "relaxation",
            "Relaxation modulus",
            table,
            lambda: decay.plot_relaxation(table, level=level_of(shelf.record)),
            lambda: decay.describe_relaxation(table),
        )


def _choices(shelf: _Shelf) -> None:
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


def _predict(shelf: _Shelf) -> None:
    _distribution(shelf)
    _curves(shelf)
    _choices(shelf)


def _invert(shelf: _Shelf) -> None:
    _distribution(shelf)
    _fit(shelf)
    _choices(shelf)


def _spectrum_command(shelf: _Shelf) -> None:
    _spectrum(shelf)
    _fit(shelf)
    _drift(shelf)


def _master(shelf: _Shelf) -> None:
    table, shifts = shelf.table("master.csv"), shelf.table("shifts.csv")
    reference = value_of(shelf.record.get("reference_C"))
    if table is not None:
        superposition = shelf.record.get("superposition")
        shelf.add(
            "master",
            "Master curve",
            table,
            lambda: master.plot_master(table, reference_C=reference),
            lambda: master.describe_master(table, superposition),
        )
    if shifts is not None:
        shift = shelf.record.get("shift")
        shelf.add(
            "shifts",
            "Shift factors",
            shifts,
            lambda: master.plot_shifts(shifts, reference_C=reference, shift=shift),
            lambda: master.describe_shifts(shifts, shift),
        )
    angles = shelf.table("phase_angle.csv")
    table = table if angles is None else angles
    if table is not None:
        curves = master.by_temperature(table)
        shelf.add(
            "phase-angle",
            "Phase angle against complex modulus",
            table,
            lambda: moduli.plot_phase_angle(curves),
            lambda: moduli.describe_phase_angle(curves),
        )


def _rest(shelf: _Shelf) -> None:
    table = shelf.table("rest.csv")
    if table is not None:
        rest = shelf.record.get("rest") or []
        shelf.add(
            "rest",
            "Stress left while waiting",
            table,
            lambda: decay.plot_rest(table, rest=rest),
            lambda: decay.describe_rest(rest),
        )


def _blend(shelf: _Shelf) -> None:
    _fractions(shelf)
    _distribution(shelf)
    _curves(shelf)
    _choices(shelf)


def _fractions(shelf: _Shelf) -> None:
    table = shelf.table("fractions.csv")
    if table is None or blend.fraction_header(table) is None:
        return
    target = shelf.record.get("target")
    aimed = blend.target_header(table, target)
    headers = blend.property_headers(table)
    if aimed is not None:
        headers = [aimed, *[h for h in headers if h != aimed]]
    asked = shelf.record.get("blend")
    fractions = asked.get("fractions") if isinstance(asked, Mapping) else None
    first = None
    if isinstance(fractions, Mapping) and len(fractions) == 2:
        first = value_of(next(iter(fractions.values())))
    elif isinstance(fractions, (list, tuple)) and len(fractions) == 2:
        first = value_of(fractions[0])
    for i, header in enumerate(headers[:MOST_PROPERTIES]):
        name = (
            "fractions"
            if i == 0
            else "fractions-"
            + "".join(c if c.isalnum() else "-" for c in bare(header).casefold()).strip("-")
        )
        wanted = target if header == aimed else None
        keep = [
            c
            for c in table.columns
            if c == blend.fraction_header(table) or bare(str(c)).startswith(bare(header))
        ]
        shelf.add(
            name,
            f"{upper_first(blend.property_words(header))} against the fraction",
            table[keep],
            partial(
                blend.plot_property,
                table,
                header,
                target=wanted,
                fraction=first,
                level=level_of(shelf.record),
            ),
            partial(blend.describe_property, table, header, wanted),
        )


def _blendcheck(shelf: _Shelf) -> None:
    blends = [
        b for b in shelf.record.get("blends") or [] if b.get("weighed") and b.get("recovered")
    ]
    if blends:
        shelf.add(
            "recovered",
            "Recovered against weighed fractions",
            table_of(blends),
            lambda: blendcheck.plot_recovered(blends),
            lambda: blendcheck.describe_recovered(blends),
        )
    residuals = shelf.table("residuals.csv")
    if residuals is not None:
        shelf.add(
            "residuals",
            "Predicted against measured, by decade",
            residuals,
            lambda: blendcheck.plot_blend_residuals(residuals),
            lambda: blendcheck.describe_blend_residuals(residuals),
        )
    rules = shelf.record.get("rules") or []
    if any(value_of(r.get("scatter_decades")) is not None for r in rules):
        shelf.add(
            "rules",
            "Rules ranked",
            table_of(rules),
            lambda: blendcheck.plot_rules(rules),
            lambda: blendcheck.describe_rules(rules),
        )


def _tail(shelf: _Shelf) -> None:
    joint, gpc = shelf.table("distribution.csv"), shelf.table("gpc_only.csv")
    tail = shelf.record.get("tail")
    tail = tail if isinstance(tail, Mapping) else {}
    if joint is not None:
        shelf.add(
            "distribution",
            "The high end of the distribution",
            joint,
            lambda: distribution.plot_tail(
                joint,
                gpc,
                beyond=value_of(tail.get("M_g_per_mol")),
                window=shelf.record.get("window"),
                gpc_high=value_of(tail.get("gpc_high_g_per_mol")),
                fraction=tail.get("fraction"),
                level=level_of(shelf.record),
            ),
            lambda: distribution.describe_tail(joint, tail),
        )
    _fit(shelf)
    explanations = shelf.record.get("explanations") or []
    if explanations:
        shelf.add(
            "explanations",
            "Rival explanations",
            table_of(explanations),
            lambda: support.plot_explanations(explanations),
            lambda: support.describe_explanations(explanations),
        )
    _choices(shelf)


def _datasheet(shelf: _Shelf) -> None:
    entries = shelf.record.get("claims") or []
    if entries:
        table = shelf.table("claims.csv")
        shelf.add(
            "claims",
            "The sheet's claims",
            table_of(entries) if table is None else table,
            lambda: claims.plot_claims(entries),
            lambda: claims.describe_claims(entries),
        )


def _calibrate(shelf: _Shelf) -> None:
    table = shelf.table("residuals.csv")
    if table is None:
        return
    if support.has_pairs(table):
        shelf.add(
            "law",
            "The law through the samples",
            table,
            lambda: support.plot_parity(table),
            lambda: support.describe_parity(table),
        )
    if support.sample_columns(table):
        shelf.add(
            "samples",
            "The fitted moduli against each sample",
            table,
            lambda: support.plot_samples(table),
            lambda: support.describe_samples(table),
        )
    if moduli.residual_columns(table):
        shelf.add(
            "residuals",
            "Residuals",
            table,
            lambda: moduli.plot_residuals(table),
            lambda: moduli.describe_residuals(table),
        )


def _batch(shelf: _Shelf) -> None:
    table = shelf.table("summary.csv")
    if table is None:
        return
    limits = shelf.record.get("control")
    limits = limits if isinstance(limits, Mapping) else {}
    # what has limits is charted; without any, the quantity people ask for first
    headers = [h for h in limits if numbers(table, h) is not None]
    if not headers:
        headers = [h for h in (trend.trend_header(table),) if h and numbers(table, h) is not None]
    for header in headers[:MOST_TRENDS]:
        name = "".join(c if c.isalnum() else "-" for c in bare(header).casefold()).strip("-")
        own = limits.get(header)
        shelf.add(
            f"trend-{name}",
            f"{bare(header)} over the lots",
            table,
            partial(trend.plot_trend, table, header, limits=own),
            partial(trend.describe_trend, table, header, own),
        )


def _consistency(shelf: _Shelf) -> None:
    _fit(shelf, "residuals.csv")


def _drift(shelf: _Shelf) -> None:
    table = shelf.table("drift.csv")
    if table is not None:
        shelf.add(
            "drift",
            "Change between the sweeps before and after",
            table,
            lambda: moduli.plot_drift(table),
            lambda: moduli.describe_drift(table),
        )


_BY_COMMAND: dict[str, Callable[[_Shelf], None]] = {
    "predict": _predict,
    "invert": _invert,
    "spectrum": _spectrum_command,
    "master": _master,
    "rest": _rest,
    "blend": _blend,
    "blendcheck": _blendcheck,
    "tail": _tail,
    "datasheet": _datasheet,
    "calibrate": _calibrate,
    "batch": _batch,
    "consistency": _consistency,
    "drift": _drift,
}


def pictures_of(command: str, record: Record, tables: Tables) -> dict[str, Picture]:
    """The pictures of a command's record and tables, the most important first."""
    shelf = _Shelf({**record, "command": command}, tables)
    draw = _BY_COMMAND.get(command)
    if draw is not None:
        with style.context():
            draw(shelf)
    return shelf.pictures


def figures_for(result: Any) -> dict[str, Picture]:
    """All pictures of a result, by name.

    Parameters
    ----------
    result : Result
        Anything with `command`, `to_dict()` and `tables()`.
    """
    return pictures_of(result.command, result.to_dict(), result.tables())
