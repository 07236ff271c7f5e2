"""Sheet files: a supplier's claims (TOML) to a `Sheet`, checked key by key."""

from __future__ import annotations

import difflib
import math
import os
import re
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from mwdlink.decisions.datasheet_claims import DEFAULT_TOLERANCE, Claim, Sheet
from mwdlink.errors import Caution, InputError
from mwdlink.files.cards import read_polymer
from mwdlink.files.decode import decode, read_bytes

MAX_SHEET_BYTES = 1_000_000
_TOP = ("polymer", "claims", "label")
_COMMON = ("tolerance",)
_CALIBRATIONS = ("absolute", "universal", "equivalent")
# key of [claims] -> kind, where the value stands, what else may stand beside it, sensible range
_SINGLE: dict[str, tuple[str, str, tuple[str, ...], float, float]] = {
    "Mn_g_per_mol": ("Mn", "value", ("calibration",), 100.0, 1e8),
    "Mw_g_per_mol": ("Mw", "value", ("calibration",), 100.0, 1e8),
    "Mz_g_per_mol": ("Mz", "value", ("calibration",), 100.0, 1e9),
    "dispersity": ("dispersity", "value", (), 1.0, 1e3),
    "eta0_Pa_s": ("eta0", "value", ("temperature_C",), 1e-3, 1e10),
    "intrinsic_viscosity": (
        "intrinsic viscosity",
        "value_dL_per_g",
        ("solvent", "temperature_C"),
        1e-3,
        1e3,
    ),
    "activation_energy": ("activation energy", "value_kJ_per_mol", (), 1.0, 500.0),
    "flow_rate_ratio": ("flow rate ratio", "value", ("loads_kg", "temperature_C"), 1.0, 1e4),
}
_OTHERS = ("melt_flow", "crossover", "viscosity", "long_chain_branching")
_HINTS = {
    "g_per_mol": "Is it in kg/mol?",
    "eta0": "Is it in mPa s or poise?",
}


def read_sheet(path: Any, *, polymer: Any = None) -> Sheet:
    """A sheet file.

    Parameters
    ----------
    path : str or Path
    polymer : Polymer, str or Path, optional
        Instead of the one the sheet names.

    Returns
    -------
    Sheet

    Raises
    ------
    InputError
        What is wrong, with file and line, and what to do.
    """
    name = os.fspath(path)
    data, _ = read_bytes(name, limit=MAX_SHEET_BYTES)
    text = decode(data, name).text
    try:
        mapping = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        found = re.search(r"at line (\d+)", str(error))
        reason = re.sub(r" \(at .*\)$", "", str(error))
        raise InputError(
            f"this is no TOML: {reason}.",
            path=name,
            row=int(found.group(1)) if found else None,
            remedy="Lines read `Mw_g_per_mol = {value = 1.2e5, tolerance = 0.1}` under [claims].",
        ) from None
    return _Reader(name, text).sheet(mapping, polymer)


