"""A melt: the polymer's constants at one temperature, as plain numbers ready for use.

The card keeps where each number comes from; the melt keeps only what the relaxation needs, with
the temperature already applied. It is cheap to copy with a few numbers changed, which is how the
uncertainty of the card enters the intervals of a result.
"""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from mwdlink.errors import Caution, ModelError

POWER_LAW_N = 0.23
"""Exponent n of the power-law kernel unless the card says otherwise [-]."""

TYPICAL_CHAIN_Z = 30.0
"""Entanglements of the chain at which the viscosity law and the tube formula are equated [-]."""


def estimate_equilibration_time(
    coefficient: float, exponent: float, plateau_modulus: float, entanglement_molar_mass: float
) -> float:
    """Equilibration time of an entanglement strand from the viscosity law [s].

    Equates the viscosity law at Z = 30 with 0.347 G_N tau_d, where
    tau_d = 3 tau_e Z^3 x 0.5155 carries the contour-length fluctuations of that chain.
    Good to a factor of 2.

    Parameters
    ----------
    coefficient, exponent : float
        eta0 = coefficient M^exponent [Pa s, M in g/mol].
    plateau_modulus : float
        G_N [Pa].
    entanglement_molar_mass : float
        M_e = 1000 rho R T/G_N [g/mol]; Z = M/(0.8 M_e).

    References
    ----------
    Likhtman & McLeish, Macromolecules 35 (2002) 6332 (fluctuation factor, recalled).
    """
    viscosity = coefficient * (TYPICAL_CHAIN_Z * 0.8 * entanglement_molar_mass) ** exponent
    return viscosity / (0.347 * plateau_modulus * 3.0 * TYPICAL_CHAIN_Z**3 * 0.5155)


