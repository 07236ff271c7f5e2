"""Polymer: a card of constants with where each comes from, and the melt it gives at a temperature.

The cards that ship are TOML files beside this module; a user's own card has the same form. All
numbers hold at one temperature, the viscosity law's (`temperature_C`); the shift law takes them
elsewhere.
"""

from __future__ import annotations

import dataclasses
import difflib
import math
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from importlib import resources
from types import MappingProxyType
from typing import Any

from mwdlink.chains.card import SECTIONS, Constant, full_name, parse_card, unit_of
from mwdlink.chains.card_relations import (
    check_shift,
    check_stored_strand,
    remarks,
    tau_e_belongs,
    unusual,
)
from mwdlink.chains.melt import POWER_LAW_N, Melt, estimate_equilibration_time
from mwdlink.chains.shift import GAS_CONSTANT, ZERO_CELSIUS, ShiftLaw
from mwdlink.errors import Caution, InputError, ModelError

SCATTER_DECADES = 0.10
"""Scatter of a viscosity law whose card does not state it: assumed [decades]."""

SAME_TEMPERATURE_K = 0.1
"""Without a shift law a card serves its own temperature within this [K]."""

CONSTANT_DENSITY_K = 20.0
"""A density without expansion is used without a word this far from its temperature [K]."""

TEMPLATE = "template"

_OTHER_NAMES = {
    "pe": "hdpe",
    "polyethylene": "hdpe",
    "lldpe": "hdpe",
    "pp": "pp-isotactic",
    "polypropylene": "pp-isotactic",
    "ipp": "pp-isotactic",
    "app": "pp-atactic",
    "ps": "polystyrene",
    "pb": "polybutadiene",
    "pbd": "polybutadiene",
    "pi": "polyisoprene",
    "pib": "polyisobutylene",
    "silicone": "pdms",
}
_NO_CARD = {
    "pmma": "its constants depend too much on tacticity",
    "peo": "its published constants are too uncertain",
    "pc": "its published constants are too uncertain",
    "pvac": "its published constants are too uncertain",
    "hydrogenated-polybutadiene": "its published constants are too uncertain",
    "ldpe": "it is branched, and everything here holds for linear chains",
}


