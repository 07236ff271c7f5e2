"""Study files: components, blends of known fractions, and where their tables are (TOML).

Paths in a study are relative to the file and stay within its folder unless the caller allows
otherwise: a study that is handed on must not read what it was not handed on with.
"""

from __future__ import annotations

import difflib
import os
import re
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from mwdlink.decisions.components import Component, MeasuredBlend, Study
from mwdlink.decisions.trust import Trust
from mwdlink.errors import InputError
from mwdlink.files.cards import read_polymer
from mwdlink.files.decode import decode, read_bytes
from mwdlink.files.tables import read_distribution, read_sweep

MAX_STUDY_BYTES = 1_000_000

_TOP = ("polymer", "temperature_C", "fraction_uncertainty", "component", "blend")
_COMPONENT = (
    "name", "distribution", "sweep", "calibration", "temperature_C", "polymer", "branched",
    "filler_fraction", "eta0_Pa_s",
)  # fmt: skip
_BLEND = ("name", "fractions", "sweep", "temperature_C")
_CALIBRATIONS = ("absolute", "universal", "equivalent")


def read_study(
    path: Any,
    *,
    polymer: Any = None,
    temperature_C: float | None = None,
    outside: bool = False,
) -> Study:
    """A study file with everything it names.

    Parameters
    ----------
    path : str or Path
    polymer : Polymer, str or Path, optional
        Instead of the one the study names.
    temperature_C : float, optional
        Instead of the one the study names [C].
    outside : bool
        Whether its paths may lead out of its folder.

    Returns
    -------
    Study
        `paths` lists the study and all files read, for the record.

    Raises
    ------
    InputError
        What is wrong, with file and line, and what to do.
    """
    name = os.fspath(path)
    text, mapping = _read_toml(name)
    reader = _Reader(name, text, Path(name).parent, outside)
    reader.known_keys(mapping, _TOP, "")
    named = polymer if polymer is not None else mapping.get("polymer")
    if named is None:
        raise reader.error(
            "the study names no polymer.", None, 'Add polymer = "hdpe" or polymer = "card.toml".'
        )
    if isinstance(named, str) and polymer is None and named.lower().endswith(".toml"):
        named = reader.path(named, "polymer", 0)
        reader.read.append(named)
    card = read_polymer(named)
    own = reader.number(mapping, "temperature_C", "", 0, low=-273.15)
    # tables that do not state theirs were measured at the study's own temperature
    reader.celsius = own
    temperature = own if temperature_C is None else temperature_C
    uncertainty = reader.number(mapping, "fraction_uncertainty", "", 0, low=-1e-300, high=0.2)
    components = [
        reader.component(block, i) for i, block in enumerate(reader.blocks(mapping, "component"))
    ]
    if not components:
        raise reader.error(
            "the study has no component.",
            None,
            "Add [[component]] blocks with name and distribution or sweep.",
        )
    names = [c.name for c in components]
    for i, n in enumerate(names):
        if n in names[:i]:
            raise reader.error(f"two components are named {n!r}.", ("component", i, "name"))
    blends = [
        reader.blend(block, i, names) for i, block in enumerate(reader.blocks(mapping, "blend"))
    ]
    return Study(
        card,
        tuple(components),
        tuple(blends),
        temperature,
        0.002 if uncertainty is None else uncertainty,
        (name, *reader.read),
    )


def read_trust(path: Any) -> Trust:
    """A trust file, as `blendcheck` writes it.

    Raises
    ------
    InputError
        If it is none.
    """
    name = os.fspath(path)
    _, mapping = _read_toml(name)
    return Trust.from_mapping(mapping, name)


