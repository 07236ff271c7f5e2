"""The polymer card: which keys it has, and how a mapping is checked against them.

A card is a nest of sections and keys (`network.plateau_modulus_Pa`). Every number in it keeps a
status (how well it is known) and a source. What is wrong is refused with the key's name and a
remedy; what is merely unusual is passed on with a caution.
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from mwdlink.errors import Caution, InputError

STATUSES = ("published", "secondary", "fitted", "measured", "recalled")
"""What a card may say of a number: read in the source itself, quoted by another publication,
least squares on published points, measured by the card's owner, from memory."""

OWN_STATUSES = ("computed", "assumed", "unstated")
"""What this package says of a number: follows from others, a documented default, not said."""


@dataclass(frozen=True)
class Constant:
    """One number (or pair, or word) of a card.

    Attributes
    ----------
    value : float, tuple of float or str
        In the unit the key names.
    status : str
        One of `STATUSES` or `OWN_STATUSES`.
    source : str
    """

    value: Any
    status: str
    source: str = ""


@dataclass(frozen=True)
class Key:
    """What a key may hold: its unit, its form, and the values that make sense."""

    unit: str
    form: str = "positive"  # positive | number | celsius | pair | celsius pair | text
    required: bool = False
    low: float = -math.inf
    high: float = math.inf
    hint: str = ""


SECTIONS: dict[str, dict[str, Key]] = {
    "": {
        "repeat_unit_g_per_mol": Key("g/mol", low=1.0),
    },
    "network": {
        "plateau_modulus_Pa": Key("Pa", required=True, low=1e3, hint="Is it in MPa?"),
        "plateau_modulus_range_Pa": Key("Pa", "pair"),
        "plateau_modulus_disputed_Pa": Key("Pa", "pair"),
        "molar_mass_g_per_mol": Key("g/mol", low=10.0, hint="Is it in kg/mol?"),
        "equilibration_time_s": Key("s"),
        "equilibration_time_molar_mass_g_per_mol": Key("g/mol", low=10.0, hint="Is it in kg/mol?"),
    },
    "viscosity": {
        "coefficient": Key("Pa s (g/mol)^-exponent", required=True),
        "exponent": Key("-", required=True, low=1.0, high=8.0),
        "temperature_C": Key("C", "celsius", required=True),
        "critical_molar_mass_g_per_mol": Key("g/mol", low=10.0, hint="Is it in kg/mol?"),
        "range_g_per_mol": Key("g/mol", "pair"),
        "scatter_decades": Key("decades", "number", low=0.0, high=3.0),
    },
    "density": {
        "kg_per_m3": Key("kg/m3", required=True, low=100.0, high=5000.0, hint="Is it in g/cm3?"),
        "temperature_C": Key("C", "celsius"),
        "expansion_per_K": Key(
            "1/K", "number", low=-0.01, high=0.01, hint="It is the relative change of volume per K."
        ),
    },
    "shift": {
        "kind": Key("", "text", required=True),
        "energy_kJ_per_mol": Key("kJ/mol", high=1e3, hint="Is it in J/mol?"),
        "c1": Key("-"),
        "c2_K": Key("K"),
        "reference_C": Key("C", "celsius"),
        "range_C": Key("C", "celsius pair"),
        "modulus": Key("", "text"),
    },
    "kernel": {
        "power_law_n": Key("-", low=0.01, high=0.99),
        "fluctuation_molar_mass_g_per_mol": Key("g/mol"),
        "mixing_exponent": Key("-", low=1.0, hint="1 is linear mixing, 2 double reptation."),
        "mixing_exponent_range": Key("-", "pair", low=1.0),
    },
    "mark_houwink": {
        "K_dL_per_g": Key("dL/g (g/mol)^-a", required=True),
        "a": Key("-", required=True, low=0.1, high=2.5),
        "solvent": Key("", "text", required=True),
        "temperature_C": Key("C", "celsius"),
    },
}

TEXT_KEYS = ("name", "title", "note", "status", "source")
WORDS = {"shift.kind": ("arrhenius", "wlf"), "shift.modulus": ("constant", "rho-T")}
NEEDED_SECTIONS = ("network", "viscosity", "density")


def full_name(section: str, key: str) -> str:
    return f"{section}.{key}" if section else key


