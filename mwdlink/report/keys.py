"""Keys of result.json in words: name, unit, status, and whole records as plain tables.

It knows a few names by heart and reads the rest off the key, so that a new command gets a
readable page without a change here.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from mwdlink.figures.claims import spoken
from mwdlink.figures.words import number, short, split_unit, upper_first

PRINTED = {"g/10min": "g/10 min", "cm3/10min": "cm³/10 min", "kg/m3": "kg/m³", "C": "°C"}
"""Units as a page prints them, where a table's header keeps to plain letters."""

WORDS = {
    "Mn": "number average Mn",
    "Mw": "weight average Mw",
    "Mz": "z average Mz",
    "M_low": "lower end, M",
    "M_high": "upper end, M",
    "Mw_within_window": "Mw of the weight inside the window",
    "eta0": "zero-shear viscosity η₀",
    "Je0": "steady compliance Je⁰",
    "mean_time": "mean relaxation time",
    "chi2_per_point": "misfit χ² per point",
    "smoothing": "smoothing λ",
    "tau_low": "shortest relaxation time",
    "tau_high": "longest relaxation time",
    "load": "load",
    "MFR": "melt flow rate MFR",
    "MVR": "melt volume rate MVR",
    "omega": "frequency",
    "G": "modulus",
    "c1": "WLF c₁",
    "c2": "WLF c₂",
    "Gr": "Gr, freedom of the long chains' tube",
    "time": "time",
    "M": "molar mass",
    "eta0_ratio": "η₀ measured / predicted",
}

CAPTIONS = {
    "averages": "Averages",
    "terminal": "Terminal properties",
    "crossover": "Crossover of G′ and G″",
    "melt_flow": "Melt flow rates",
    "indices": "Indices",
    "window": "What the sweep can see",
    "outside_window": "Weight outside the window",
    "above": "Weight above a molar mass",
    "fit": "Fit",
    "kernels": "Kernels",
    "cross_check": "Cross-checks that share no code with the fit",
    "peaks": "Peaks",
    "supported": "Relaxation times the data support",
    "consistency": "Consistency of the data",
    "shift": "Shift law",
    "superposition": "Superposition",
    "branching": "Signs of branching",
    "rest": "How long to wait",
    "blend": "Blend",
    "target": "Target",
    "blends": "Blends",
    "left_out": "Blends left out in turn",
    "rules": "Rules, by their scatter on a blend left out",
    "tail": "Tail",
    "explanations": "Explanations weighed",
    "claims": "Claims",
    "viscosity": "Viscosity law",
    "network": "Entanglement network",
    "failed": "Inputs that failed",
}

STATUS = {
    "resolved": "resolved by the data",
    "lower_bound": "lower bound",
    "upper_bound": "upper bound",
    "assumed": "assumed, not from the data",
}

MOST_ENTRIES = 24
"""Entries of a list shown in a table."""

LEFT_OUT = frozenset(
    {
        "schema",
        "version",
        "versions",
        "command",
        "inputs",
        "labels",
        "polymer",
        "model",
        "seed",
        "warnings",
        "bands",
        "advice",
        "verdict",
        "settings",
        "omitted",
        "noise",
        "central_model",
    }
)


def name_and_unit(key: str) -> tuple[str, str]:
    """Words and unit of a key: `eta0_Pa_s` is (zero-shear viscosity η₀, Pa s)."""
    end = ""
    for suffix, side in (("_low", ", low"), ("_high", ", high")):
        if key.endswith(suffix) and key not in WORDS:
            key, end = key.removesuffix(suffix), side
            break
    key, unit = split_unit(key)
    unit = PRINTED.get(unit, unit)
    if not end and key not in WORDS and key.endswith(("_low", "_high")):
        key, _, side = key.rpartition("_")
        end = f", {side}"
    if key in WORDS:
        return WORDS[key] + end, unit
    at = re.fullmatch(r"(eta|tan_delta|thinning)_([\d.eE+-]+)(?:_([\d.eE+-]+))?", key)
    if at:
        kind = {"eta": "viscosity", "tan_delta": "tan δ", "thinning": "thinning, viscosity"}[at[1]]
        if at[3]:
            return f"{kind} at {at[2]} over {at[3]} rad/s{end}", unit
        return f"{kind} at {at[2]} rad/s{end}", unit or ("Pa s" if at[1] == "eta" else "")
    return key.replace("_", " ") + end, unit