@dataclass(frozen=True)
class Polymer:
    """A polymer's constants.

    Build one with `Polymer.from_dict`, `builtin(name)` or `mwdlink.read_polymer`.

    Attributes
    ----------
    name, title : str
    items : tuple of (str, Constant)
        Every number the card gives, by full name (`network.plateau_modulus_Pa`).
    note : str
        What the card's author wants every user to know.
    origin : str
        File or built-in the card was read from; empty for a mapping.
    warnings : tuple of Caution
        What is unusual about the card.
    """

    name: str
    title: str
    items: tuple[tuple[str, Constant], ...]
    note: str = ""
    origin: str = ""
    warnings: tuple[Caution, ...] = ()

    @classmethod
    def from_dict(cls, mapping: Mapping[str, Any], origin: str = "") -> Polymer:
        """A polymer from a mapping in the shape of a card.

        Parameters
        ----------
        mapping : mapping
            Sections `network`, `viscosity`, `density` and optionally `shift`, `kernel`,
            `mark_houwink`; `docs/polymers.md` describes the keys and their units.
        origin : str
            File it came from, for messages.

        Raises
        ------
        InputError
            Unknown, missing or impossible keys, and a stored entanglement molar mass more than
            3 % from 1000 rho R T/G_N.
        """
        where = origin or None
        texts, constants, cautions = parse_card(mapping, where)
        name = texts["name"] or "unnamed"
        check_shift(constants, where)
        draft = cls(name, texts["title"] or name, tuple(constants.items()), texts["note"], origin)
        strand = draft.entanglement_molar_mass
        check_stored_strand(constants, strand, draft.density(), where)
        cautions = [
            *remarks(name, draft.note, constants),
            *cautions,
            *unusual(name, constants, strand),
        ]
        return dataclasses.replace(draft, warnings=tuple(cautions))

    @property
    def constants(self) -> Mapping[str, Constant]:
        """Every number the card gives, by full name (read-only)."""
        return MappingProxyType(dict(self.items))

    def get(self, name: str, default: Any = None) -> Any:
        """Value of a constant by its full name, or the default."""
        for key, constant in self.items:
            if key == name:
                return constant.value
        return default

    @property
    def temperature_C(self) -> float:
        """The card's own temperature, the viscosity law's [C]."""
        return float(self.get("viscosity.temperature_C"))

    @property
    def shift(self) -> ShiftLaw | None:
        """The shift law, or None where the card has none."""
        kind = self.get("shift.kind")
        if kind is None:
            return None
        energy = self.get("shift.energy_kJ_per_mol")
        return ShiftLaw(
            kind=kind,
            energy_J_per_mol=None if energy is None else 1000.0 * energy,
            c1=self.get("shift.c1"),
            c2=self.get("shift.c2_K"),
            reference_C=self.get("shift.reference_C", self.temperature_C),
            range_C=self.get("shift.range_C"),
        )

    def density(self, temperature_C: float | None = None) -> float:
        """Density of the melt [kg/m3]; at the card's own temperature unless given [C]."""
        T = self.temperature_C if temperature_C is None else temperature_C
        at = self.get("density.temperature_C", self.temperature_C)
        expansion = self.get("density.expansion_per_K", 0.0)
        return float(self.get("density.kg_per_m3") * math.exp(-expansion * (T - at)))

    @property
    def entanglement_molar_mass(self) -> float:
        """M_e = 1000 rho R T/G_N at the card's own temperature [g/mol]."""
        kelvin = self.temperature_C + ZERO_CELSIUS
        modulus = self.get("network.plateau_modulus_Pa")
        return 1000.0 * self.density() * GAS_CONSTANT * kelvin / modulus

    @property
    def scatter_decades(self) -> float:
        """Scatter of the viscosity law [decades]; 0.10, assumed, where the card is silent."""
        return float(self.get("viscosity.scatter_decades", SCATTER_DECADES))

    def _equilibration(self) -> tuple[float, bool]:
        """tau_e at the card's own temperature [s], and whether it is estimated."""
        stored = dict(self.items).get("network.equilibration_time_s")
        belongs = tau_e_belongs(self.constants, self.entanglement_molar_mass)
        if stored is not None and stored.status != "computed" and belongs:
            return float(stored.value), False
        estimate = estimate_equilibration_time(
            self.get("viscosity.coefficient"),
            self.get("viscosity.exponent"),
            self.get("network.plateau_modulus_Pa"),
            self.entanglement_molar_mass,
        )
        return estimate, True

    def melt(self, temperature_C: float | None = None) -> Melt:
        """The melt at a temperature.

        Times and viscosity go with a_T of the shift law. Moduli stay, unless the card says
        `modulus = "rho-T"`: then they go with b_T = rho T/(rho_0 T_0) and the viscosity with
        a_T b_T, so that curves at two temperatures superpose exactly.

        Parameters
        ----------
        temperature_C : float, optional
            Temperature [C]; default the card's own.

        Raises
        ------
        ModelError
            No shift law and another temperature than the card's; a temperature out of the law's
            reach.
        """
        T = self.temperature_C if temperature_C is None else float(temperature_C)
        return _melt(self, T)

    def to_dict(self) -> dict[str, Any]:
        """The card as used, in its own shape and JSON types.

        Defaults and computed numbers (M_e, tau_e where the card has none) are written out with
        status `assumed` or `computed`, so that the mapping shows every number that took part.
        `Polymer.from_dict` reads it back to the same melt.
        """
        out: dict[str, Any] = {"name": self.name, "title": self.title}
        if self.note:
            out["note"] = self.note
        known = _in_use(self)
        for section, keys in SECTIONS.items():
            block: dict[str, Any] = {}
            for key in keys:
                constant = known.get(full_name(section, key))
                if constant is None:
                    continue
                value = constant.value
                block[key] = list(value) if isinstance(value, tuple) else value
                if isinstance(value, str):
                    continue
                block[f"{key}_status"] = constant.status
                if constant.source:
                    block[f"{key}_source"] = constant.source
            if section and block:
                out[section] = block
            else:
                out.update(block)
        return out

    def constants_table(self) -> list[dict[str, Any]]:
        """Rows (key, value, unit, status, source) of every number in use, for showing."""
        known = _in_use(self)
        rows = []
        for section, keys in SECTIONS.items():
            for key in keys:
                name = full_name(section, key)
                if name not in known:
                    continue
                constant = known[name]
                value = constant.value
                rows.append(
                    {
                        "key": name,
                        "value": list(value) if isinstance(value, tuple) else value,
                        "unit": unit_of(name),
                        "status": "" if isinstance(value, str) else constant.status,
                        "source": constant.source,
                    }
                )
        return rows


def _in_use(polymer: Polymer) -> dict[str, Constant]:
    """The card's numbers, what it leaves open, and what follows from it."""
    tau_e, estimated = polymer._equilibration()
    out = {
        "network.molar_mass_g_per_mol": Constant(
            polymer.entanglement_molar_mass,
            "computed",
            "1000 rho R T/G_N at the viscosity law's temperature",
        ),
        "viscosity.scatter_decades": Constant(SCATTER_DECADES, "assumed", "default"),
        "kernel.power_law_n": Constant(POWER_LAW_N, "assumed", "default"),
        **dict(polymer.items),
    }
    if estimated:
        out["network.equilibration_time_s"] = Constant(
            tau_e, "computed", "from the viscosity law at 30 entanglements, good to a factor 2"
        )
    return out