def unit_of(name: str) -> str:
    """Unit of a key given by its full name (`network.plateau_modulus_Pa`)."""
    section, _, key = name.rpartition(".")
    return SECTIONS[section][key].unit


def parse_card(
    mapping: Mapping[str, Any], origin: str | None
) -> tuple[dict[str, str], dict[str, Constant], list[Caution]]:
    """Check a mapping in the shape of a card.

    Parameters
    ----------
    mapping : mapping
        Sections and keys, as read from TOML or JSON.
    origin : str or None
        File the mapping came from, for messages.

    Returns
    -------
    texts : dict of str to str
        `name`, `title`, `note`.
    constants : dict of str to Constant
        By full name, in the order of `SECTIONS`.
    cautions : list of Caution
        Numbers without a status.

    Raises
    ------
    InputError
        Unknown or missing key, wrong type, number out of all sense, unknown status.
    """
    if not isinstance(mapping, Mapping):
        raise InputError("a card is a table of sections and keys.", path=origin)
    unfilled: list[str] = []
    texts = {"name": "", "title": "", "note": ""}
    constants: dict[str, Constant] = {}
    silent: list[str] = []
    for head in mapping:
        if head in SECTIONS and head:
            if not isinstance(mapping[head], Mapping):
                raise InputError(
                    f"{head!r} is a section, not a value.",
                    path=origin,
                    column=head,
                    remedy=f"Write [{head}] on a line of its own and its keys below.",
                )
        elif isinstance(mapping[head], Mapping):
            near = _nearest(head, [s for s in SECTIONS if s])
            raise InputError(
                f"unknown section [{head}].",
                path=origin,
                column=head,
                remedy=near or "Sections are " + ", ".join(s for s in SECTIONS if s) + ".",
            )
    for section, keys in SECTIONS.items():
        block = mapping.get(section) if section else mapping
        if block is None:
            if section in NEEDED_SECTIONS:
                wanted = ", ".join(k for k, spec in keys.items() if spec.required)
                raise InputError(
                    f"section [{section}] is missing.",
                    path=origin,
                    column=section,
                    remedy=f"Add it with at least {wanted}.",
                )
            continue
        _check_names(section, block, origin)
        for key, spec in keys.items():
            name = full_name(section, key)
            if key not in block:
                if spec.required:
                    raise InputError(
                        f"{key} is missing from [{section}].",
                        path=origin,
                        column=name,
                        remedy=f"Add {key}" + (f" in {spec.unit}." if spec.unit else "."),
                    )
                continue
            if _is_blank(block[key]):
                unfilled.append(name)
                continue
            value = _value(name, spec, block[key], origin)
            status, source = _standing(section, key, block, origin)
            if spec.form != "text" and status == "unstated":
                silent.append(name)
            constants[name] = Constant(value, status, source)
    if unfilled:
        raise InputError(
            "not filled in yet: " + ", ".join(unfilled) + ".",
            path=origin,
            column=unfilled[0],
            remedy="Put numbers in place of nan, or leave out the keys that are optional.",
        )
    for word in texts:
        text = mapping.get(word, "")
        if not isinstance(text, str):
            raise InputError(f"{word} must be text.", path=origin, column=word)
        texts[word] = text.strip()
    cautions = []
    if silent:
        cautions.append(
            Caution(
                "card_status_unstated",
                f"The card does not say how well it knows {', '.join(silent)}: add a status "
                f"({', '.join(STATUSES)}) and a source to the section.",
            )
        )
    return texts, constants, cautions


def _check_names(section: str, block: Mapping[str, Any], origin: str | None) -> None:
    """Refuse a key nobody reads: a misspelt key would be a number silently not used."""
    keys = SECTIONS[section]
    allowed = set(keys) | {"status", "source"}
    allowed |= {f"{k}_status" for k in keys} | {f"{k}_source" for k in keys}
    if not section:
        allowed |= set(TEXT_KEYS) | {s for s in SECTIONS if s}
        allowed -= {"status", "source"}
    for key in block:
        if key in allowed:
            continue
        homes = [s for s, its in SECTIONS.items() if key in its]
        if homes:
            place = f"[{homes[0]}]" if homes[0] else "the top of the card, above all sections"
            remedy: str | None = f"It belongs in {place}."
        else:
            remedy = _nearest(key, sorted(allowed)) or f"Keys here: {', '.join(keys)}."
        where = f"[{section}]" if section else "the top of the card"
        raise InputError(
            f"unknown key {key!r} in {where}.",
            path=origin,
            column=full_name(section, str(key)),
            remedy=remedy,
        )


