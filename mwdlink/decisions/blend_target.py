"""Which fraction reaches a target: the roots of a property along the line of fractions."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from mwdlink.decisions.ensemble import LEVEL
from mwdlink.errors import InputError
from mwdlink.quantity import Uncertain

PLAIN_TARGETS = (
    "eta0_Pa_s",
    "Je0_per_Pa",
    "mean_time_s",
    "crossover_omega_rad_per_s",
    "crossover_G_Pa",
)
TARGETS_AT = {"viscosity_Pa_s": "rad/s", "tan_delta": "rad/s", "MFR_g_per_10min": "kg"}

_WORDS = {
    "eta0_Pa_s": ("a zero-shear viscosity", "Pa s"),
    "Je0_per_Pa": ("a steady compliance", "1/Pa"),
    "mean_time_s": ("a mean relaxation time", "s"),
    "crossover_omega_rad_per_s": ("a crossover frequency", "rad/s"),
    "crossover_G_Pa": ("a crossover modulus", "Pa"),
    "viscosity_Pa_s": ("a viscosity at {}", "Pa s"),
    "tan_delta": ("a loss factor tan delta at {}", ""),
    "MFR_g_per_10min": ("a melt flow rate at {}", "g/10 min"),
}

_FORMS = (
    "viscosity_Pa_s@0.1=2e4, eta0_Pa_s=1e4, MFR_g_per_10min@2.16=1.5, tan_delta@0.1=3 or "
    "crossover_omega_rad_per_s=20, or with a range, eta0_Pa_s=1e4:2e4, eta0_Pa_s=:2e4, "
    "eta0_Pa_s=1e4:"
)


@dataclass(frozen=True)
class Target:
    """A wanted value of a property, or a range it must lie in.

    Attributes
    ----------
    name : str
        Property, such as `viscosity_Pa_s`.
    wanted : float or None
        > 0; None where a range is wanted.
    at : float or None
        Frequency [rad/s] or load [kg].
    low, high : float or None
        Ends of the range; None is open. Both None where one value is wanted.
    """

    name: str
    wanted: float | None
    at: float | None = None
    low: float | None = None
    high: float | None = None

    @property
    def key(self) -> str:
        """Its name among the properties: `viscosity_Pa_s@0.1`."""
        return self.name if self.at is None else f"{self.name}@{self.at:g}"

    def words(self) -> str:
        """What is wanted, for a sentence: "a viscosity at 0.1 rad/s of 1.5e+04 Pa s"."""
        noun, unit = _WORDS[self.name]
        if self.at is not None:
            noun = noun.format(f"{self.at:g} {TARGETS_AT[self.name]}")

        def amount(value: float | None) -> str:
            return f"{value:.4g} {unit}".rstrip()

        if self.wanted is not None:
            return f"{noun} of {amount(self.wanted)}"
        if self.low is None:
            return f"{noun} up to {amount(self.high)}"
        if self.high is None:
            return f"{noun} from {amount(self.low)} up"
        return f"{noun} from {self.low:.4g} to {amount(self.high)}"

    def holds(self, values: np.ndarray) -> np.ndarray:
        """Whether values lie in the range (NaN does not)."""
        low = 0.0 if self.low is None else self.low * (1 - 1e-12)
        high = np.inf if self.high is None else self.high * (1 + 1e-12)
        return (values >= low) & (values <= high)


def parse_target(text: Any) -> Target:
    """A target from `NAME=VALUE` or `NAME@AT=VALUE`; the value may be a range `LOW:HIGH`.

    Raises
    ------
    InputError
        Another form, an unknown property, a value that is not positive, a range upside down.
    """
    if isinstance(text, Target):
        return text
    if isinstance(text, tuple):
        text = "=".join(map(str, text))
    match = re.fullmatch(r"\s*([A-Za-z0-9_]+)\s*(?:@\s*([^=\s]+)\s*)?=\s*(\S+)\s*", str(text))
    if match is None:
        raise InputError(f"{text!r} is no target.", remedy=f"Targets read {_FORMS}.")
    name, at, value = match[1], match[2], match[3]
    if name not in PLAIN_TARGETS and name not in TARGETS_AT:
        raise InputError(f"there is no target {name!r}.", remedy=f"Targets read {_FORMS}.")
    if (at is None) != (name in PLAIN_TARGETS):
        where = f"needs its {TARGETS_AT[name]}" if at is None else "takes no @"
        raise InputError(f"the target {name} {where}.", remedy=f"Targets read {_FORMS}.")
    place = None if at is None else _positive(at)
    if ":" not in value:
        return Target(name, _positive(value), place)
    first, _, second = value.partition(":")
    low = _positive(first) if first else None
    high = _positive(second) if second else None
    if (low is None and high is None) or (low is not None and high is not None and low >= high):
        raise InputError(
            f"{value!r} in the target is no range that rises.", remedy=f"Targets read {_FORMS}."
        )
    return Target(name, None, place, low, high)


def _positive(part: str) -> float:
    try:
        x = float(part)
    except ValueError:
        x = -1.0
    if not (np.isfinite(x) and x > 0):
        raise InputError(
            f"{part!r} in the target is no positive number.", remedy=f"Targets read {_FORMS}."
        )
    return x


@dataclass(frozen=True)
class TargetFound:
    """Where a target is met.

    Attributes
    ----------
    target : Target
    component : str
        Whose fraction is given; the others keep their proportions.
    fractions : tuple of Uncertain
        Each fraction that meets it [-], rising; of a range the best one in each stretch that
        lies within, without an interval.
    shares : tuple of float
        Of the ensemble's members, how many meet the target near that fraction.
    reachable : (float, float) or None
        Range of the property over all fractions, central prediction.
    reason : str
        Why there is none or more than one, or what the interval holds.
    windows : tuple of (float, float)
        Of a range: each stretch of fractions [-] over which the central prediction lies in it.
    sure : tuple of (float, float) or None
        Of each stretch the part over which nine in ten members do.
    rest : mapping of str to float
        Shares of the other components in what is not `component`, sum 1.
    """

    target: Target
    component: str
    fractions: tuple[Uncertain, ...]
    shares: tuple[float, ...]
    reachable: tuple[float, float] | None
    reason: str
    windows: tuple[tuple[float, float], ...] = ()
    sure: tuple[tuple[float, float] | None, ...] = ()
    rest: Mapping[str, float] = field(default_factory=dict)

    def to_dict(self) -> dict[str, Any]:
        out: dict[str, Any] = {
            "quantity": self.target.key,
            "wanted": self.target.wanted,
            "component": self.component,
            "fractions": list(self.fractions),
            "members_that_meet_it": list(self.shares),
            "reachable": None if self.reachable is None else list(self.reachable),
            "reason": self.reason,
        }
        if len(self.rest) > 1:
            out["rest"] = dict(self.rest)
        if self.target.wanted is None:
            out["range"] = {"low": self.target.low, "high": self.target.high}
            out["windows"] = [
                {
                    "low": low,
                    "high": high,
                    "sure": None if sure is None else {"low": sure[0], "high": sure[1]},
                }
                for (low, high), sure in zip(self.windows, self.sure, strict=True)
            ]
        return out

    def words(self) -> str:
        """Where it is met, in a sentence."""
        if not self.fractions:
            return f"Wanted was {self.target.words()}: {self.reason}"
        parts = []
        for i, f in enumerate(self.fractions):
            span = ""
            if self.windows:
                low, high = self.windows[i]
                parts.append(f"{100 * low:.3g} to {100 * high:.3g} %")
                continue
            if f.low is not None and f.high is not None:
                span = f" ({100 * f.low:.3g} to {100 * f.high:.3g} %)"
            parts.append(f"{100 * (f.value or 0.0):.3g} %{span}")
        words = self.target.words()
        where = f"{' and '.join(parts)} of {self.component}"
        return f"{words[0].upper()}{words[1:]} is met at {where}."


def roots_along(phi: np.ndarray, values: np.ndarray, wanted: float) -> list[float]:
    """Fractions within 0 and 1 at which a property takes the wanted value.

    Parameters
    ----------
    phi : ndarray of shape (n,)
        Rising from 0 to 1.
    values : ndarray of shape (n,)
        > 0 or NaN.
    """
    good = np.isfinite(values) & (values > 0)
    x, y = phi[good], np.log(values[good]) - np.log(wanted)
    found: list[float] = []
    for i in range(x.size):
        # exactly there: counted once, also at the ends
        if abs(y[i]) < 1e-9:
            found.append(float(x[i]))
        elif i + 1 < x.size and abs(y[i + 1]) >= 1e-9 and y[i] * y[i + 1] < 0:
            found.append(float(x[i] + (x[i + 1] - x[i]) * y[i] / (y[i] - y[i + 1])))
    return found


def find_fractions(
    target: Target,
    component: str,
    phi: np.ndarray,
    values: np.ndarray,
    member_phi: np.ndarray,
    member_values: np.ndarray | None,
    others: Sequence[str] = (),
) -> TargetFound:
    """Fractions that meet a target, with intervals from the ensemble.

    Parameters
    ----------
    target : Target
        With a wanted value.
    component : str
    phi, values : ndarray of shape (n,)
        Central property against the fraction.
    member_phi : ndarray of shape (q,)
    member_values : ndarray of shape (m, q) or None
        The members' property at those fractions.
    others : sequence of str
        The remaining components, for words.
    """
    good = np.isfinite(values) & (values > 0)
    wanted = float(target.wanted or 0.0)
    if not np.any(good):
        reason = "it cannot be predicted at any fraction (out of reach of the curves)."
        return TargetFound(target, component, (), (), None, reason)
    low, high = float(values[good].min()), float(values[good].max())
    centres = roots_along(phi, values, wanted)
    if not centres:
        side = "above" if wanted > high else "below"
        rest = " and ".join(others) or "the rest"
        reason = (
            f"No fraction of {component} with {rest} meets it: between 0 and 1 the property runs "
            f"from {low:.4g} to {high:.4g}, and {wanted:.4g} lies {side}."
        )
        if wanted <= high and wanted >= low:  # a gap where the property is unknown
            reason = "No fraction meets it where the property can be predicted."
        if member_values is not None:
            count = sum(bool(roots_along(member_phi, v, wanted)) for v in member_values)
            share = count / len(member_values)
            if share > 0.02:
                reason += f" Within the prediction's band {100 * share:.0f} % of members reach it."
        return TargetFound(target, component, (), (), (low, high), reason)
    sets: list[list[float]] = [[] for _ in centres]
    if member_values is not None:
        for v in member_values:
            left = roots_along(member_phi, v, wanted)
            for k in np.argsort([min((abs(c - r) for r in left), default=9.0) for c in centres]):
                if not left:
                    break
                j = int(np.argmin([abs(centres[k] - r) for r in left]))
                sets[k].append(left.pop(j))
    met = [len(s) for s in sets]
    if member_values is not None and len(centres) == 1:
        # a member that cannot reach the target points beyond an end: the interval reaches it
        for v in member_values:
            if not roots_along(member_phi, v, wanted) and np.all(np.isfinite(v[[0, -1]])):
                nearer = np.argmin(np.abs(np.log(np.maximum(v[[0, -1]], 1e-300) / wanted)))
                sets[0].append(float(member_phi[[0, -1]][nearer]))
    out, shares = [], []
    for c, s, count in zip(centres, sets, met, strict=True):
        out.append(Uncertain.from_samples(s, c, level=LEVEL) if s else Uncertain(c, level=LEVEL))
        shares.append(count / len(member_values) if member_values is not None else 1.0)
    if len(centres) > 1:
        listed = ", ".join(f"{100 * c:.3g} %" for c in centres)
        reason = (
            f"{len(centres)} fractions meet it ({listed} of {component}): the property has an "
            "extremum between."
        )
    else:
        reason = f"One fraction of {component} meets it."
    weak = [s for s in shares if s < 0.95]
    if member_values is not None and weak:
        reason += (
            f" Only {100 * min(weak):.0f} % of the ensemble's members meet it at all; for the "
            "others it lies out of reach."
        )
    return TargetFound(target, component, tuple(out), tuple(shares), (low, high), reason)
