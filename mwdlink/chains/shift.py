"""Time-temperature shift: Arrhenius and WLF, and how far each may be carried.

A shift law gives the factor a_T by which every time of a melt grows when it is taken from one
temperature to another. Both forms are written relative to two temperatures, so that the answer
never depends on the temperature at which the constants happen to be printed.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from mwdlink.errors import Caution, ModelError

GAS_CONSTANT = 8.314462618
"""Molar gas constant [J/(mol K)], exact since the SI of 2019 (to the digits shown)."""

ZERO_CELSIUS = 273.15
"""0 C in kelvin."""

UNSTATED_REACH_K = 50.0
"""Distance from its reference at which a law without a stated range begins to be doubted [K]."""

FARTHEST_EXTRAPOLATION_K = 100.0
"""Beyond its range by more than this a shift law is not followed at all [K]."""

CLOSEST_TO_SINGULARITY_K = 15.0
"""WLF is not followed closer to its singular temperature than this [K]: with usual constants
about 35 K below the glass transition, where nothing flows within any experiment."""


def rereference_wlf(c1: float, c2: float, T_old: float, T_new: float) -> tuple[float, float]:
    """The same WLF law, printed for another reference temperature. Exact.

    Parameters
    ----------
    c1 : float
        First constant at `T_old` [-], log10 form.
    c2 : float
        Second constant at `T_old` [K].
    T_old, T_new : float
        Reference temperatures, both in C or both in K.

    Returns
    -------
    c1, c2 : float
        Constants at `T_new`: c2' = c2 + T_new - T_old and c1' = c1 c2/c2'.

    Raises
    ------
    ModelError
        If `T_new` lies at or below the singular temperature T_old - c2.

    Examples
    --------
    >>> c1, c2 = rereference_wlf(6.17, 141.8, 180.0, 160.0)
    >>> round(c1, 2), round(c2, 1)
    (7.18, 121.8)
    """
    c2_new = c2 + (T_new - T_old)
    if not c2_new > 0:
        raise ModelError(
            f"a WLF law with c2 = {c2:g} K at {T_old:g} ends at {T_old - c2:g}; "
            f"it cannot be referred to {T_new:g}. Choose a reference above that temperature."
        )
    return c1 * c2 / c2_new, c2_new


def arrhenius_factor(energy_J_per_mol: float, T_C: float, from_C: float) -> float:
    """a_T of an activated process between two temperatures [-].

    Parameters
    ----------
    energy_J_per_mol : float
        Flow activation energy [J/mol].
    T_C, from_C : float
        Temperature wanted, and the one where a_T = 1 [C].
    """
    kelvin, kelvin_from = T_C + ZERO_CELSIUS, from_C + ZERO_CELSIUS
    return math.exp(energy_J_per_mol / GAS_CONSTANT * (1.0 / kelvin - 1.0 / kelvin_from))


def wlf_factor(c1: float, c2: float, reference_C: float, T_C: float, from_C: float) -> float:
    """a_T after Williams, Landel and Ferry between two temperatures [-].

    Parameters
    ----------
    c1, c2 : float
        Constants at `reference_C` [-], [K]: log10 a_T = -c1 (T - T_ref)/(c2 + T - T_ref).
    reference_C, T_C, from_C : float
        Reference, temperature wanted, and the one where a_T = 1 [C].

    References
    ----------
    Ferry, Viscoelastic Properties of Polymers, 3rd ed. (1980), recalled.
    """
    c1, c2 = rereference_wlf(c1, c2, reference_C, from_C)
    rereference_wlf(c1, c2, from_C, T_C)  # refuses a temperature below the singularity
    step = T_C - from_C
    return 10.0 ** (-c1 * step / (c2 + step))


@dataclass(frozen=True)
class ShiftLaw:
    """A card's shift law.

    Attributes
    ----------
    kind : str
        `arrhenius` or `wlf`.
    energy_J_per_mol : float or None
        Flow activation energy [J/mol]; Arrhenius only.
    c1, c2 : float or None
        WLF constants [-], [K] at `reference_C`; WLF only.
    reference_C : float
        Temperature of the constants [C]; for Arrhenius only the middle of an unstated range.
    range_C : (float, float) or None
        Temperatures the law was measured over [C].
    """

    kind: str
    energy_J_per_mol: float | None = None
    c1: float | None = None
    c2: float | None = None
    reference_C: float = 25.0
    range_C: tuple[float, float] | None = None

    def factor(self, T_C: float, from_C: float) -> float:
        """a_T at `T_C` for times known at `from_C` [-]. Does not ask whether that is sensible."""
        if self.kind == "arrhenius":
            if self.energy_J_per_mol is None:
                raise ModelError("an Arrhenius law needs an activation energy.")
            return arrhenius_factor(self.energy_J_per_mol, T_C, from_C)
        if self.c1 is None or self.c2 is None:
            raise ModelError("a WLF law needs c1 and c2.")
        return wlf_factor(self.c1, self.c2, self.reference_C, T_C, from_C)

    def activation_energy(self, T_C: float) -> float:
        """Apparent activation energy R d ln a_T/d(1/T) at a temperature [J/mol]."""
        if self.kind == "arrhenius":
            return float(self.energy_J_per_mol or 0.0)
        c1, c2 = rereference_wlf(self.c1 or 0.0, self.c2 or 0.0, self.reference_C, T_C)
        return math.log(10.0) * GAS_CONSTANT * c1 / c2 * (T_C + ZERO_CELSIUS) ** 2

    @property
    def reach_C(self) -> tuple[float, float]:
        """Temperatures at which the law is used without a word [C]."""
        if self.range_C is not None:
            return self.range_C
        return self.reference_C - UNSTATED_REACH_K, self.reference_C + UNSTATED_REACH_K

    def check(self, T_C: float, name: str) -> tuple[Caution, ...]:
        """Cautions for a temperature; refuses one that is out of the law's reach.

        Raises
        ------
        ModelError
            Near or below the WLF singularity, or more than 100 K beyond the range.
        """
        low, high = self.reach_C
        stated = (
            f"its shift law covers {low:g} to {high:g} C"
            if self.range_C is not None
            else f"its shift law names no range and is trusted for {low:g} to {high:g} C"
        )
        if self.kind == "wlf" and self.c2 is not None:
            floor = self.reference_C - self.c2 + CLOSEST_TO_SINGULARITY_K
            if T_C < floor:
                raise ModelError(
                    f"{name} cannot be taken to {T_C:g} C: its WLF law ends at "
                    f"{self.reference_C - self.c2:.4g} C and is not followed below {floor:.4g} C. "
                    "Check that the temperature is in C and choose one at which the melt flows."
                )
        beyond = max(low - T_C, T_C - high)
        if beyond > FARTHEST_EXTRAPOLATION_K:
            raise ModelError(
                f"{name} cannot be taken to {T_C:g} C: {stated}, and that is {beyond:.3g} K away. "
                "Check that the temperature is in C, or use a card with a shift law measured there."
            )
        if beyond > 0:
            return (
                Caution(
                    "temperature_extrapolated",
                    f"{T_C:g} C is {beyond:.3g} K beyond what the card of {name} can vouch for "
                    f"({stated}): all times there are extrapolated.",
                ),
            )
        return ()
