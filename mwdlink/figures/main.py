"""The one picture that stands for a result, on given axes: what `result.plot()` shows."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from mwdlink.figures import (
    blendcheck,
    claims,
    decay,
    distribution,
    master,
    moduli,
    spectrum,
    support,
    trend,
)
from mwdlink.figures.columns import Absent
from mwdlink.figures.extract import level_of
from mwdlink.figures.words import value_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes


def plot_result(result: Any, ax: Axes | None = None) -> Axes:
    """The main picture of a result.

    Parameters
    ----------
    result : Result
        Anything with `command`, `to_dict()` and `tables()`.
    ax : Axes, optional
        Where to draw; a new figure unless given.

    Returns
    -------
    Axes

    Raises
    ------
    ModelError
        If the result has nothing to draw.
    """
    record, tables, command = result.to_dict(), result.tables(), result.command
    level = level_of(record)

    def table(name: str) -> Any:
        if tables.get(name) is None:
            raise Absent(f"this result has no table {name} to draw")
        return tables[name]

    if command in {"predict", "blend"}:
        return moduli.plot_moduli(table("sweep.csv"), level=level, ax=ax)
    if command == "invert":
        return distribution.plot_distribution(
            table("distribution.csv"),
            window=record.get("window"),
            averages=record.get("averages"),
            level=level,
            ax=ax,
        )
    if command == "spectrum":
        supported = record.get("supported")
        span = None
        if isinstance(supported, Mapping):
            span = (value_of(supported.get("tau_low_s")), value_of(supported.get("tau_high_s")))
        return spectrum.plot_spectrum(
            tables.get("spectrum.csv"),
            tables.get("continuous.csv"),
            supported=span,
            level=level,
            ax=ax,
        )
    if command == "master":
        return master.plot_master(
            table("master.csv"), reference_C=value_of(record.get("reference_C")), ax=ax
        )
    if command == "rest":
        return decay.plot_rest(table("rest.csv"), rest=record.get("rest") or [], ax=ax)
    if command == "blendcheck":
        blends = [b for b in record.get("blends") or [] if b.get("weighed") and b.get("recovered")]
        return (
            blendcheck.plot_recovered(blends, ax=ax)
            if blends
            else blendcheck.plot_blend_residuals(table("residuals.csv"), ax=ax)
        )
    if command == "tail":
        tail = record.get("tail") or {}
        return distribution.plot_tail(
            table("distribution.csv"),
            tables.get("gpc_only.csv"),
            window=record.get("window"),
            beyond=value_of(tail.get("M_g_per_mol")),
            fraction=tail.get("fraction"),
            level=level,
            ax=ax,
        )
    if command == "datasheet":
        return claims.plot_claims(record.get("claims") or [], ax=ax)
    if command == "calibrate":
        samples = table("residuals.csv")
        if support.has_pairs(samples):
            return support.plot_parity(samples, ax=ax)
        return support.plot_samples(samples, ax=ax)
    if command == "batch":
        summary = table("summary.csv")
        header = trend.trend_header(summary)
        return trend.plot_trend(
            summary, header, limits=(record.get("control") or {}).get(header), ax=ax
        )
    if command == "consistency":
        return moduli.plot_moduli(table("residuals.csv"), ax=ax)
    if command == "drift":
        return moduli.plot_drift(table("drift.csv"), ax=ax)
    raise Absent(f"no picture is known for {command!r}")
