"""Linear viscoelastic response of one melt: distribution, constants and model together."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.errors import Caution, merge_cautions
from mwdlink.relaxation import modes, validity
from mwdlink.relaxation.mixing import (
    Model,
    in_network,
    relaxation_times,
    survival_matrix,
    survival_sum,
)
from mwdlink.relaxation.operator import debye, log_grid, melt_fit
from mwdlink.relaxation.rouse import rouse_on_lattice, rouse_second_moment, rouse_viscosity
from mwdlink.relaxation.spectrum import Spectrum, crossover_of

# how far beyond 1/omega of the frequencies asked for the fit reaches [-]
REACH_SHORT = 1e-6
REACH_LONG = 1e4
# a tail of less weight than this does not set the longest time
LEAST_SHARE = 1e-14


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

    def network_modulus(self, t: np.ndarray) -> np.ndarray:
        """G_N [sum w F^(1/beta)]^beta [Pa] at times [s]."""
        d = self.distribution
        s = survival_matrix(t, d.molar_mass, self.melt, self.model) @ d.mass
        return self.melt.plateau_modulus * s**self.model.exponent

    def relaxation_modulus(self, t: np.ndarray) -> np.ndarray:
        """G(t) [Pa] at times [s] > 0, Rouse part included (modes no faster than the first t)."""
        t = np.atleast_1d(np.asarray(t, dtype=float))
        out = self.network_modulus(t)
        if self.model.rouse and np.any(t > 0):
            tau, strength = self._rouse(1.0 / float(t[t > 0].min()))
            out = out + np.exp(-np.outer(t, 1.0 / tau)) @ strength
        return out

    def moduli(self, omega: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """G' and G'' [Pa] at angular frequencies [rad/s], in the order given."""
        w = np.atleast_1d(np.asarray(omega, dtype=float))
        return self._moduli(w, float(w.min()), float(w.max()))

    def _moduli(self, w: np.ndarray, low: float, high: float) -> tuple[np.ndarray, np.ndarray]:
        """Moduli at any frequencies from low to high."""
        storage, loss = np.zeros_like(w), np.zeros_like(w)
        parts = [self._network(low, high)]
        if self.model.rouse:
            parts.append(self._rouse(high))
        for tau, strength in parts:
            a, b = debye(w, tau)
            storage, loss = storage + a @ strength, loss + b @ strength
        # far below the terminal zone G' is a difference of large numbers; never let it go negative
        tiny = 1e-12 * self.melt.plateau_modulus * np.minimum(1.0, w * self.longest_time) ** 2
        return np.maximum(storage, tiny * 1e-6), np.maximum(loss, tiny * 1e-6)

    def _network(self, low: float, high: float) -> tuple[np.ndarray, np.ndarray]:
        """Exponentials (of either sign) that give the network part from omega low to high."""
        longest = self._time_of_share(LEAST_SHARE)
        if longest is None:
            return np.ones(1), np.zeros(1)
        # rounded to decades, so that lists of frequencies share their times
        reach = REACH_LONG * 10.0 ** -np.floor(np.log10(low) + 1e-9)
        shortest = min(
            REACH_SHORT * 10.0 ** -np.ceil(np.log10(high) - 1e-9),
            1e-6 * self._median_time(),
        )
        key = (shortest, min(longest, reach))
        if key not in self._kept:
            times, tau, fit = melt_fit(*key, relaxed=longest <= reach)
            d, beta = self.distribution, self.model.exponent
            s = survival_sum(times, d.molar_mass, d.mass, self.melt, self.model)
            g = self.melt.plateau_modulus * np.maximum(s, 0.0) ** beta
            self._kept[key] = tau, fit @ g
        return self._kept[key]

    def _time_of_share(self, share: float) -> float | None:
        """Longest kernel time [s] such that more than a share of the weight is as slow or slower.

        None when the network carries less weight than that.
        """
        d = self.distribution
        held = in_network(d.molar_mass, self.melt, self.model)
        weight = np.cumsum(np.where(held, d.mass, 0.0)[::-1])[::-1]
        found = np.flatnonzero(held & (weight > share))
        return float(self.times[found[-1]]) if found.size else None

    def _median_time(self) -> float:
        """Kernel time [s] that half of the network's own weight exceeds (it has some)."""
        d = self.distribution
        held = np.where(in_network(d.molar_mass, self.melt, self.model), d.mass, 0.0)
        weight = np.cumsum(held[::-1])[::-1]
        return float(self.times[np.flatnonzero(weight >= 0.5 * weight[0])[-1]])

    @cached_property
    def _kept(self) -> dict[tuple[float, float], tuple[np.ndarray, np.ndarray]]:
        """Exponentials of the network part by range of times: they do not depend on frequency."""
        return {}

    @cached_property
    def _kept_rouse(self) -> dict[float, tuple[np.ndarray, np.ndarray]]:
        return {}

    def _rouse(self, omega_max: float) -> tuple[np.ndarray, np.ndarray]:
        """Times and strengths of the whole melt's Rouse part."""
        if omega_max not in self._kept_rouse:
            d = self.distribution
            self._kept_rouse[omega_max] = rouse_on_lattice(
                d.molar_mass, d.mass, self.melt, omega_max
            )
        return self._kept_rouse[omega_max]

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
        zero = first = 0.0
        longest = self._time_of_share(0.0)
        if longest is not None:
            low = 1e-10 * self._median_time()
            t = log_grid(low, 80.0 * longest, 10)
            step = np.log(t[1] / t[0])
            g = self.network_modulus(t)
            zero = float(np.sum(g * t) * step + g[0] * t[0] * (1.0 - 0.5 * step))
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
        low, high = 1e-2 / self.longest_time, 1e2 / float(self.times.min())
        return crossover_of(lambda w: self._moduli(w, low, high), low, high)

    def spectrum(self, tau_low: float | None = None) -> Spectrum:
        """Positive discrete modes of the melt.

        Parameters
        ----------
        tau_low : float, optional
            Shortest time wanted [s]; default three decades below the shortest chain's kernel time.
            Faster modes are gathered there, with their viscosity kept.
        """
        return modes.spectrum_of(self, tau_low)

    @cached_property
    def warnings(self) -> tuple[Caution, ...]:
        """Cautions of the melt, the distribution and the model's validity."""
        own = validity.cautions(self.distribution, self.melt, self.model)
        return merge_cautions(self.distribution.warnings, self.melt.warnings, own)
