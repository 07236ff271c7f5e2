"""Two ways to the same blend, with one face: through distributions and through measured spectra.

A route gives the central response of any fractions, each ensemble member's response, and the error
that measured blends have found in the rule (as an offset of the logarithms, one draw a member).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from scipy.stats import norm

from mwdlink.chains.melt import Melt
from mwdlink.decisions.blend_sweeps import MeasuredBank
from mwdlink.decisions.ensemble import LEVEL, Draws, ExponentBelief, budget
from mwdlink.decisions.gpc_band import GpcBand
from mwdlink.decisions.properties import Curves, properties_of
from mwdlink.decisions.response import Bank, Response
from mwdlink.decisions.trust import RuleError
from mwdlink.quantity import Uncertain


class Route(Protocol):
    """What a route must offer."""

    name: str
    draws: Draws | None

    def central(self, fractions: np.ndarray) -> Response:
        """Blends of fractions (k, n_i)."""

    def member(self, i: int, fractions: np.ndarray) -> Response:
        """The same of ensemble member i."""


@dataclass(frozen=True, eq=False)
class ThroughDistributions:
    """Components' distributions, a kernel and the card."""

    bank: Bank
    kernel: str
    belief: ExponentBelief
    draws: Draws | None = None
    time_factor: float = 1.0
    gpc: GpcBand | None = None
    name: str = "distributions"

    def central(self, fractions: np.ndarray) -> Response:
        return self.bank.response(
            fractions, self.kernel, self.belief.centre, None, self.time_factor
        )

    def member(self, i: int, fractions: np.ndarray) -> Response:
        d = self.draws
        if d is None:
            return self.central(fractions)
        return self.bank.response(
            fractions,
            d.kernel[i],
            float(d.exponent[i]),
            float(d.plateau_levels[d.plateau[i]]),
            float(d.time_factor[i]) * self.time_factor,
            None if self.gpc is None else self.gpc.version(i),
        )


@dataclass(frozen=True, eq=False)
class ThroughSweeps:
    """Components' measured spectra: an exponent is all it needs."""

    bank: MeasuredBank
    belief: ExponentBelief
    draws: Draws | None = None
    name: str = "sweeps"

    def central(self, fractions: np.ndarray) -> Response:
        return self.bank.response(fractions, self.belief.centre)

    def member(self, i: int, fractions: np.ndarray) -> Response:
        d = self.draws
        exponent = self.belief.centre if d is None else float(d.exponent[i])
        return self.bank.response(fractions, exponent, i)