def heading(key: str) -> str:
    """A key as a column's or row's heading with its unit."""
    words, unit = name_and_unit(key)
    return f"{upper_first(words)} / {unit}" if unit else upper_first(words)


def is_uncertain(x: Any) -> bool:
    return isinstance(x, Mapping) and "value" in x and "status" in x and "low" in x


def spoken_as(key: str, x: Any) -> str:
    """A value under its key: names of quantities are keys themselves."""
    if key in {"also_off", "rivals"} and isinstance(x, (list, tuple)):
        return ", ".join(spoken(q) for q in x) or "none"
    return spoken(x) if key in {"quantity", "odd_one_out"} and isinstance(x, str) else said(x)


def said(x: Any) -> str:
    """Any value of a record as text."""
    if x is None:
        return "–"
    if isinstance(x, bool):
        return "yes" if x else "no"
    if isinstance(x, (int, float)):
        return str(x) if isinstance(x, int) else number(x)
    if isinstance(x, str):
        return x
    if is_uncertain(x):
        text = number(x["value"]) if x["value"] is not None else "not known"
        if x["low"] is not None and x["high"] is not None:
            text += f" ({number(x['low'])} to {number(x['high'])})"
        return (
            text if x["status"] == "resolved" else f"{text}, {STATUS.get(x['status'], x['status'])}"
        )
    if isinstance(x, Mapping):
        return (
            "; ".join(
                f"{name_and_unit(str(k))[0]} {said(v)}{_after(k)}"
                for k, v in x.items()
                if v is not None
            )
            or "–"
        )
    if isinstance(x, Sequence):
        return ", ".join(said(v) for v in x) or "–"
    return str(x)


def _after(key: Any) -> str:
    unit = name_and_unit(str(key))[1]
    return f" {unit}" if unit else ""


@dataclass(frozen=True)
class Block:
    """One table of a page.

    Attributes
    ----------
    caption : str
    head : tuple of str
    rows : tuple of tuple of str
        The first cell of each is its heading.
    """

    caption: str
    head: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]


def interval_words(x: Mapping[str, Any]) -> str:
    if x.get("low") is None or x.get("high") is None:
        return "–"
    return f"{number(x['low'])} to {number(x['high'])}"


def _quantity_row(key: str, x: Any, band: Any, before: str = "") -> tuple[str, ...]:
    words, unit = name_and_unit(key)
    name = upper_first(f"{before}{words}")
    if is_uncertain(x):
        level = x.get("level")
        status = STATUS.get(str(x["status"]), str(x["status"]))
        return (
            name,
            said(x["value"]),
            interval_words(x),
            "" if level is None else f"{short(100 * level)} %",
            unit,
            status,
        )
    if is_uncertain(band):
        level = band.get("level")
        return (
            name,
            said(x),
            interval_words(band),
            "" if level is None else f"{short(100 * level)} %",
            unit,
            "",
        )
    return name, spoken_as(key, x), "–", "", unit, ""


def _walk(entry: Mapping[str, Any], bands: Any, before: str = "") -> list[tuple[str, ...]]:
    rows: list[tuple[str, ...]] = []
    for key, x in entry.items():
        band = bands.get(key) if isinstance(bands, Mapping) else None
        if isinstance(x, Mapping) and not is_uncertain(x):
            if key.startswith("budget"):
                continue
            rows += _walk(x, band, f"{before}{name_and_unit(str(key))[0]}: ")
        elif x is not None:
            rows.append(_quantity_row(str(key), x, band, before))
    return rows


HEAD = ("Quantity", "Value", "Interval", "Level", "Unit", "Status")


def _trimmed(caption: str, rows: list[tuple[str, ...]]) -> Block:
    """A block of quantities without columns that say nothing."""
    keep = [0, 1] + [c for c in range(2, 6) if any(r[c] not in {"", "–"} for r in rows)]
    return Block(
        caption, tuple(HEAD[c] for c in keep), tuple(tuple(r[c] for c in keep) for r in rows)
    )