def _read_toml(path: str) -> tuple[str, dict[str, Any]]:
    data, _ = read_bytes(path, limit=MAX_STUDY_BYTES)
    text = decode(data, path).text
    try:
        return text, tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        found = re.search(r"at line (\d+)", str(error))
        reason = re.sub(r" \(at .*\)$", "", str(error))
        raise InputError(
            f"this is no TOML: {reason}.",
            path=path,
            row=int(found.group(1)) if found else None,
            remedy='Lines read `key = 1.5`, `key = "text"`, `fractions = {A = 0.7, B = 0.3}`, '
            "`[[component]]` or `[[blend]]`.",
        ) from None


Place = tuple[str, int, str]  # section, its number from 0, key


class _Reader:
    """Reads the blocks of one study and knows where each stands."""

    def __init__(self, path: str, text: str, folder: Path, outside: bool) -> None:
        self.file, self.text, self.folder, self.outside = path, text, folder, outside
        self.read: list[str] = []
        self.celsius: float | None = None

    # -- errors with their line ---------------------------------------------------------------
    def error(self, message: str, place: Place | None, remedy: str | None = None) -> InputError:
        row = None if place is None else self.line(*place)
        return InputError(message, path=self.file, row=row, remedy=remedy)

    def line(self, section: str, number: int, key: str) -> int | None:
        """Line (from 1) of a key in the n-th block of a section; the block's head if absent."""
        count, inside, head = -1, section == "", None
        for row, line in enumerate(self.text.split("\n"), start=1):
            mark = re.match(r"\s*\[+\s*([A-Za-z_]+)\s*\]+", line)
            if mark is not None:
                count += mark.group(1) == section
                inside = mark.group(1) == section and count == number
                head = row if inside else head
                continue
            word = re.match(r"\s*[\"']?([^\"'=#\s]+)[\"']?\s*=", line)
            if inside and word is not None and word.group(1) == key:
                return row
        return head

    # -- values -------------------------------------------------------------------------------
    def blocks(self, mapping: Mapping[str, Any], section: str) -> list[Mapping[str, Any]]:
        found = mapping.get(section, [])
        if not isinstance(found, list) or not all(isinstance(b, Mapping) for b in found):
            raise self.error(
                f"{section} must be a list of blocks.",
                (section, 0, section),
                f"Write [[{section}]] with two brackets, one for each.",
            )
        return found

    def known_keys(
        self, mapping: Mapping[str, Any], known: tuple[str, ...], section: str, number: int = 0
    ) -> None:
        for key in mapping:
            if key not in known:
                near = difflib.get_close_matches(key, known, n=1, cutoff=0.6)
                hint = f"Did you mean {near[0]!r}? " if near else ""
                raise self.error(
                    f"there is no key {key!r}{f' in [[{section}]]' if section else ''}.",
                    (section, number, key),
                    f"{hint}Known are {', '.join(known)}.",
                )

    def number(
        self,
        block: Mapping[str, Any],
        key: str,
        section: str,
        number: int,
        low: float = 0.0,
        high: float = 1e300,
    ) -> float | None:
        value = block.get(key)
        if value is None:
            return None
        good = isinstance(value, (int, float)) and not isinstance(value, bool)
        if not good or not low < float(value) <= high:
            raise self.error(f"{key} = {value!r} is out of range or no number.",
                             (section, number, key))  # fmt: skip
        return float(value)

    def name(self, block: Mapping[str, Any], section: str, number: int) -> str:
        value = block.get("name")
        if not isinstance(value, str) or not value.strip():
            raise self.error(
                f"the {section} number {number + 1} has no name.",
                (section, number, "name"),
                'Add name = "A".',
            )
        return value.strip()

    def path(self, value: Any, section: str, number: int, key: str = "") -> str:
        """A path of the study, made whole and kept within its folder."""
        key = key or section
        if not isinstance(value, str) or not value.strip():
            raise self.error(f"{key} must be a path between quotes.", (section, number, key))
        full = Path(value) if os.path.isabs(value) else self.folder / value
        home, there = os.path.realpath(self.folder), os.path.realpath(full)
        if not self.outside and os.path.commonpath([home, there]) != home:
            raise self.error(
                f"{value!r} leads out of the study's folder.",
                (section, number, key),
                "Put the file beside the study, or allow it (--outside).",
            )
        if not Path(there).is_file():
            near = difflib.get_close_matches(
                Path(value).name,
                [p.name for p in self.folder.iterdir() if p.is_file()],
                n=1,
                cutoff=0.6,
            )
            hint = f"Did you mean {near[0]!r}?" if near else "Paths are relative to the study."
            raise self.error(f"there is no file {value!r}.", (section, number, key), hint)
        return os.fspath(full)

    # -- blocks -------------------------------------------------------------------------------
    def component(self, block: Mapping[str, Any], i: int) -> Component:
        self.known_keys(block, _COMPONENT, "component", i)
        name = self.name(block, "component", i)
        calibration = block.get("calibration", "unstated")
        if "calibration" in block and calibration not in _CALIBRATIONS:
            raise self.error(
                f"unknown calibration {calibration!r}.",
                ("component", i, "calibration"),
                f"Use one of {', '.join(_CALIBRATIONS)}.",
            )
        distribution = sweep = None
        if "distribution" in block:
            path = self.path(block["distribution"], "component", i, "distribution")
            distribution = read_distribution(path, calibration=calibration, label=name)
            self.read.append(path)
        temperature = self.number(block, "temperature_C", "component", i, low=-273.15)
        temperature = self.celsius if temperature is None else temperature
        if "sweep" in block:
            path = self.path(block["sweep"], "component", i, "sweep")
            sweep = read_sweep(path, temperature_C=temperature, label=name)
            self.read.append(path)
        eta0 = self.number(block, "eta0_Pa_s", "component", i)
        if distribution is None and sweep is None:
            raise self.error(
                f"component {name!r} has neither distribution nor sweep.",
                ("component", i, "name"),
                'Add distribution = "A.csv" or sweep = "A-sweep.csv".',
            )
        filler = self.number(block, "filler_fraction", "component", i, low=-1e-300, high=1.0)
        return Component(
            name,
            distribution,
            sweep,
            temperature,
            block.get("polymer"),
            bool(block.get("branched", False)),
            filler or 0.0,
            eta0,
        )

    def blend(self, block: Mapping[str, Any], i: int, names: list[str]) -> MeasuredBlend:
        self.known_keys(block, _BLEND, "blend", i)
        name = self.name(block, "blend", i)
        place = ("blend", i, "fractions")
        given = block.get("fractions")
        if not isinstance(given, Mapping) or not given:
            raise self.error(
                f"blend {name!r} has no fractions.", place, "Add fractions = {A = 0.7, B = 0.3}."
            )
        shares: dict[str, float] = {}
        for key, value in given.items():
            if key not in names:
                near = difflib.get_close_matches(key, names, n=1, cutoff=0.4)
                hint = f"Did you mean {near[0]!r}? " if near else ""
                raise self.error(
                    f"blend {name!r} names {key!r}, which is no component.",
                    place,
                    f"{hint}Components are {', '.join(names)}.",
                )
            if isinstance(value, bool) or not isinstance(value, (int, float)) or value < 0:
                raise self.error(f"the fraction of {key} in {name!r} is no share.", place)
            shares[key] = float(value)
        total = sum(shares.values())
        if min(abs(total - 1.0), abs(total / 100.0 - 1.0)) > 2e-3:
            raise self.error(
                f"the fractions of {name!r} sum to {total:g}, neither 1 nor 100.",
                place,
                "Give weight fractions of polymer; a masterbatch's carrier counts as polymer.",
            )
        shares = {k: v / total for k, v in shares.items()}
        temperature = self.number(block, "temperature_C", "blend", i, low=-273.15)
        temperature = self.celsius if temperature is None else temperature
        sweep = None
        if "sweep" in block:
            path = self.path(block["sweep"], "blend", i, "sweep")
            sweep = read_sweep(path, temperature_C=temperature, label=name)
            self.read.append(path)
        return MeasuredBlend(name, shares, sweep, temperature)
