"""A result's record as a summary to read in a terminal, 40 columns wide or more.

It knows no command: names and units are read off the keys of result.json, intervals off the
uncertain quantities or the parallel `bands`.
"""

from __future__ import annotations

import math
import re
import textwrap
from collections.abc import Iterator, Mapping
from typing import Any

# what every record has, or what only a machine or the report needs
_LEFT_OUT = {
    "schema", "version", "command", "inputs", "labels", "polymer", "model", "seed", "warnings",
    "bands", "cross_check", "central_model", "noise", "omitted", "settings", "points",
}  # fmt: skip

_UNITS = (
    ("_g_per_10min", "g/10 min"),
    ("_cm3_per_10min", "cm3/10 min"),
    ("_g_per_mol", "g/mol"),
    ("_kJ_per_mol", "kJ/mol"),
    ("_rad_per_s", "rad/s"),
    ("_dL_per_g", "dL/g"),
    ("_per_Pa", "1/Pa"),
    ("_Pa_s", "Pa s"),
    ("_decades", "decades"),
    ("_Pa", "Pa"),
    ("_kg", "kg"),
    ("_K", "K"),
    ("_C", "C"),
    ("_s", "s"),
)

# a property at a frequency, as in eta_0.1
_AT = re.compile(r"(eta|tan_delta)_([\d.]+)")

# these tell the entries of a list apart; the first one that is there becomes the entry's name
_NAMES = (
    "name",
    "quantity",
    "kernel",
    "rule",
    "flag",
    "after",
    "load_kg",
    "M_g_per_mol",
    "temperature_C",
    "path",
)

# entries of a list that are shown
MOST = 8

_OF_UNIT = ("claimed", "expected")
_BOUNDS = {"lower_bound": "at least ", "upper_bound": "at most "}


def number(x: float, digits: int = 3) -> str:
    """Three figures, no false precision: 0.0123, 12.3, 12300, 1.23e6."""
    if x == 0 or not math.isfinite(x):
        return "0" if x == 0 else "-"
    exponent = math.floor(math.log10(abs(float(f"{x:.{digits - 1}e}"))))
    if -3 <= exponent < 5:
        decimals = max(0, digits - 1 - exponent)
        return f"{round(x, digits - 1 - exponent):.{decimals}f}"
    mantissa, _, power = f"{x:.{digits - 1}e}".partition("e")
    return f"{mantissa}e{int(power)}"


def wrapped(text: str, width: int, indent: str = "", first: str = "") -> list[str]:
    """Text in lines of at most `width` columns: the first after `first`, the others indented."""
    return textwrap.wrap(
        " ".join(text.split()),
        max(width, 20),
        initial_indent=first,
        subsequent_indent=indent,
        break_on_hyphens=False,
    )


def summary(answer: str, record: Mapping[str, Any], width: int = 80) -> list[str]:
    """Lines of the summary: the answer first, then the numbers.

    Parameters
    ----------
    answer : str
        The answer in one sentence.
    record : mapping
        Content of result.json.
    width : int
        Columns to keep within.
    """
    lines = wrapped(answer, width)
    for key, value in record.items():
        if key in _LEFT_OUT or value is None or value in ([], {}):
            continue
        if key == "verdict" and isinstance(value, str) and value.startswith(answer):
            value = value[len(answer) :].strip()  # the answer was its first sentence
            if not value:
                continue
        band = (record.get("bands") or {}).get(key)
        lines += ["", *_section(key, value, band, width)]
    return lines


def _section(key: str, value: Any, band: Any, width: int) -> list[str]:
    title = _title(key)
    if isinstance(value, str):
        return wrapped(f"{title}: {value}", width, "  ")
    if isinstance(value, list) and all(isinstance(v, str) for v in value):
        return [title, *(line for v in value for line in wrapped(v, width, "    ", "  - "))]
    rows = list(_rows(key, value, band))
    single = len(rows) == 1 and not (isinstance(value, (Mapping, list)) and not _uncertain(value))
    return _aligned(rows, width, "") if single else [title, *_aligned(rows, width, "  ")]


Row = tuple[str, str, str]  # what, value with unit, interval and status


def _rows(key: str, value: Any, band: Any, prefix: str = "") -> Iterator[Row]:
    name, unit = _name_and_unit(key)
    label = f"{prefix}{name}"
    if _uncertain(value):
        if value.get("status") == "upper_bound" and value.get("low") == 0 and value.get("high"):
            # from zero up: the upper end is what is known
            yield label, f"less than {_with_unit(value['high'], key, unit)}", ""
            return
        bound = _BOUNDS.get(value.get("status"), "")
        yield label, bound + _with_unit(value.get("value"), key, unit), _interval(value, key)
    elif isinstance(value, Mapping):
        for k, v in value.items():
            if v is None or v in ([], {}) or k == "bands":
                continue
            yield from _rows(k, v, _part(band, k), prefix + _outer(k, v))
    elif isinstance(value, list):
        yield from _list(key, label, value, band)
    elif isinstance(value, bool):
        yield label, "yes" if value else "no", ""
    elif isinstance(value, (int, float)):
        bound = _BOUNDS.get(_part(band, "status"), "")
        yield label, bound + _with_unit(value, key, unit), _interval(band, key)
    elif isinstance(value, str):
        yield label, value, ""


def _list(key: str, label: str, value: list[Any], band: Any) -> Iterator[Row]:
    unit = _name_and_unit(key)[1]
    if all(isinstance(v, str) for v in value):
        yield label, ", ".join(value), ""
    elif all(isinstance(v, (int, float)) for v in value):
        between = " to " if len(value) == 2 else ", "
        yield label, f"{between.join(_plain(v, key) for v in value)} {unit}".strip(), ""
    else:
        for i, entry in enumerate(value[:MOST]):
            b = band[i] if isinstance(band, list) and i < len(band) else None
            yield from _entry(entry, b, key)
        if len(value) > MOST:
            yield "...", f"{len(value) - MOST} more in result.json", ""


