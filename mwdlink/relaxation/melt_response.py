"""Linear viscoelastic response of one melt: distribution, constants and model together."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.errors import Caution, merge_cautions
from mwdlink.relaxation import modes, validity
from mwdlink.relaxation.mixing import Model, relaxation_times, survival_matrix
from mwdlink.relaxation.operator import WIDE_MARGIN, log_grid, time_operator
from mwdlink.relaxation.rouse import rouse_moduli, rouse_relaxation, rouse_second_moment, rouse_viscosity
from mwdlink.relaxation.spectrum import Spectrum, crossover_of


@dataclass(frozen=True, eq=False)
class Relaxation:
    """How a melt of given distribution relaxes.

    Parameters
    ----------
    distribution : Distribution
    melt : Melt
        Polymer constants at the temperature wanted.
    model : Model

    Examples
    --------
    >>> from mwdlink.chains.polymer import builtin
    >>> d = Distribution.from_averages(Mw=1e5, dispersity=3.0)
    >>> r = Relaxation(d, builtin("hdpe").melt(190.0), Model("exponential"))
    >>> storage, loss = r.moduli([0.1, 1.0, 10.0])
    """

    distribution: Distribution
    melt: Melt
    model: Model = Model()

    def _survival_sum(self, t: np.ndarray) -> np.ndarray:
        d = self.distribution
        return survival_matrix(t, d.molar_mass, self.melt, self.model) @ d.mass

    def network_modulus(self, t: np.ndarray) -> np.ndarray:
        """G_N [sum w F^(1/beta)]^beta [Pa] at times [s]."""
        s = np.maximum(self._survival_sum(t), 0.0)
        return self.melt.plateau_modulus * s**self.model.exponent

    def relaxation_modulus(self, t: np.ndarray) -> np.ndarray:
        """G(t) [Pa] at times [s] > 0, Rouse part included."""
        t = np.atleast_1d(np.asarray(t, dtype=float))
        out = self.network_modulus(t)
        if self.model.rouse:
            d = self.distribution
            out = out + rouse_relaxation(t, d.molar_mass, self.melt) @ d.mass
        return out

    def moduli(self, omega: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """G' and G'' [Pa] at angular frequencies [rad/s], in the order given."""
        w = np.atleast_1d(np.asarray(omega, dtype=float))
        operator = time_operator(w, WIDE_MARGIN)
        storage, loss = operator.moduli(self.network_modulus(operator.times))
        if self.model.rouse:
            part = rouse_moduli(w, self.distribution.molar_mass, self.melt) @ self.distribution.mass
            storage, loss = storage + part.real, loss + part.imag
        # far below the terminal zone G' is a difference of large numbers; never let it go negative
        tiny = 1e-12 * self.melt.plateau_modulus * np.minimum(1.0, w * self.longest_time) ** 2
        return np.maximum(storage, tiny * 1e-6), np.maximum(loss, tiny * 1e-6)

    @cached_property
    def times(self) -> np.ndarray:
        """Relaxation time of each chain [s], shape (n,)."""
        return relaxation_times(self.distribution.molar_mass, self.melt, self.model)

    @cached_property
    def longest_time(self) -> float:
        """Kernel time [s] of the chain below which all but 1e-6 of the weight lies."""
        d = self.distribution
        share = np.cumsum(d.mass[::-1])[::-1]
        held = np.flatnonzero(share > 1e-6)
        return float(self.times[held[-1]])

    @cached_property
    def _terminal(self) -> tuple[float, float]:
        # int G dt and int t G dt by the trapezoid rule in ln t: exponentially accurate as both
        # integrands vanish at the ends; G is flat before the first time
        low, high = 1e-7 * float(self.times.min()), 800.0 * self.model.exponent * float(self.times.max())
        t = log_grid(low, high, 20)
        step = np.log(t[1] / t[0])
        g = self.network_modulus(t)
        zero = float(np.sum(g * t) * step - 0.5 * g[0] * t[0] * step + g[0] * t[0])
        first = float(np.sum(g * t * t) * step)
        if self.model.rouse:
            d = self.distribution
            zero += float(rouse_viscosity(d.molar_mass, self.melt) @ d.mass)
            first += float(rouse_second_moment(d.molar_mass, self.melt) @ d.mass)
        return zero, first

    @property
    def zero_shear_viscosity(self) -> float:
        """eta0 = int G dt [Pa s]."""
        return self._terminal[0]

    @property
    def recoverable_compliance(self) -> float:
        """Je0 = int t G dt / eta0^2 [1/Pa]."""
        zero, first = self._terminal
        return first / zero**2

    @property
    def mean_time(self) -> float:
        """eta0 Je0 [s]."""
        zero, first = self._terminal
        return first / zero

    def crossover(self) -> tuple[float, float] | None:
        """Lowest crossing of G' and G'': (omega [rad/s], G [Pa]), or None."""
        return crossover_of(self.moduli, 1e-2 / self.longest_time, 1e2 / float(self.times.min()))

    def spectrum(self, tau_low: float | None = None) -> Spectrum:
        """Positive discrete modes of the melt.

        Parameters
        ----------
        tau_low : float, optional
            Shortest time wanted [s]; default two decades below the shortest chain's kernel time.
            Rouse modes below it are left out.
        """
        return modes.spectrum_of(self, tau_low)

    @cached_property
    def warnings(self) -> tuple[Caution, ...]:
        """Cautions of the melt, the distribution and the model's validity."""
        own = validity.cautions(self.distribution, self.melt, self.model)
        return merge_cautions(self.distribution.warnings, self.melt.warnings, own)