def _nearest(word: str, words: list[str]) -> str | None:
    near = difflib.get_close_matches(str(word), words, n=1, cutoff=0.6)
    return f"Did you mean {near[0]!r}?" if near else None


def _is_blank(raw: Any) -> bool:
    """nan stands for a number still to be filled in (the template is full of them)."""
    numbers = raw if isinstance(raw, (list, tuple)) else [raw]
    return any(isinstance(x, float) and math.isnan(x) for x in numbers)


def _standing(
    section: str, key: str, block: Mapping[str, Any], origin: str | None
) -> tuple[str, str]:
    """Status and source of one key: its own, else its section's."""
    inherited = block if section else {}
    status = block.get(f"{key}_status", inherited.get("status", "unstated"))
    source = block.get(f"{key}_source", inherited.get("source", ""))
    if not isinstance(status, str) or status not in STATUSES + OWN_STATUSES:
        own = f"{key}_status" if f"{key}_status" in block else "status"
        near = _nearest(str(status), list(STATUSES))
        raise InputError(
            f"unknown status {status!r}.",
            path=origin,
            column=full_name(section, own),
            remedy=near or f"Use one of {', '.join(STATUSES)}.",
        )
    if not isinstance(source, str):
        raise InputError(
            "a source is text.", path=origin, column=full_name(section, f"{key}_source")
        )
    return status, source


def _value(name: str, spec: Key, raw: Any, origin: str | None) -> Any:
    if spec.form == "text":
        if not isinstance(raw, str) or not raw.strip():
            raise InputError(f"must be text, not {raw!r}.", path=origin, column=name)
        words = WORDS.get(name)
        if words and raw not in words:
            raise InputError(
                f"unknown word {raw!r}.",
                path=origin,
                column=name,
                remedy=_nearest(raw, list(words)) or f"Use one of {', '.join(words)}.",
            )
        return raw
    if spec.form in ("pair", "celsius pair"):
        if not isinstance(raw, (list, tuple)) or len(raw) != 2:
            raise InputError(
                "must be two numbers.", path=origin, column=name, remedy="Write [low, high]."
            )
        low, high = (_number(name, spec, x, origin) for x in raw)
        if not low < high:
            raise InputError(
                f"[{low:g}, {high:g}] does not ascend.",
                path=origin,
                column=name,
                remedy="Write the lower number first.",
            )
        return (low, high)
    return _number(name, spec, raw, origin)


def _number(name: str, spec: Key, raw: Any, origin: str | None) -> float:
    if isinstance(raw, bool) or not isinstance(raw, (int, float)):
        remedy = "Write it without quotes and with a decimal point."
        raise InputError(
            f"must be a number, not {raw!r}.", path=origin, column=name, remedy=remedy
        )
    try:
        x = float(raw)
    except OverflowError:  # TOML integers have no limit
        x = math.inf
    if not math.isfinite(x):
        raise InputError(f"must be a finite number, not {x}.", path=origin, column=name)
    if spec.form in ("celsius", "celsius pair"):
        if not -273.15 < x < 1000.0:
            raise InputError(
                f"{x:g} is no temperature in C.", path=origin, column=name, remedy="Is it in K?"
            )
        return x
    if spec.form in ("positive", "pair") and not x > 0:
        raise InputError(f"must be above zero, not {x:g}.", path=origin, column=name)
    if not spec.low <= x <= spec.high:
        bounds = f"at least {spec.low:g}" if spec.high == math.inf else (
            f"at most {spec.high:g}" if spec.low == -math.inf else f"{spec.low:g} to {spec.high:g}"
        )
        raise InputError(
            f"{x:g} cannot be right: expected {bounds}"
            + (f" {spec.unit}." if spec.unit not in ("", "-") else "."),
            path=origin,
            column=name,
            remedy=spec.hint or None,
        )
    return x
