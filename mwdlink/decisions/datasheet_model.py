"""From a family of distributions and an uncertain card to every number that a sheet may hold.

Many melts at once: rows of unknowns in standard deviations of their priors. A factor on the time
law, on the modulus, on temperature's shift and the die's entrance loss only move a curve, so the
costly part is the distribution and the mixing exponent.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from mwdlink.chains.polymer import Polymer
from mwdlink.chains.shift import GAS_CONSTANT, ZERO_CELSIUS
from mwdlink.decisions.datasheet_claims import Claim
from mwdlink.decisions.datasheet_families import (
    FAMILIES,
    MASS,
    NARROW_BELOW,
    USUAL,
    distribution_rows,
)
from mwdlink.decisions.gpc_scale import STANDARD_A, STANDARD_K, STANDARD_SOLVENT
from mwdlink.decisions.properties import Curves, crossovers, melt_flow_rates
from mwdlink.relaxation.mixing import Model, survival_matrix
from mwdlink.relaxation.operator import LEAN_MARGIN, time_operator
from mwdlink.relaxation.rouse import rouse_moduli, rouse_viscosity

# unknowns of the card and the tests, after those of the distribution
CARD = ("exponent", "time law", "modulus", "entrance", "energy", "intrinsic", "equivalent")
EXPONENT, TIME, MODULUS, ENTRANCE, ENERGY, INTRINSIC, EQUIVALENT = range(7)

EXPONENTS = np.array([1.5, 1.75, 2.0, 2.25, 2.5])
EXPONENT_PRIOR = (2.0, 0.2)
# the share of the load lost at the die's entrance (common practice for this short a die)
ENTRANCE_PRIOR = (0.08, 0.05)
ENERGY_SPREAD = 0.08
# Mark-Houwink constants from another laboratory, and conversion of equivalent masses
INTRINSIC_SPREAD = 0.05
EQUIVALENT_SPREAD = 0.06
# where the card has no Mark-Houwink constants: equivalent masses of polyolefins are about twice
# the true ones (recalled), and that is all one knows
BLIND_FACTOR, BLIND_SPREAD = 2.0, 0.25
# what Cox-Merz and the flow integral themselves are good for, beside the claims' tolerances
FLOW_ERROR = 0.04
STEP = 1e-3
OMEGA = np.geomspace(1e-5, 1e5, 61)
LN_OMEGA = np.log(OMEGA)


class _Seen:
    """Curves, and what has been read off them, each once."""

    def __init__(self, curves: Curves) -> None:
        self.curves = curves
        self.rates: dict[tuple[float, float], np.ndarray] = {}

    @cached_property
    def crossing(self) -> tuple[np.ndarray, np.ndarray]:
        """ln of frequency and modulus."""
        omega, level = crossovers(self.curves)
        return np.log(omega), np.log(level)

    @cached_property
    def viscosity(self) -> np.ndarray:
        """ln of |eta*|."""
        return np.log(self.curves.viscosity)

    def rows(self, k: int) -> _Seen:
        """The first k melts, with what has been read off them."""
        c = self.curves
        out = _Seen(Curves(c.omega, c.storage[:k], c.loss[:k], c.eta0[:k], c.Je0[:k]))
        if "crossing" in self.__dict__:
            out.crossing = (self.crossing[0][:k], self.crossing[1][:k])
        if "viscosity" in self.__dict__:
            out.viscosity = self.viscosity[:k]
        out.rates = {key: rate[:k] for key, rate in self.rates.items()}
        return out


@dataclass(frozen=True, eq=False)
class SheetModel:
    """Everything that does not depend on the unknowns.

    Attributes
    ----------
    polymer : Polymer
    claims : tuple of Claim
    kernel : str
    families : tuple of str
        Of distributions that the claims may be of.
    tables : ndarray of shape (5, n_t, n)
        F^(1/beta) at each of EXPONENTS.
    matrix : ndarray of shape (2 n_w, n_t)
    linear : ndarray of shape (2 n_w, n)
        Rouse part of each node [Pa].
    rouse_eta : ndarray of shape (n,)
        [Pa s]
    times : ndarray of shape (n_t,)
    """

    polymer: Polymer
    claims: tuple[Claim, ...]
    kernel: str
    families: tuple[str, ...]
    tables: np.ndarray
    matrix: np.ndarray
    linear: np.ndarray
    rouse_eta: np.ndarray
    times: np.ndarray

    def predict(self, z: np.ndarray, family: str) -> np.ndarray:
        """ln of every quantity.

        Parameters
        ----------
        z : ndarray of shape (k, d)
            Unknowns of the family, then of CARD, in standard deviations of their priors.
        family : str

        Returns
        -------
        ndarray of shape (k, number of claims)
            NaN where a quantity lies outside what can be computed.
        """
        own = len(FAMILIES[family])
        w, curves = self._costly(z, own, family)
        return self._all(self.claims, w, _Seen(curves), z[:, own:])

    def predict_and_slope(
        self, z: np.ndarray, family: str, count: int
    ) -> tuple[np.ndarray, np.ndarray]:
        """The same of the first `count` quantities, and derivatives: (k, c) and (k, c, d)."""
        own = len(FAMILIES[family])
        k, d = z.shape
        claims = self.claims[:count]
        costly = [*range(own), own + EXPONENT]
        moved = np.concatenate([z, *[z + STEP * np.eye(d)[i] for i in costly]])
        w, curves = self._costly(moved, own, family)
        seen = _Seen(curves)
        y = self._all(claims, w, seen, moved[:, own:]).reshape(len(costly) + 1, k, -1)
        slope = np.zeros((k, count, d))
        for j, i in enumerate(costly):
            slope[:, :, i] = (y[j + 1] - y[0]) / STEP
        first = seen.rows(k)
        for c, claim in enumerate(claims):
            for unknown, change in self._card_slopes(claim, first, z[:, own:]).items():
                slope[:, c, own + unknown] = change
        return y[0], np.nan_to_num(slope)

    def _card_slopes(
        self, c: Claim, seen: _Seen, card: np.ndarray
    ) -> dict[int, np.ndarray | float]:
        """Derivatives of ln of one quantity by the card's unknowns: all in closed form but flow."""
        law, modulus = self.time_spread, self.modulus_spread
        if c.kind in ("Mn", "Mw", "Mz"):
            return {EQUIVALENT: self._equivalent_spread(c)}
        if c.kind == "intrinsic viscosity":
            return {INTRINSIC: INTRINSIC_SPREAD}
        if c.kind == "activation energy":
            return {ENERGY: ENERGY_SPREAD}
        if c.kind == "dispersity":
            return {}
        if c.kind == "crossover G":
            return {MODULUS: modulus}
        energy = self._log_shift_slope(c, card)
        if c.kind == "eta0":
            return {TIME: law, ENERGY: energy}
        if c.kind == "crossover omega":
            return {TIME: -law, MODULUS: modulus, ENERGY: -energy}
        if c.kind == "viscosity":
            at = np.log(float(c.omega or 1.0)) + self._log_times(c, card)
            thinning = (_along(LN_OMEGA, seen.viscosity, at + STEP)
                        - _along(LN_OMEGA, seen.viscosity, at)) / STEP  # fmt: skip
            return {
                TIME: law * (1 + thinning),
                MODULUS: -modulus * thinning,
                ENERGY: energy * (1 + thinning),
            }
        # a factor on the modulus and a loss at the entrance both act on the driving stress
        by_stress = self._by_stress(float(c.load_kg or 0.0), seen, card)
        if c.kind == "flow rate ratio":
            by_stress = by_stress - self._by_stress(float(c.second_load_kg or 0.0), seen, card)
        lost = ENTRANCE_PRIOR[0] + ENTRANCE_PRIOR[1] * card[:, ENTRANCE]
        inside = (lost > 0.0) & (lost < 0.5)
        out: dict[int, np.ndarray | float] = {
            ENTRANCE: by_stress * np.where(inside, -ENTRANCE_PRIOR[1] / (1 - lost), 0.0),
            MODULUS: -modulus * by_stress,
        }
        if c.kind == "melt flow":
            out |= {TIME: -law, MODULUS: modulus * (1.0 - by_stress), ENERGY: -energy}
        return out

    def _costly(self, z: np.ndarray, own: int, family: str) -> tuple[np.ndarray, Curves]:
        w = distribution_rows(z[:, :own], family)
        return w, self._curves(w, EXPONENT_PRIOR[0] + EXPONENT_PRIOR[1] * z[:, own + EXPONENT])

    def _all(
        self, claims: Sequence[Claim], w: np.ndarray, seen: _Seen, card: np.ndarray
    ) -> np.ndarray:
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.column_stack([self._one(c, w, seen, card) for c in claims])

    def _rate(self, load: float, seen: _Seen, card: np.ndarray, more: float = 0.0) -> np.ndarray:
        """ln of the melt flow rate at unit density and unmoved times; one run a load."""
        if (load, more) not in seen.rates:
            lost = np.clip(ENTRANCE_PRIOR[0] + ENTRANCE_PRIOR[1] * card[:, ENTRANCE], 0.0, 0.5)
            modulus = self.modulus_spread * card[:, MODULUS]
            # a factor on the modulus is a factor on the stress that drives the flow
            effective = 1.0 - (1.0 - lost) * np.exp(more - modulus)
            rate = melt_flow_rates(seen.curves, load, 1000.0, effective)
            seen.rates[load, more] = np.log(rate)
        return seen.rates[load, more]

    def _by_stress(self, load: float, seen: _Seen, card: np.ndarray) -> np.ndarray:
        """Slope of ln of the melt flow rate by ln of the driving stress."""
        return (self._rate(load, seen, card, STEP) - self._rate(load, seen, card)) / STEP

    def _log_times(self, c: Claim, card: np.ndarray) -> np.ndarray:
        """ln of the factor on all times."""
        T = self.polymer.temperature_C if c.temperature_C is None else c.temperature_C
        law = self.time_spread * card[:, TIME] - self.modulus_spread * card[:, MODULUS]
        return law + self._log_shift(T, card)

    def _log_shift_slope(self, c: Claim, card: np.ndarray) -> np.ndarray | float:
        T = self.polymer.temperature_C if c.temperature_C is None else c.temperature_C
        own = self.polymer.temperature_C
        if abs(T - own) < 0.05:
            return 0.0
        reciprocal = 1.0 / (T + ZERO_CELSIUS) - 1.0 / (own + ZERO_CELSIUS)
        return self._energy(card) * ENERGY_SPREAD / GAS_CONSTANT * reciprocal

    def _curves(self, w: np.ndarray, exponent: np.ndarray) -> Curves:
        beta = np.clip(exponent, 1.35, 2.65)
        share = _polynomial(beta)
        melt = self.polymer.melt(self.polymer.temperature_C)
        s = np.zeros((self.times.size, w.shape[0]))
        for i in range(EXPONENTS.size):
            s += (self.tables[i] @ w.T) * share[:, i]
        g = melt.plateau_modulus * np.maximum(s, 1e-30) ** beta
        y = np.maximum(self.matrix @ g + self.linear @ w.T, 1e-9)
        step = np.log(self.times[1] / self.times[0])
        eta0 = step * (self.times @ g) - 0.5 * g[0] * self.times[0] * step
        eta0 = eta0 + g[0] * self.times[0] + w @ self.rouse_eta
        n = OMEGA.size
        return Curves(OMEGA, y[:n].T, y[n:].T, eta0, np.ones(w.shape[0]))

    def _one(
        self,
        c: Claim,
        w: np.ndarray,
        seen: _Seen,
        card: np.ndarray,
    ) -> np.ndarray:
        m = MASS
        if c.kind in ("Mn", "Mw", "Mz", "dispersity"):
            number, weight = -np.log(w @ (1.0 / m)), np.log(w @ m)
            if c.kind == "dispersity":
                return weight - number
            value = {"Mn": number, "Mw": weight, "Mz": np.log(w @ m**2) - weight}[c.kind]
            return value + self._equivalent(c, card)
        if c.kind == "intrinsic viscosity":
            k, a = self.polymer.get("mark_houwink.K_dL_per_g"), self.polymer.get("mark_houwink.a")
            return np.log(k * (w @ m**a)) + INTRINSIC_SPREAD * card[:, INTRINSIC]
        if c.kind == "activation energy":
            return np.log(self._energy(card) / 1000.0)
        modulus = self.modulus_spread * card[:, MODULUS]
        moved = self._log_times(c, card)
        if c.kind == "eta0":
            return np.log(seen.curves.eta0) + moved + modulus
        if c.kind.startswith("crossover"):
            omega, level = seen.crossing
            return omega - moved if c.kind.endswith("omega") else level + modulus
        if c.kind == "viscosity":
            at = np.log(float(c.omega or 1.0)) + moved
            return _along(LN_OMEGA, seen.viscosity, at) + modulus + moved
        rate = self._rate(float(c.load_kg or 0.0), seen, card)
        if c.kind == "flow rate ratio":
            return rate - self._rate(float(c.second_load_kg or 0.0), seen, card)
        if c.volume:
            return rate - moved
        T = self.polymer.temperature_C if c.temperature_C is None else c.temperature_C
        return rate - moved + np.log(self.polymer.density(T) / 1000.0)

    @property
    def time_spread(self) -> float:
        """Standard deviation of ln of the viscosity law's coefficient."""
        return max(self.polymer.scatter_decades * np.log(10.0), 0.1)

    @property
    def modulus_spread(self) -> float:
        """Standard deviation of ln of the plateau modulus."""
        span = self.polymer.get("network.plateau_modulus_range_Pa")
        return 0.07 if span is None else max(0.03, 0.25 * float(np.log(span[1] / span[0])))

    def _equivalent_spread(self, c: Claim) -> float:
        if c.calibration != "equivalent":
            return 0.0
        solvent = str(self.polymer.get("mark_houwink.solvent", "")).upper()
        return EQUIVALENT_SPREAD if solvent == STANDARD_SOLVENT else BLIND_SPREAD

    def _equivalent(self, c: Claim, card: np.ndarray) -> np.ndarray:
        """ln of the factor from own to quoted masses."""
        if c.calibration != "equivalent":
            return np.zeros(card.shape[0])
        spread = self._equivalent_spread(c) * card[:, EQUIVALENT]
        k, a = self.polymer.get("mark_houwink.K_dL_per_g"), self.polymer.get("mark_houwink.a")
        if str(self.polymer.get("mark_houwink.solvent", "")).upper() != STANDARD_SOLVENT:
            return np.log(BLIND_FACTOR) + spread
        own = np.log(max(c.value, 1.0) / BLIND_FACTOR)
        standard = ((1 + a) * own + np.log(k / STANDARD_K)) / (1 + STANDARD_A)
        return standard - own + spread

    def _energy(self, card: np.ndarray) -> np.ndarray:
        """Flow activation energy at the card's temperature [J/mol]."""
        shift = self.polymer.shift
        base = 30e3 if shift is None else shift.activation_energy(self.polymer.temperature_C)
        return base * np.exp(ENERGY_SPREAD * card[:, ENERGY])

    def _log_shift(self, T: float, card: np.ndarray) -> np.ndarray:
        own = self.polymer.temperature_C
        if abs(T - own) < 0.05:
            return np.zeros(card.shape[0])
        shift = self.polymer.shift
        factor = 0.0 if shift is None else float(np.log(shift.factor(T, own)))
        reciprocal = 1.0 / (T + ZERO_CELSIUS) - 1.0 / (own + ZERO_CELSIUS)
        base = self._energy(np.zeros((1, len(CARD))))
        return factor + (self._energy(card) - base) / GAS_CONSTANT * reciprocal