@dataclass(frozen=True)
class Melt:
    """One polymer at one temperature.

    Attributes
    ----------
    name : str
        Name of the card.
    temperature_C, kelvin : float
        Temperature [C], [K].
    plateau_modulus : float
        G_N [Pa].
    entanglement_molar_mass : float
        M_e = 1000 rho R T/G_N at the viscosity law's temperature [g/mol].
    law_coefficient, law_exponent : float
        eta0 = law_coefficient M**law_exponent of narrow fractions, at this temperature [Pa s].
    critical_molar_mass : float or None
        M_c [g/mol]: below it the law goes on with exponent 1.
    law_range : (float, float) or None
        Molar masses the law was fitted on [g/mol].
    scatter_decades : float
        Standard deviation of log10 of the law's coefficient [-].
    density : float
        Of the melt at this temperature [kg/m3].
    repeat_unit : float or None
        Molar mass of a repeat unit [g/mol].
    equilibration_time : float
        tau_e [s] at this temperature: the card's, or estimated from the viscosity law.
    equilibration_time_estimated : bool
    power_law_n : float
        n of the power-law kernel [-].
    fluctuation_molar_mass : float or None
        M_1 of the fluctuation kernel [g/mol].
    mixing_exponent : float or None
        The card's exponent [-]; None leaves the choice to the caller.
    mixing_exponent_range : (float, float) or None
    plateau_range : (float, float) or None
        Stated range of G_N [Pa], at this temperature.
    a_T, b_T : float
        Shifts of times and of moduli from the card's own temperature to this one [-].
    warnings : tuple of Caution
    """

    name: str
    temperature_C: float
    kelvin: float
    plateau_modulus: float
    entanglement_molar_mass: float
    law_coefficient: float
    law_exponent: float
    density: float
    equilibration_time: float
    equilibration_time_estimated: bool = False
    critical_molar_mass: float | None = None
    law_range: tuple[float, float] | None = None
    scatter_decades: float = 0.10
    repeat_unit: float | None = None
    power_law_n: float = POWER_LAW_N
    fluctuation_molar_mass: float | None = None
    mixing_exponent: float | None = None
    mixing_exponent_range: tuple[float, float] | None = None
    plateau_range: tuple[float, float] | None = None
    a_T: float = 1.0
    b_T: float = 1.0
    warnings: tuple[Caution, ...] = ()

    @property
    def entanglement_modulus(self) -> float:
        """G_e = 1.25 G_N [Pa], the modulus every tube formula is written with."""
        return 1.25 * self.plateau_modulus

    def Z(self, M: Any) -> Any:
        """Entanglements per chain M/(0.8 M_e) [-], for molar masses of any shape [g/mol]."""
        if isinstance(M, (int, float)):
            return M / (0.8 * self.entanglement_molar_mass)
        return np.asarray(M, dtype=float) / (0.8 * self.entanglement_molar_mass)

    def zero_shear_law(self, M: Any) -> Any:
        """Zero-shear viscosity of a narrow fraction [Pa s].

        Parameters
        ----------
        M : float or array_like
            Molar mass [g/mol], > 0.

        Returns
        -------
        float or ndarray of the same shape
            K M^a, and K M_c^(a-1) M below the critical molar mass, where the card names one.
        """
        mass = np.asarray(M, dtype=float)
        law = self.law_coefficient * mass**self.law_exponent
        critical = self.critical_molar_mass
        if critical is not None:
            short = self.law_coefficient * critical ** (self.law_exponent - 1.0) * mass
            law = np.where(mass < critical, short, law)
        return float(law) if np.ndim(M) == 0 else law

    @property
    def law_pivot(self) -> float:
        """Molar mass at which a changed exponent leaves the viscosity as it is [g/mol].

        The geometric middle of the fitted range, else the chain of 30 entanglements.
        """
        if self.law_range is not None:
            return math.sqrt(self.law_range[0] * self.law_range[1])
        return TYPICAL_CHAIN_Z * 0.8 * self.entanglement_molar_mass

    def with_(
        self,
        time_factor: float = 1.0,
        plateau_modulus: float | None = None,
        law_exponent: float | None = None,
        pivot: float | None = None,
    ) -> Melt:
        """A copy with some of the card's numbers changed, consistently.

        Parameters
        ----------
        time_factor : float
            Multiplies the viscosity law and tau_e [-], > 0.
        plateau_modulus : float, optional
            New G_N [Pa]. M_e follows as 1/G_N (density and temperature stand). A tau_e of the
            card's follows as M_e^2 (the friction of a strand stands); an estimated one is
            estimated anew.
        law_exponent : float, optional
            New exponent; the law is turned about `pivot`, not about 1 g/mol, because the
            coefficient alone means nothing: 0.1 in the exponent is a factor 3 at 1e5 g/mol.
        pivot : float, optional
            Molar mass at which the viscosity stays [g/mol]; default `law_pivot`.

        Raises
        ------
        ModelError
            If a factor, modulus or exponent is not a positive finite number.
        """
        for word, number in (
            ("time factor", time_factor),
            ("plateau modulus", plateau_modulus),
            ("law exponent", law_exponent),
            ("pivot", pivot),
        ):
            if number is not None and not (math.isfinite(number) and number > 0):
                raise ModelError(f"the {word} must be a positive number, not {number!r}.")
        coefficient, exponent = self.law_coefficient, self.law_exponent
        if law_exponent is not None and law_exponent != exponent:
            about = self.law_pivot if pivot is None else pivot
            coefficient *= about ** (exponent - law_exponent)
            exponent = law_exponent
        modulus, strand = self.plateau_modulus, self.entanglement_molar_mass
        tau_e = self.equilibration_time
        if plateau_modulus is not None:
            strand *= modulus / plateau_modulus
            tau_e *= (modulus / plateau_modulus) ** 2
            modulus = plateau_modulus
        if self.equilibration_time_estimated:
            tau_e = estimate_equilibration_time(coefficient, exponent, modulus, strand)
        return dataclasses.replace(
            self,
            plateau_modulus=float(modulus),
            entanglement_molar_mass=float(strand),
            law_coefficient=float(coefficient * time_factor),
            law_exponent=float(exponent),
            equilibration_time=float(tau_e * time_factor),
        )