class _Reader:
    """Reads the claims of one sheet and knows where each stands."""

    def __init__(self, path: str, text: str) -> None:
        self.file, self.text = path, text
        self.warnings: list[Caution] = []

    def sheet(self, mapping: Mapping[str, Any], polymer: Any) -> Sheet:
        self.known(mapping, _TOP, "the sheet")
        claims = mapping.get("claims")
        if not isinstance(claims, Mapping) or not claims:
            raise self.error(
                "there is no [claims] section.", None, "Put the claims under [claims]."
            )
        self.known(claims, (*_SINGLE, *_OTHERS), "[claims]")
        out: list[Claim] = []
        for key, (kind, value_key, more, low, high) in _SINGLE.items():
            if key in claims:
                out.append(self.single(claims[key], key, kind, value_key, more, low, high))
        out.extend(self.melt_flow(claims.get("melt_flow", [])))
        out.extend(self.crossover(claims.get("crossover")))
        out.extend(self.viscosity(claims.get("viscosity", [])))
        self.different(out)
        named = polymer if polymer is not None else mapping.get("polymer")
        card = None
        paths = [self.file]
        if named is not None:
            if polymer is None and isinstance(named, str) and named.lower().endswith(".toml"):
                named = str(Path(self.file).parent / named)
                paths.append(named)
            card = read_polymer(named)
        branching = claims.get("long_chain_branching")
        if branching is not None and branching not in ("none", "some"):
            raise self.error(
                f"long_chain_branching = {branching!r} is not known.",
                "long_chain_branching",
                'Write "none" or "some", or leave it out.',
            )
        return Sheet(
            tuple(sorted(out, key=lambda c: list(DEFAULT_TOLERANCE).index(c.kind))),
            card,
            branching,
            tuple(paths),
            str(mapping.get("label", "")),
            tuple(self.warnings),
        )

    # -- kinds of claim -------------------------------------------------------------------------
    def single(
        self,
        entry: Any,
        key: str,
        kind: str,
        value_key: str,
        more: tuple[str, ...],
        low: float,
        high: float,
    ) -> Claim:
        entry = {value_key: entry} if _is_number(entry) else entry
        self.table(entry, (value_key, *more, *_COMMON), key)
        value = self.number(entry, value_key, key, low, high)
        tolerance, given = self.tolerance(entry, key, kind)
        named: dict[str, Any] = {}
        if "calibration" in more:
            named["calibration"] = self.calibration(entry, key)
        if "temperature_C" in more and kind != "intrinsic viscosity":
            named["temperature_C"] = self.temperature(entry, key)
        if "loads_kg" in more:
            loads = entry.get("loads_kg", [21.6, 2.16])
            if not (isinstance(loads, list) and len(loads) == 2 and all(map(_is_number, loads))):
                raise self.error(
                    "loads_kg must be two loads.", key, "Write loads_kg = [21.6, 2.16]."
                )
            first, second = sorted((float(v) for v in loads), reverse=True)
            if not first > second > 0:
                raise self.error("loads_kg must be two different positive loads.", key)
            named["load_kg"], named["second_load_kg"] = first, second
        if kind == "intrinsic viscosity":
            solvent = str(entry.get("solvent", "TCB")).upper()
            if solvent not in ("TCB", "1,2,4-TRICHLOROBENZENE"):
                self.warnings.append(
                    Caution(
                        "solvent",
                        f"The intrinsic viscosity is in {entry['solvent']}; the card's constants "
                        "are compared with it as if for their own solvent.",
                    )
                )
        return Claim(key, kind, value, tolerance, given, **named)

    def melt_flow(self, entries: Any) -> list[Claim]:
        out: list[Claim] = []
        for entry in self.blocks(entries, "melt_flow"):
            keys = ("load_kg", "temperature_C", "MFR_g_per_10min", "MVR_cm3_per_10min")
            self.table(entry, (*keys, *_COMMON), "melt_flow")
            given = [k for k in keys[2:] if k in entry]
            if len(given) != 1:
                raise self.error(
                    "a melt flow needs exactly one of MFR_g_per_10min and MVR_cm3_per_10min.",
                    "melt_flow",
                )
            load = self.number(entry, "load_kg", "melt_flow", 0.1, 100.0, "Is it in N or g?")
            value = self.number(entry, given[0], "melt_flow", 1e-4, 1e5)
            tolerance, said = self.tolerance(entry, "melt_flow", "melt flow")
            T = self.temperature(entry, "melt_flow")
            place = "" if T is None else f" {T:g} C"
            quantity = f"melt_flow {load:g} kg{place}"
            volume = given[0].startswith("MVR")
            # a sheet may give both rates of one test
            if any(c.quantity == quantity and c.volume != volume for c in out):
                quantity += " MVR" if volume else " MFR"
            out.append(
                Claim(
                    quantity,
                    "melt flow",
                    value,
                    tolerance,
                    said,
                    temperature_C=T,
                    load_kg=load,
                    volume=volume,
                )
            )
        return out

    def crossover(self, entry: Any) -> list[Claim]:
        if entry is None:
            return []
        self.table(entry, ("omega_rad_per_s", "G_Pa", "temperature_C", *_COMMON), "crossover")
        T = self.temperature(entry, "crossover")
        out = []
        for key, kind, low, high in (
            ("omega_rad_per_s", "crossover omega", 1e-8, 1e8),
            ("G_Pa", "crossover G", 1.0, 1e8),
        ):
            if key in entry:
                tolerance, said = self.tolerance(entry, "crossover", kind)
                value = self.number(entry, key, "crossover", low, high)
                out.append(Claim(f"crossover_{key}", kind, value, tolerance, said, temperature_C=T))
        if not out:
            raise self.error("crossover needs omega_rad_per_s or G_Pa.", "crossover")
        return out

    def viscosity(self, entries: Any) -> list[Claim]:
        out = []
        for entry in self.blocks(entries, "viscosity"):
            self.table(
                entry, ("omega_rad_per_s", "value_Pa_s", "temperature_C", *_COMMON), "viscosity"
            )
            omega = self.number(entry, "omega_rad_per_s", "viscosity", 1e-5, 1e4)
            value = self.number(entry, "value_Pa_s", "viscosity", 1e-3, 1e10)
            T = self.temperature(entry, "viscosity")
            tolerance, said = self.tolerance(entry, "viscosity", "viscosity")
            place = "" if T is None else f" {T:g} C"
            out.append(
                Claim(
                    f"viscosity {omega:g} rad/s{place}",
                    "viscosity",
                    value,
                    tolerance,
                    said,
                    temperature_C=T,
                    omega=omega,
                )
            )
        return out

    # -- values ---------------------------------------------------------------------------------
    def blocks(self, entries: Any, key: str) -> list[Any]:
        entries = [entries] if isinstance(entries, Mapping) else entries
        if not isinstance(entries, list):
            raise self.error(f"{key} must be a list of tables.", key, f"Write {key} = [{{...}}].")
        return entries

    def table(self, entry: Any, known: tuple[str, ...], key: str) -> None:
        if not isinstance(entry, Mapping):
            raise self.error(
                f"{key} = {entry!r} is no table.", key, f"Write {key} = {{value = 1.2e5, ...}}."
            )
        self.known(entry, known, key)

    def known(self, mapping: Mapping[str, Any], known: tuple[str, ...], where: str) -> None:
        for key in mapping:
            if key not in known:
                near = difflib.get_close_matches(key, known, n=1, cutoff=0.5)
                hint = f"Did you mean {near[0]!r}? " if near else ""
                raise self.error(
                    f"there is no key {key!r} in {where}.",
                    key,
                    f"{hint}Known are {', '.join(known)}.",
                )

    def number(
        self,
        entry: Mapping[str, Any],
        key: str,
        where: str,
        low: float,
        high: float,
        hint: str = "",
    ) -> float:
        value = entry.get(key)
        if value is None:
            raise self.error(f"{where} has no {key}.", where, f"Add {key} = ...")
        if not _is_number(value) or not low <= float(value) <= high:
            extra = hint or next((h for k, h in _HINTS.items() if k in where), "")
            raise self.error(
                f"{where}: {key} = {value!r} is out of range ({low:g} to {high:g}) or no number.",
                where,
                extra or None,
            )
        return float(value)

    def tolerance(self, entry: Mapping[str, Any], key: str, kind: str) -> tuple[float, bool]:
        value = entry.get("tolerance")
        if value is None:
            return DEFAULT_TOLERANCE[kind], False
        if not _is_number(value) or not 0 < float(value) < 1:
            raise self.error(
                f"{key}: tolerance = {value!r} must be a fraction above 0 and below 1.",
                key,
                "0.1 is +- 10 %.",
            )
        return float(value), True

    def temperature(self, entry: Mapping[str, Any], key: str) -> float | None:
        value = entry.get("temperature_C")
        if value is None:
            return None
        if not _is_number(value) or not -100 <= float(value) <= 500:
            raise self.error(
                f"{key}: temperature_C = {value!r} is no melt temperature.",
                key,
                "Give it in degrees Celsius.",
            )
        return float(value)

    def calibration(self, entry: Mapping[str, Any], key: str) -> str:
        value = entry.get("calibration", "unstated")
        if "calibration" in entry and value not in _CALIBRATIONS:
            raise self.error(
                f"{key}: unknown calibration {value!r}.", key, f"Use {', '.join(_CALIBRATIONS)}."
            )
        return str(value)

    def different(self, claims: list[Claim]) -> None:
        seen: set[str] = set()
        for c in claims:
            if c.quantity in seen:
                raise self.error(f"{c.quantity} is claimed twice.", c.quantity.split(" ")[0])
            seen.add(c.quantity)

    # -- errors with their line -----------------------------------------------------------------
    def error(self, message: str, key: str | None, remedy: str | None = None) -> InputError:
        row = None
        if key is not None:
            pattern = re.compile(rf"\b{re.escape(key)}\b[\"']?\s*=")
            row = next(
                (i for i, line in enumerate(self.text.split("\n"), 1) if pattern.search(line)), None
            )
        return InputError(message, path=self.file, row=row, remedy=remedy)


def _is_number(value: Any) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)