@lru_cache(maxsize=64)
def _melt(polymer: Polymer, T: float) -> Melt:
    if not (math.isfinite(T) and T > -ZERO_CELSIUS):
        raise ModelError(f"{T!r} is no temperature in C.")
    own, shift = polymer.temperature_C, polymer.shift
    cautions = list(polymer.warnings)
    a_T = 1.0
    if shift is None:
        if abs(T - own) > SAME_TEMPERATURE_K:
            raise ModelError(
                f"the card {polymer.name!r} has no shift law: its numbers hold at {own:g} C and "
                f"cannot be taken to {T:g} C. Ask for {own:g} C, or write a card of your own "
                "with a [shift] section."
            )
    else:
        cautions.extend(shift.check(T, polymer.name))
        a_T = shift.factor(T, own)
    kelvin = T + ZERO_CELSIUS
    density = polymer.density(T)
    measured_at = polymer.get("density.temperature_C", own)
    if (
        polymer.get("density.expansion_per_K") is None
        and abs(T - measured_at) > CONSTANT_DENSITY_K
    ):
        cautions.append(
            Caution(
                "density_constant",
                f"{polymer.name}: the density of {measured_at:g} C is used at {T:g} C, the card "
                "names no expansion (a few per cent).",
            )
        )
    b_T = 1.0
    if polymer.get("shift.modulus") == "rho-T":
        b_T = density * kelvin / (polymer.density() * (own + ZERO_CELSIUS))
    tau_e, estimated = polymer._equilibration()
    spread = polymer.get("network.plateau_modulus_range_Pa")
    return Melt(
        name=polymer.name,
        temperature_C=T,
        kelvin=kelvin,
        plateau_modulus=polymer.get("network.plateau_modulus_Pa") * b_T,
        entanglement_molar_mass=polymer.entanglement_molar_mass,
        law_coefficient=polymer.get("viscosity.coefficient") * a_T * b_T,
        law_exponent=polymer.get("viscosity.exponent"),
        density=density,
        equilibration_time=tau_e * a_T,
        equilibration_time_estimated=estimated,
        critical_molar_mass=polymer.get("viscosity.critical_molar_mass_g_per_mol"),
        law_range=polymer.get("viscosity.range_g_per_mol"),
        scatter_decades=polymer.scatter_decades,
        repeat_unit=polymer.get("repeat_unit_g_per_mol"),
        power_law_n=polymer.get("kernel.power_law_n", POWER_LAW_N),
        fluctuation_molar_mass=polymer.get("kernel.fluctuation_molar_mass_g_per_mol"),
        mixing_exponent=polymer.get("kernel.mixing_exponent"),
        mixing_exponent_range=polymer.get("kernel.mixing_exponent_range"),
        plateau_range=None if spread is None else (spread[0] * b_T, spread[1] * b_T),
        a_T=a_T,
        b_T=b_T,
        warnings=tuple(cautions),
    )


def _cards() -> Any:
    return resources.files("mwdlink.chains").joinpath("cards")


@lru_cache(maxsize=1)
def builtin_names() -> tuple[str, ...]:
    """Names of the cards that ship, in alphabetical order."""
    names = (f.name.removesuffix(".toml") for f in _cards().iterdir() if f.name.endswith(".toml"))
    return tuple(sorted(name for name in names if name != TEMPLATE))


def need_polymer(polymer: Any) -> None:
    """Refuse what is no polymer, a name above all, with what to do.

    Raises
    ------
    InputError
    """
    if not isinstance(polymer, Polymer):
        what = repr(polymer) if isinstance(polymer, str) else type(polymer).__name__
        raise InputError(
            f"a polymer is needed, not {what}.",
            remedy='Read it from a name or a card: mwdlink.read_polymer("hdpe").',
        )


@lru_cache(maxsize=32)
def builtin(name: str) -> Polymer:
    """A card that ships with the package.

    Raises
    ------
    InputError
        Unknown name; the message names the nearest one.
    """
    if name not in builtin_names():
        raise InputError(f"there is no built-in polymer {name!r}.", remedy=_suggest(name))
    text = _cards().joinpath(f"{name}.toml").read_text(encoding="utf-8")
    return Polymer.from_dict(tomllib.loads(text), origin=f"built-in card {name}")


def _suggest(name: str) -> str:
    low = name.strip().lower().replace("_", "-").replace(" ", "-")
    names = builtin_names()
    if low in _NO_CARD:
        return (
            f"None ships: {_NO_CARD[low]}. For constants of your own, fill in a card (TOML) and "
            "give its path."
        )
    near = low if low in names else _OTHER_NAMES.get(low)
    if near is None:
        close = difflib.get_close_matches(low, names, n=1, cutoff=0.5)
        near = close[0] if close else None
    choice = f"Built-in are {', '.join(names)}; or give the path of a card (TOML)."
    return f"Did you mean {near!r}? {choice}" if near else choice


def template_text() -> str:
    """An empty card with every key explained, for a user to fill in (TOML)."""
    return _cards().joinpath(f"{TEMPLATE}.toml").read_text(encoding="utf-8")