def families_of(claims: Sequence[Claim]) -> tuple[str, ...]:
    """Families that the claims may be of: narrow ones where the sheet speaks of a narrow melt."""
    value = {c.kind: c.value for c in claims if c.calibration != "equivalent"}
    ratios = [value[a] / value[b] for a, b in (("Mw", "Mn"), ("Mz", "Mw")) if {a, b} <= set(value)]
    ratios += [value[k] for k in ("dispersity",) if k in value]
    return (*USUAL, "narrow") if any(1.0 <= r < NARROW_BELOW for r in ratios) else USUAL


def sheet_model(polymer: Polymer, claims: Sequence[Claim], kernel: str) -> SheetModel:
    """The model of one polymer and one kernel."""
    melt = polymer.melt(polymer.temperature_C)
    operator = time_operator(OMEGA, LEAN_MARGIN, 8)
    mass = MASS
    tables = np.array(
        [survival_matrix(operator.times, mass, melt, Model(kernel, float(b))) for b in EXPONENTS]
    )
    part = rouse_moduli(OMEGA, mass, melt)
    return SheetModel(
        polymer,
        tuple(claims),
        kernel,
        families_of(claims),
        tables,
        operator.matrix,
        np.vstack([part.real, part.imag]),
        rouse_viscosity(mass, melt),
        operator.times,
    )


def _polynomial(at: np.ndarray) -> np.ndarray:
    """Lagrange's weights of EXPONENTS at each place, shape (k, 5)."""
    out = np.ones((at.size, EXPONENTS.size))
    for j in range(EXPONENTS.size):
        for m in range(EXPONENTS.size):
            if m != j:
                out[:, j] *= (at - EXPONENTS[m]) / (EXPONENTS[j] - EXPONENTS[m])
    return out


def _along(x: np.ndarray, rows: np.ndarray, at: np.ndarray) -> np.ndarray:
    """Each row read at its own place by a local cubic, shape (k,)."""
    h = x[1] - x[0]
    i = np.clip(np.floor((at - x[0]) / h).astype(int) - 1, 0, x.size - 4)
    u = (at - x[0]) / h - i
    k = np.arange(rows.shape[0])
    a, b, c, d = u, u - 1, u - 2, u - 3
    return (
        -b * c * d / 6 * rows[k, i]
        + a * c * d / 2 * rows[k, i + 1]
        - a * b * d / 2 * rows[k, i + 2]
        + a * b * c / 6 * rows[k, i + 3]
    )