def _nested(value: Any) -> bool:
    return isinstance(value, Mapping) and not _uncertain(value)


def _entry(entry: Any, band: Any, key: str) -> Iterator[Row]:
    """An entry of a list as one row: its name, then all that it holds."""
    if not isinstance(entry, Mapping) or _uncertain(entry):
        yield from _rows(key, entry, band)
        return
    key_of_name = next((k for k in _NAMES if k in entry), None)
    head = ""
    if isinstance(entry.get(key_of_name), str):
        head = entry[key_of_name]
        head = head if " " in head else _name_and_unit(head)[0]
    elif key_of_name is not None:
        name, unit = _name_and_unit(key_of_name)
        head = f"{number(entry[key_of_name])} {unit}"
        head = f"M {head}" if name == "M" else head
        ends = _interval(_folded(entry)[key_of_name], key_of_name)
        head += f" ({ends})" if ends else ""
    else:
        head = _name_and_unit(key)[0]
    if isinstance(entry.get("text"), str):  # its own sentence says it all
        name = str(entry.get("name") or entry.get("code") or "").replace("_", " ")
        state = f"{entry['state']}: " if isinstance(entry.get("state"), str) else ""
        yield name, f"{state}{entry['text']}", ""
        return
    rest = {k: v for k, v in _folded(entry).items() if k != key_of_name and v is not None}
    unit = rest.pop("unit", None)  # of the numbers whose keys do not name one
    rows = [row for k, v in rest.items() for row in _rows(k, v, _part(band, k), _outer(k, v))]
    if unit:
        rows = [(w, f"{t} {unit}" if w in _OF_UNIT else t, b) for w, t, b in rows]
    if len(rows) == 1 and not isinstance(rest[next(iter(rest))], str):
        yield f"{head} {rows[0][0]}".strip(), *rows[0][1:]
        return
    texts = {_name_and_unit(k)[0] for k, v in rest.items() if isinstance(v, str)}
    parts = []
    for what, text, between in rows:
        part = text if what in texts else f"{what} {text}"
        parts.append(f"{part} ({between})" if between else part)
    yield head, ", ".join(parts), ""


def _folded(entry: Mapping[str, Any]) -> dict[str, Any]:
    """An entry with each number and its own `_low` and `_high` made one."""
    out, ends = dict(entry), ("low", "high")
    for key, value in entry.items():
        suffix = next((s for s, _ in _UNITS if key.endswith(s) and key != s), "")
        stem = key.removesuffix(suffix)
        for names in ([f"{key}_{e}" for e in ends], [f"{stem}_{e}{suffix}" for e in ends]):
            if all(n in entry for n in names):
                low, high = (out.pop(n, None) for n in names)
                if isinstance(value, (int, float)):
                    out[key] = {"value": value, "low": low, "high": high, "level": None}
                break
    return out


def _part(band: Any, key: str) -> Any:
    return band.get(key) if isinstance(band, Mapping) else None


def _outer(key: str, value: Any) -> str:
    return f"{_name_and_unit(key)[0]} " if _nested(value) else ""


def _uncertain(value: Any) -> bool:
    return isinstance(value, Mapping) and "value" in value and "level" in value


def _is_share(key: str) -> bool:
    return key.rsplit(" ", 1)[-1] in ("fraction", "excess", "detection_limit")


def _plain(x: Any, key: str) -> str:
    if x is None:
        return "not known"
    return number(100 * x) if _is_share(key) else number(x)


def _with_unit(x: Any, key: str, unit: str) -> str:
    if x is None:
        return "not known"
    if isinstance(x, int) and not _is_share(key):
        return f"{x} {unit}".strip()
    return f"{_plain(x, key)} {unit}".strip()


def _interval(u: Any, key: str) -> str:
    if isinstance(u, (list, tuple)) and len(u) == 2:
        u = {"low": u[0], "high": u[1], "value": None}
    if not isinstance(u, Mapping):
        return ""
    low, high = u.get("low"), u.get("high")
    ends = ["" if end is None else _plain(end, key) for end in (low, high)]
    text = " to ".join(ends) if all(ends) and ends[0] != ends[1] else ""
    if u.get("status") == "assumed":
        return f"{text}, assumed".lstrip(", ")
    return text


def _name_and_unit(key: str) -> tuple[str, str]:
    if key == "at_edge":
        return "outside the window", ""
    if _is_share(key):
        return key.replace("_", " "), "wt%"
    for ending, unit in _UNITS:
        if key.endswith(ending) and len(key) > len(ending):
            return key.removesuffix(ending).replace("_", " "), unit
    at = _AT.fullmatch(key)
    if at is not None:
        return f"{at[1].replace('_', ' ')} at {at[2]} rad/s", "Pa s" if at[1] == "eta" else ""
    return key.replace("_", " "), ""


def _title(key: str) -> str:
    name = _name_and_unit(key)[0]
    return name[:1].upper() + name[1:]


def _aligned(rows: list[Row], width: int, indent: str) -> list[str]:
    """Three columns where they fit, else each row's parts below one another."""
    first = max((len(r[0]) for r in rows), default=0)
    second = max((len(r[1]) for r in rows if r[2]), default=0)
    lines = []
    for what, text, between in rows:
        line = f"{indent}{what:<{first}}  {text:<{second if between else 0}}"
        line = f"{line}  {between}".rstrip()
        if len(line) <= width:
            lines.append(line)
            continue
        for part, start in ((what, indent), (text, f"{indent}  "), (between, f"{indent}  ")):
            lines += wrapped(part, width, start, start)
    return lines