def _list_block(caption: str, entries: Sequence[Mapping[str, Any]], bands: Any) -> Block:
    keys = list(
        dict.fromkeys(str(k) for e in entries for k in e if not str(k).startswith("budget"))
    )
    keys = [k for k in keys if any(e.get(k) is not None for e in entries)] or keys
    rows = []
    for i, e in enumerate(entries):
        band = (
            bands[i]
            if isinstance(bands, Sequence) and i < len(bands) and isinstance(bands[i], Mapping)
            else {}
        )
        row = []
        for k in keys:
            text = spoken_as(k, e.get(k))
            if is_uncertain(band.get(k)) and not is_uncertain(e.get(k)):
                text += f" ({interval_words(band[k])})"
            row.append(text)
        rows.append(tuple(row))
    if len(rows) > MOST_ENTRIES:
        caption += f" (the first {MOST_ENTRIES} of {len(rows)}; all in result.json)"
    return Block(caption, tuple(heading(k) for k in keys), tuple(rows[:MOST_ENTRIES]))


def blocks(record: Mapping[str, Any]) -> list[Block]:
    """All numbers of a record as tables, in the record's order."""
    bands = record.get("bands") or {}
    out: list[Block] = []
    single: list[tuple[str, ...]] = []
    for key, x in record.items():
        if key in LEFT_OUT or x is None:
            continue
        if key == "explanations" and all(isinstance(e, str) for e in x):
            continue
        caption = CAPTIONS.get(key, upper_first(name_and_unit(key)[0]))
        band = bands.get(key) if isinstance(bands, Mapping) else None
        if isinstance(x, Mapping) and not is_uncertain(x):
            rows = _walk(x, band)
            if rows:
                out.append(_trimmed(caption, rows))
        elif (
            isinstance(x, (list, tuple))
            and x
            and all(isinstance(e, Mapping) and not is_uncertain(e) for e in x)
        ):
            out.append(_list_block(caption, x, band))
        elif isinstance(x, (list, tuple)) and len(x) > 40:
            continue
        elif x != [] and x != {}:
            single.append(_quantity_row(str(key), x, band))
    if single:
        out.append(_trimmed("Other numbers", single))
    return out


def card_block(polymer: Mapping[str, Any]) -> Block | None:
    """The card's numbers with status and source."""
    rows: list[tuple[str, ...]] = []

    def take(section: Mapping[str, Any], of: str) -> None:
        for key, value in section.items():
            key = str(key)
            if isinstance(value, Mapping):
                if "value" in value and "status" in value:
                    rows.append(
                        (
                            *_card_name(key, of),
                            said(value["value"]),
                            str(value["status"]),
                            str(value.get("source", "")),
                        )
                    )
                else:
                    take(value, key)
            elif key.endswith(("_status", "_source")) or key in {
                "name",
                "title",
                "note",
                "status",
                "source",
            }:
                continue
            elif isinstance(value, (int, float, list, tuple)) and not isinstance(value, bool):
                status = section.get(f"{key}_status", section.get("status", ""))
                source = section.get(f"{key}_source", section.get("source", ""))
                rows.append(
                    (*_card_name(key, of), _card_value(value), str(status or ""), str(source or ""))
                )

    take(polymer, "")
    if not rows:
        return None
    return Block(
        "Numbers of the polymer card", ("Number", "Unit", "Value", "Status", "Source"), tuple(rows)
    )


CARD_WORDS = {
    "coefficient": ("coefficient of η₀ = K Mᵃ", "Pa s (g/mol)⁻ᵃ"),
    "exponent": ("exponent a of η₀ = K Mᵃ", ""),
    "a": ("exponent a", ""),
    "kg_per_m3": ("density of the melt", "kg/m³"),
    "K_dL_per_g": ("coefficient K", "dL/g"),
}


def _card_name(key: str, of: str) -> tuple[str, str]:
    words, unit = CARD_WORDS.get(key, name_and_unit(key))
    return (f"{of.replace('_', ' ')}: {words}" if of else words), unit


def _card_value(x: Any) -> str:
    if isinstance(x, (list, tuple)):
        return " to ".join(_card_value(v) for v in x)
    return short(x, 5) if isinstance(x, float) else said(x)
