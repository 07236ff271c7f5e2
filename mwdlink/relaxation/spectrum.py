"""A discrete relaxation spectrum and everything linear viscoelasticity makes of it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.optimize import brentq

from mwdlink.errors import Caution, InputError
from mwdlink.quantity import readonly
from mwdlink.relaxation.operator import debye


@dataclass(frozen=True, eq=False)
class Spectrum:
    """Maxwell modes in parallel, G(t) = sum g_i exp(-t/tau_i).

    Attributes
    ----------
    tau : ndarray of shape (n,)
        Relaxation times [s], ascending.
    strength : ndarray of shape (n,)
        g [Pa], >= 0.

    Raises
    ------
    InputError
        If the modes are not finite, positive and ascending.

    Examples
    --------
    >>> s = Spectrum([1.0], [1000.0])
    >>> s.zero_shear_viscosity, s.recoverable_compliance
    (1000.0, 0.001)
    """

    tau: np.ndarray
    strength: np.ndarray

    def __post_init__(self) -> None:
        tau, g = readonly(self.tau), readonly(self.strength)
        if tau.ndim != 1 or tau.shape != g.shape or tau.size == 0:
            raise InputError("a spectrum needs as many strengths as relaxation times")
        if not (np.all(np.isfinite(tau)) and np.all(np.isfinite(g))):
            raise InputError("a spectrum holds a number that is not finite")
        if np.any(tau <= 0) or np.any(np.diff(tau) <= 0):
            raise InputError("relaxation times must be positive and ascending")
        if np.any(g < 0) or not g.sum() > 0:
            raise InputError("mode strengths must be >= 0 and not all zero")
        object.__setattr__(self, "tau", tau)
        object.__setattr__(self, "strength", g)

    # -- linear response ----------------------------------------------------------------------
    def relaxation_modulus(self, t: Any) -> np.ndarray:
        """G(t) [Pa] at times [s], >= 0."""
        return np.exp(-np.outer(np.atleast_1d(t), 1.0 / self.tau)) @ self.strength

    def moduli(self, omega: Any) -> tuple[np.ndarray, np.ndarray]:
        """G' and G'' [Pa] at angular frequencies [rad/s]."""
        storage, loss = debye(np.atleast_1d(np.asarray(omega, dtype=float)), self.tau)
        return storage @ self.strength, loss @ self.strength

    def complex_viscosity(self, omega: Any) -> np.ndarray:
        """|eta*| [Pa s]."""
        w = np.atleast_1d(np.asarray(omega, dtype=float))
        storage, loss = self.moduli(w)
        return np.hypot(storage, loss) / w

    def tan_delta(self, omega: Any) -> np.ndarray:
        """G''/G' [-]."""
        storage, loss = self.moduli(omega)
        return loss / storage

    @property
    def zero_shear_viscosity(self) -> float:
        """eta0 = sum g tau [Pa s]."""
        return float(self.strength @ self.tau)

    @property
    def recoverable_compliance(self) -> float:
        """Steady-state recoverable compliance Je0 = sum g tau^2 / eta0^2 [1/Pa]."""
        return float(self.strength @ self.tau**2) / self.zero_shear_viscosity**2

    @property
    def mean_time(self) -> float:
        """Mean relaxation time eta0 Je0 [s]."""
        return self.zero_shear_viscosity * self.recoverable_compliance

    @property
    def width_decades(self) -> float:
        """Decades of tau between the ends that carry 1e-3 of eta0 and of G(0)."""
        carries = (self.strength * self.tau > 1e-3 * self.zero_shear_viscosity) | (
            self.strength > 1e-3 * self.strength.sum()
        )
        held = self.tau[carries]
        return float(np.log10(held[-1] / held[0]))

    def crossover(self) -> tuple[float, float] | None:
        """Lowest crossing of G' and G'' with rising frequency: (omega [rad/s], G [Pa]), or None."""
        return crossover_of(self.moduli, 1e-3 / self.tau[-1], 1e3 / self.tau[0])

    # -- start and end of steady flow (linear) ------------------------------------------------
    def startup_viscosity(self, t: Any) -> np.ndarray:
        """eta+(t) = sum g tau (1 - exp(-t/tau)) [Pa s] after the start of slow steady shear."""
        decay = -np.expm1(-np.outer(np.atleast_1d(t), 1.0 / self.tau))
        return decay @ (self.strength * self.tau)

    def cessation_viscosity(self, t: Any) -> np.ndarray:
        """eta-(t)/eta0 [-], the share of the stress left after slow steady shear has stopped."""
        decay = np.exp(-np.outer(np.atleast_1d(t), 1.0 / self.tau))
        return decay @ (self.strength * self.tau) / self.zero_shear_viscosity

    # -- steady flow --------------------------------------------------------------------------
    def flow_curve(self, rate: Any) -> tuple[np.ndarray, tuple[Caution, ...]]:
        """Steady shear viscosity by the Cox-Merz rule, eta(rate) = |eta*|(omega = rate).

        Parameters
        ----------
        rate : array_like of shape (n,)
            Shear rates [1/s], > 0.

        Returns
        -------
        eta : ndarray of shape (n,)
            [Pa s]
        cautions : tuple of Caution
            With less than two decades of tau eta = eta0 is returned and `cox_merz_narrow` said:
            a single Maxwell mode is Newtonian in steady shear (common practice), the rule is for
            linear melts with a broad spectrum.
        """
        rate = np.atleast_1d(np.asarray(rate, dtype=float))
        if self.width_decades < 2.0:
            note = Caution(
                "cox_merz_narrow",
                f"The spectrum spans {self.width_decades:.1f} decades: too narrow for the Cox-Merz "
                "rule, the flow curve is given as eta0 at every rate.",
            )
            return np.full(rate.shape, self.zero_shear_viscosity), (note,)
        return self.complex_viscosity(rate), ()

    def scaled(self, a_T: float, b_T: float = 1.0) -> Spectrum:
        """The spectrum with times multiplied by a_T and strengths by b_T."""
        return Spectrum(self.tau * a_T, self.strength * b_T)


def crossover_of(moduli: Any, low: float, high: float) -> tuple[float, float] | None:
    """First frequency, going up, where G' overtakes G''.

    Parameters
    ----------
    moduli : callable
        omega (array, rad/s) -> (G', G'') [Pa].
    low, high : float
        Range searched [rad/s].

    Returns
    -------
    (omega, G) or None
    """
    w = np.geomspace(low, high, max(int(np.log10(high / low) * 20), 10))
    storage, loss = moduli(w)
    with np.errstate(divide="ignore", invalid="ignore"):
        gap = np.log(storage / loss)
    up = np.flatnonzero((gap[:-1] < 0) & (gap[1:] >= 0))
    if up.size == 0:
        return None
    i = int(up[0])

    def difference(x: float) -> float:
        a, b = moduli(np.array([np.exp(x)]))
        return float(np.log(a[0] / b[0]))

    x = brentq(difference, np.log(w[i]), np.log(w[i + 1]), xtol=1e-10)
    value = float(np.exp(x))
    return value, float(moduli(np.array([value]))[0][0])
