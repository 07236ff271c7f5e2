"""Which pictures the results of decisions have: blends, checks, tails, data sheets, lots."""

from __future__ import annotations

from collections.abc import Mapping
from functools import partial
from typing import Any

from mwdlink.figures import blend, blendcheck, claims, distribution, moduli, support, trend
from mwdlink.figures.columns import bare, numbers
from mwdlink.figures.extract import level_of, table_of
from mwdlink.figures.shelf import Shelf, add_choices, add_curves, add_distribution, add_fit
from mwdlink.figures.words import upper_first, value_of

MOST_PROPERTIES = 6
MOST_TRENDS = 6


def add_blend(shelf: Shelf) -> None:
    _fractions(shelf)
    add_distribution(shelf)
    add_curves(shelf)
    add_choices(shelf)


def _fractions(shelf: Shelf) -> None:
    table = shelf.table("fractions.csv")
    if table is None or blend.fraction_header(table) is None:
        return
    # of several targets on one property the first is drawn; the report's table has all
    aims: dict[str, Mapping[str, Any]] = {}
    for target in shelf.record.get("targets") or [shelf.record.get("target")]:
        header = blend.target_header(table, target)
        if header is not None:
            aims.setdefault(header, target)
    headers = [*aims, *[h for h in blend.property_headers(table) if h not in aims]]
    asked = shelf.record.get("blend")
    fractions = asked.get("fractions") if isinstance(asked, Mapping) else None
    first = None
    if isinstance(fractions, Mapping) and len(fractions) == 2:
        first = value_of(next(iter(fractions.values())))
    elif isinstance(fractions, (list, tuple)) and len(fractions) == 2:
        first = value_of(fractions[0])
    for i, header in enumerate(headers[: max(MOST_PROPERTIES, len(aims))]):
        name = (
            "fractions"
            if i == 0
            else "fractions-"
            + "".join(c if c.isalnum() else "-" for c in bare(header).casefold()).strip("-")
        )
        wanted = aims.get(header)
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


def add_blendcheck(shelf: Shelf) -> None:
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


def add_tail(shelf: Shelf) -> None:
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
    add_fit(shelf)
    explanations = shelf.record.get("explanations") or []
    if explanations:
        shelf.add(
            "explanations",
            "Rival explanations",
            table_of(explanations),
            lambda: support.plot_explanations(explanations),
            lambda: support.describe_explanations(explanations),
        )
    add_choices(shelf)


def add_datasheet(shelf: Shelf) -> None:
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


def add_calibrate(shelf: Shelf) -> None:
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


def add_batch(shelf: Shelf) -> None:
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
