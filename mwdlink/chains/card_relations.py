"""How the numbers of a card must hang together.

Two things are refused because every result would be wrong by them: a stored entanglement molar
mass that does not follow from the modulus, density and temperature beside it, and a shift law
without its constants. All else that looks odd is only said: unusual polymers exist.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mwdlink.chains.card import Constant
from mwdlink.errors import Caution, InputError

STORED_TOLERANCE = 0.03
"""A stored M_e further than this from 1000 rho R T/G_N is refused [-]."""

SHIFT_KEYS = {
    "arrhenius": ("shift.energy_kJ_per_mol",),
    "wlf": ("shift.c1", "shift.c2_K", "shift.reference_C"),
}


def _get(constants: Mapping[str, Constant], name: str) -> Any:
    constant = constants.get(name)
    return None if constant is None else constant.value


def check_shift(constants: Mapping[str, Constant], origin: str | None) -> None:
    """Refuse a shift law without its constants, or with another law's.

    Raises
    ------
    InputError
    """
    kind = _get(constants, "shift.kind")
    if kind is None:
        return
    for name in SHIFT_KEYS[kind]:
        if name not in constants:
            raise InputError(
                f"a shift law of kind {kind!r} needs {name.split('.')[1]}.",
                path=origin,
                column=name,
                remedy="Add it to [shift], or leave the section out.",
            )
    for other, names in SHIFT_KEYS.items():
        for name in names:
            if other != kind and name in constants:
                raise InputError(
                    f"{name.split('.')[1]} has no meaning in a shift law of kind {kind!r}.",
                    path=origin,
                    column=name,
                    remedy=f"Remove it, or write kind = {other!r}.",
                )
    if kind == "wlf":
        end = _get(constants, "shift.reference_C") - _get(constants, "shift.c2_K")
        own = _get(constants, "viscosity.temperature_C")
        if own <= end:
            raise InputError(
                f"the WLF law ends at {end:g} C, above the viscosity law's {own:g} C.",
                path=origin,
                column="shift.c2_K",
                remedy="Check c2_K (in K) and reference_C (in C).",
            )


def check_stored_strand(
    constants: Mapping[str, Constant], strand: float, density: float, origin: str | None
) -> None:
    """Refuse a stored M_e more than 3 % from 1000 rho R T/G_N.

    Parameters
    ----------
    constants : mapping of str to Constant
    strand : float
        1000 rho R T/G_N at the viscosity law's temperature [g/mol].
    density : float
        rho there [kg/m3].
    origin : str or None

    Raises
    ------
    InputError
    """
    stored = _get(constants, "network.molar_mass_g_per_mol")
    if stored is None or abs(stored / strand - 1.0) <= STORED_TOLERANCE:
        return
    if abs(stored / (0.8 * strand) - 1.0) <= STORED_TOLERANCE:
        remedy = (
            "It is 0.8 of that, the other convention: leave the key out, or give the value of "
            "1000 rho R T/G_N."
        )
    else:
        remedy = (
            "Plateau modulus, density and temperature must belong together: correct the one that "
            "is of another temperature, or leave the key out."
        )
    raise InputError(
        f"the stored entanglement molar mass {stored:g} g/mol is not 1000 rho R T/G_N = "
        f"{strand:.4g} g/mol at {_get(constants, 'viscosity.temperature_C'):g} C (rho "
        f"{density:.4g} kg/m3, G_N {_get(constants, 'network.plateau_modulus_Pa'):.4g} Pa).",
        path=origin,
        column="network.molar_mass_g_per_mol",
        remedy=remedy,
    )


def tau_e_belongs(constants: Mapping[str, Constant], strand: float) -> bool:
    """Whether the card's tau_e came with the M_e the card gives (taken so if not said)."""
    came_with = _get(constants, "network.equilibration_time_molar_mass_g_per_mol")
    return came_with is None or abs(came_with / strand - 1.0) <= STORED_TOLERANCE


def remarks(name: str, note: str, constants: Mapping[str, Constant]) -> list[Caution]:
    """What the card's author wants said whenever the card is used."""
    said = []
    if note:
        said.append(Caution("card_note", f"{name}: {note}"))
    disputed = _get(constants, "network.plateau_modulus_disputed_Pa")
    if disputed is not None:
        used = _get(constants, "network.plateau_modulus_Pa")
        said.append(
            Caution(
                "plateau_modulus_disputed",
                f"{name}: the plateau modulus used is {used:.3g} Pa; others report "
                f"{disputed[0]:.3g} to {disputed[1]:.3g} Pa. The choice hardly moves Mw, but it "
                "moves the weight said to lie below the window.",
            )
        )
    return said


def unusual(name: str, constants: Mapping[str, Constant], strand: float) -> list[Caution]:
    """Relations that are odd but possible."""

    def get(key: str) -> Any:
        return _get(constants, key)

    said: list[str] = []
    if not 500.0 < strand < 1e5:
        said.append(f"M_e = {strand:.3g} g/mol lies outside the usual 500 to 1e5")
    critical = get("viscosity.critical_molar_mass_g_per_mol")
    if critical is not None and critical < strand:
        said.append(f"M_c = {critical:.4g} lies below M_e = {strand:.4g} g/mol")
    elif critical is not None and critical > 6.0 * strand:
        said.append(f"M_c = {critical:.4g} g/mol is {critical / strand:.2g} times M_e")
    exponent = get("viscosity.exponent")
    if not 3.0 <= exponent <= 4.0:
        said.append(f"the viscosity exponent {exponent:g} lies outside the usual 3 to 4")
    law_range = get("viscosity.range_g_per_mol")
    if law_range is not None and critical is not None and law_range[0] < critical:
        said.append("the viscosity law's range begins below its critical molar mass")
    for key, inside in (
        ("network.plateau_modulus_range_Pa", "network.plateau_modulus_Pa"),
        ("kernel.mixing_exponent_range", "kernel.mixing_exponent"),
        ("shift.range_C", "viscosity.temperature_C"),
    ):
        limits, value = get(key), get(inside)
        if limits is not None and value is not None and not limits[0] <= value <= limits[1]:
            said.append(f"{inside} = {value:g} lies outside {key} = {limits[0]:g} to {limits[1]:g}")
    cautions = [Caution("card_unusual", f"{name}: {what}. Check the card.") for what in said]
    if not tau_e_belongs(constants, strand):
        came_with = get("network.equilibration_time_molar_mass_g_per_mol")
        cautions.append(
            Caution(
                "equilibration_time_unused",
                f"{name}: the card's tau_e came with M_e = {came_with:.4g} g/mol, the card gives "
                f"{strand:.4g}: tau_e is estimated from the viscosity law instead.",
            )
        )
    return cautions