@dataclass(frozen=True, eq=False)
class RuleOffsets:
    """The rule's own error as found on measured blends: one standard normal draw a member."""

    error: RuleError
    draw: np.ndarray

    @classmethod
    def of(cls, error: RuleError, members: int, seed: int) -> RuleOffsets:
        rng = np.random.default_rng(np.random.SeedSequence([seed, 0x72]))
        # heavier than normal: a handful of blends tells the spread only roughly
        z = norm.ppf((rng.permutation(members) + 0.5) / members)
        return cls(error, 1.25 * z)

    def moduli(self, i: int, omega: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Offsets of ln G' and ln G'' at frequencies [rad/s]."""
        e = self.error
        return self.draw[i] * e.offset(omega, "storage"), self.draw[i] * e.offset(omega, "loss")

    def eta0(self, i: int) -> float:
        """Offset of ln eta0."""
        e = self.error
        sigma = e.eta0_scatter if e.eta0_scatter is not None else None
        if sigma is None and e.decades:
            return float(self.draw[i] * e.offset(e.decades[0].low, "loss")[0])
        return float(self.draw[i] * np.log(10.0) * (e.scatter if sigma is None else sigma))


def moved(curves: Curves, offsets: RuleOffsets | None, i: int) -> Curves:
    """Curves with a member's draw of the rule's error."""
    if offsets is None:
        return curves
    up, out = offsets.moduli(i, curves.omega)
    return Curves(
        curves.omega,
        curves.storage * np.exp(up),
        curves.loss * np.exp(out),
        curves.eta0 * np.exp(offsets.eta0(i)),
        curves.Je0,
    )


def bounded(curves: Curves) -> Curves:
    """Terminal values replaced by their lower bounds from the lowest frequency.

    For any positive spectrum |eta*| <= eta0 and G'/|G*|^2 <= Je0 (derived).
    """
    absolute = np.hypot(curves.storage[:, 0], curves.loss[:, 0])
    return Curves(
        curves.omega,
        curves.storage,
        curves.loss,
        absolute / curves.omega[0],
        curves.storage[:, 0] / absolute**2,
    )


def reached(curves: Curves, terminal: bool) -> Curves:
    """The curves, with bounds in place of terminal values that the sweeps do not reach."""
    return curves if terminal else bounded(curves)


@dataclass(frozen=True, eq=False)
class Map:
    """Every property against the fraction of the first component.

    Attributes
    ----------
    first : ndarray of shape (n,)
        Fraction of the first component [-].
    values, low, high : mapping of str to ndarray of shape (n,)
        By property; no low and high without members.
    samples : mapping of str to ndarray of shape (m, q)
        The members at fewer fractions `sample_first`.
    sample_first : ndarray of shape (q,)
    """

    first: np.ndarray
    values: Mapping[str, np.ndarray]
    low: Mapping[str, np.ndarray]
    high: Mapping[str, np.ndarray]
    samples: Mapping[str, np.ndarray]
    sample_first: np.ndarray


def along(first: np.ndarray, fractions: np.ndarray) -> np.ndarray:
    """Fractions (k, n) with the first component's as given and the others in proportion."""
    rest = np.array(fractions[1:], dtype=float)
    rest = rest / rest.sum() if rest.sum() > 0 else np.full(rest.size, 1.0 / max(rest.size, 1))
    p = np.atleast_1d(first)[:, None]
    return np.hstack([p, (1.0 - p) * rest])


def band_map(
    first: np.ndarray,
    values: Mapping[str, np.ndarray],
    sample_first: np.ndarray,
    samples: Mapping[str, np.ndarray],
) -> Map:
    """A map with the band of the members, interpolated between their fractions."""
    low, high = {}, {}
    for name, rows in samples.items():
        v = values.get(name)
        if v is None or not np.any(np.isfinite(v)):
            continue
        with np.errstate(invalid="ignore", divide="ignore"):
            centre = np.interp(sample_first, first, np.log(v))
            share = np.log(rows) - centre
        down, up = np.full(sample_first.size, np.nan), np.full(sample_first.size, np.nan)
        for j in range(sample_first.size):
            x = share[:, j][np.isfinite(share[:, j])]
            if x.size >= 0.5 * share.shape[0]:
                down[j], up[j] = np.quantile(x, [(1 - LEVEL) / 2, (1 + LEVEL) / 2])
        low[name] = v * np.exp(np.minimum(np.interp(first, sample_first, down), 0.0))
        high[name] = v * np.exp(np.maximum(np.interp(first, sample_first, up), 0.0))
    return Map(first, values, low, high, samples, sample_first)


_COLUMNS = {
    "eta0_Pa_s": ("eta0", "Pa s"),
    "Je0_per_Pa": ("Je0", "1/Pa"),
    "mean_time_s": ("mean time", "s"),
    "crossover_omega_rad_per_s": ("crossover omega", "rad/s"),
    "crossover_G_Pa": ("crossover G", "Pa"),
    "thinning_0.1_100": ("thinning 0.1 to 100 rad/s", "-"),
}


def column_of(name: str) -> tuple[str, str]:
    """Header and unit of a property in fractions.csv."""
    if name in _COLUMNS:
        return _COLUMNS[name]
    kind, _, at = name.partition("@")
    return {
        "MFR_g_per_10min": (f"MFR {at} kg", "g/10 min"),
        "viscosity_Pa_s": (f"viscosity {at} rad/s", "Pa s"),
        "tan_delta": (f"tan delta {at} rad/s", "-"),
    }[kind]


def map_columns(m: Map, names: list[str], fractions: np.ndarray) -> dict[str, np.ndarray]:
    """Columns of fractions.csv by header; properties known nowhere are left out."""
    rows = along(m.first, fractions)
    out = {f"fraction {name} [-]": rows[:, i] for i, name in enumerate(names)}
    # what people ask for first comes first
    order = sorted(m.values, key=lambda k: (k != "eta0_Pa_s", not k.startswith("MFR")))
    for key in order:
        v = m.values[key]
        if not np.any(np.isfinite(v)):
            continue
        name, unit = column_of(key)
        out[f"{name} [{unit}]"] = v
        if key in m.low:
            out[f"{name} low [{unit}]"] = m.low[key]
            out[f"{name} high [{unit}]"] = m.high[key]
    return out


def property_bands(
    samples: Curves,
    density: float | None,
    draws: Draws | None,
    values: Mapping[str, float | None],
    extra: Mapping[str, np.ndarray],
    frequencies: Any,
    status: Mapping[str, str],
) -> dict[str, Uncertain]:
    """Interval, budget and status of every property of an ensemble."""
    lost = 0.0 if draws is None else draws.lost
    out = {}
    for name, x in properties_of(samples, density, lost, frequencies=frequencies).items():
        centre = values.get(name)
        if centre is None:
            continue
        shares = budget(x, draws, extra) if draws is not None else {}
        out[name] = Uncertain.from_samples(
            x, centre, level=LEVEL, budget=shares, status=status.get(name, "resolved")
        )
    return out


def melt_constants(melt: Melt) -> dict[str, float]:
    """The constants classical mixing needs."""
    return {"law_exponent": melt.law_exponent}
