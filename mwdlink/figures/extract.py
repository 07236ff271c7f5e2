"""What pictures take out of a record: its level, its budgets, its lists as tables.

Only JSON types are looked at, so that a result read back from disk serves as well.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

import pandas as pd

from mwdlink.figures.words import short, split_unit, value_of

Record = Mapping[str, Any]


def level_of(record: Record) -> float:
    """The probability of the result's intervals."""

    def levels(x: Any) -> Iterator[float]:
        if isinstance(x, Mapping):
            if "level" in x and "low" in x and isinstance(x["level"], (int, float)):
                yield float(x["level"])
            for v in x.values():
                yield from levels(v)
        elif isinstance(x, (list, tuple)) and len(x) < 200:
            for v in x:
                yield from levels(v)

    return next(levels(record), 0.9)


def table_of(entries: Sequence[Mapping[str, Any]]) -> pd.DataFrame:
    """A list of JSON objects as a table with units in its headers, intervals in columns beside."""
    rows = []
    for entry in entries:
        row: dict[str, Any] = {}
        for key, x in entry.items():
            name, unit = split_unit(str(key))
            name, of = name.replace("_", " "), f" [{unit}]" if unit else ""
            if isinstance(x, Mapping) and "value" in x:
                row |= {
                    f"{name}{of}": x["value"],
                    f"{name} low{of}": x.get("low"),
                    f"{name} high{of}": x.get("high"),
                }
                if x.get("status"):
                    row[f"{name} status"] = x["status"]
            elif isinstance(x, Mapping):
                for k, v in x.items():
                    if isinstance(v, Mapping):
                        row |= {
                            f"{name} {k}": v.get("value"),
                            f"{name} {k} low": v.get("low"),
                            f"{name} {k} high": v.get("high"),
                        }
                    else:
                        row[f"{name} {k}"] = v
            else:
                row[f"{name}{of}"] = x
        rows.append(row)
    return pd.DataFrame(rows)


def collect_budgets(record: Record) -> dict[str, dict[str, float]]:
    """Name to shares of variance of every quantity that carries a budget."""
    names = {
        "Mn": "Mn",
        "Mw": "Mw",
        "Mz": "Mz",
        "Mw_within_window": "Mw in window",
        "eta0": "η₀",
        "Je0": "Je⁰",
        "time_law_factor": "time law",
        "fraction": "tail",
        "omega": "crossover ω",
        "G": "crossover G",
    }

    def plain(key: str) -> str:
        name = split_unit(key)[0]
        at = re.fullmatch(r"(eta|tan_delta|MFR)_([\d.eE+-]+)", name)
        if at:
            return f"{({'eta': 'η', 'tan_delta': 'tan δ'}).get(at[1], at[1])} at {at[2]}"
        return names.get(name, name.replace("_", " "))

    out: dict[str, dict[str, float]] = {}

    def take(key: str, entry: Any, name: str = "") -> None:
        if isinstance(entry, Mapping) and entry.get("budget"):
            shares = {str(k): float(v or 0.0) for k, v in entry["budget"].items()}
            if sum(shares.values()) > 0:
                out.setdefault(name or plain(key), shares)

    for group in ("averages", "terminal", "tail", "bands"):
        entries = record.get(group)
        if isinstance(entries, Mapping):
            for key, entry in entries.items():
                take(key, entry)
                if group == "bands" and isinstance(entry, Mapping):
                    for k, v in entry.items():
                        take(k, v)
    take("time_law_factor", record.get("time_law_factor"))
    for entry in record.get("above") or []:
        mass = value_of(entry.get("M_g_per_mol"))
        if mass is not None:
            take("above", entry.get("fraction"), f"above {short(mass)}")
    return dict(list(out.items())[:8])
