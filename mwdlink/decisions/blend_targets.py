"""Ranges as targets, and several targets at once: the fractions that meet them all."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from mwdlink.decisions.blend_target import Target, TargetFound, find_fractions, roots_along
from mwdlink.decisions.ensemble import LEVEL
from mwdlink.quantity import Uncertain

# without members a fraction has no interval: two that are this near each other are one
ALIKE = 0.005

Members = tuple[np.ndarray, Mapping[str, np.ndarray]]


@dataclass(frozen=True)
class AllMet:
    """Where several targets are met at once.

    Attributes
    ----------
    component : str
        Whose fraction is given; the others keep their proportions.
    fractions : tuple of Uncertain
        Middle and ends [-] of each stretch that all targets allow: the intervals of fractions that
        meet a value, the stretches within a range.
    shares : tuple of float or None
        Of the members, how many meet all targets at that fraction; None where a target is one
        value, which no member meets exactly.
    reason : str
    """

    component: str
    fractions: tuple[Uncertain, ...]
    shares: tuple[float | None, ...]
    reason: str

    def to_dict(self) -> dict[str, Any]:
        return {
            "component": self.component,
            "fractions": list(self.fractions),
            "members_that_meet_all": list(self.shares),
            "reason": self.reason,
        }


def find_all(
    targets: Sequence[Target],
    names: Sequence[str],
    fractions: np.ndarray,
    phi: np.ndarray,
    values: Mapping[str, np.ndarray],
    members: Members,
) -> tuple[tuple[TargetFound, ...], AllMet | None]:
    """Each target by itself and, of several, where all are met.

    Parameters
    ----------
    targets : sequence of Target
    names : sequence of str
        Components; the first one's fraction is sought.
    fractions : ndarray of shape (n,)
        Of the blend asked for: the others keep its proportions [-].
    phi : ndarray of shape (k,)
        Fractions of the first component, rising from 0 to 1.
    values : mapping of str to ndarray of shape (k,)
        Central properties.
    members : (ndarray of shape (q,), mapping of str to ndarray of shape (m, q))
        Fractions and the members' properties there.
    """
    rest = np.asarray(fractions[1:], dtype=float)
    rest = rest / rest.sum() if rest.sum() > 0 else np.full(rest.size, 1.0 / rest.size)
    shares = {n: float(x) for n, x in zip(names[1:], rest, strict=True)}
    nothing = np.full(phi.size, np.nan)
    found = []
    for t in targets:
        v = values.get(t.key, nothing)
        drawn = members[1].get(t.key)
        if t.wanted is not None:
            one = find_fractions(t, names[0], phi, v, members[0], drawn, list(names[1:]))
        else:
            one = find_range(t, names[0], phi, v, members[0], drawn)
        text = one.reason
        if rest.size > 1 and one.fractions:
            text += f" The rest is {_rest_words(shares)}, as asked for."
        found.append(replace(one, rest=shares, reason=text))
    if len(found) < 2:
        return tuple(found), None
    return tuple(found), _together(found, phi, members)


def bound_said(found: TargetFound) -> TargetFound:
    """The same, saying that the property is only a lower bound."""
    text = (
        " The components' sweeps do not reach terminal flow: the property is a lower bound, and "
        "the fraction belongs to the bound."
    )
    return replace(found, reason=found.reason + text)


def _rest_words(shares: Mapping[str, float]) -> str:
    return " and ".join(f"{100 * x:.3g} % {n}" for n, x in shares.items())


def within(target: Target, phi: np.ndarray, values: np.ndarray) -> list[tuple[float, float]]:
    """Stretches of fractions over which a property lies in the range wanted."""
    good = np.isfinite(values) & (values > 0)
    if good.sum() < 2:
        return []
    ends = [r for end in (target.low, target.high) if end for r in roots_along(phi, values, end)]
    cuts = np.unique(np.concatenate([phi[good][[0, -1]], ends]))
    middle = 0.5 * (cuts[1:] + cuts[:-1])
    with np.errstate(divide="ignore", invalid="ignore"):
        told = np.exp(np.interp(middle, phi, np.log(values)))
    out: list[tuple[float, float]] = []
    for low, high, ok in zip(cuts[:-1], cuts[1:], target.holds(told), strict=True):
        if not ok:
            continue
        if out and abs(out[-1][1] - low) < 1e-12:
            out[-1] = (out[-1][0], float(high))
        else:
            out.append((float(low), float(high)))
    return out


def find_range(
    target: Target,
    component: str,
    phi: np.ndarray,
    values: np.ndarray,
    member_phi: np.ndarray,
    member_values: np.ndarray | None,
) -> TargetFound:
    """Fractions over which a property lies in the range wanted; see `find_fractions`."""
    good = np.isfinite(values) & (values > 0)
    if not np.any(good):
        reason = "it cannot be predicted at any fraction (out of reach of the curves)."
        return TargetFound(target, component, (), (), None, reason)
    reach = (float(values[good].min()), float(values[good].max()))
    windows = within(target, phi, values)
    share = met_by(target, phi, member_phi, member_values)
    if not windows:
        reason = (
            f"No fraction of {component} meets it: between 0 and 1 the property runs from "
            f"{reach[0]:.4g} to {reach[1]:.4g}."
        )
        if share is not None and share.max() > 0.02:
            reason += f" Within the band up to {100 * share.max():.0f} % of members meet it."
        return TargetFound(target, component, (), (), reach, reason)
    best: list[Uncertain] = []
    shares: list[float] = []
    sure: list[tuple[float, float] | None] = []
    for low, high in windows:
        inside = (phi >= low) & (phi <= high)
        if share is None or not np.any(inside):
            best.append(Uncertain(0.5 * (low + high), level=LEVEL))
            shares.append(1.0 if share is None else float(np.interp(best[-1].value, phi, share)))  # type: ignore[arg-type]
            sure.append(None)
            continue
        top = share[inside].max()
        # among equals the middle
        at = phi[inside][share[inside] >= top - 1e-9]
        best.append(Uncertain(float(at[at.size // 2]), level=LEVEL))
        shares.append(float(top))
        enough = phi[inside][share[inside] >= LEVEL]
        sure.append((float(enough[0]), float(enough[-1])) if enough.size else None)
    text = "One stretch" if len(windows) == 1 else f"{len(windows)} stretches"
    reason = (
        f"{text} of fractions of {component} meets it."
        if len(windows) == 1
        else (f"{text} of fractions of {component} meet it: the property has an extremum between.")
    )
    if share is not None:
        certain = [s for s in sure if s is not None]
        if certain:
            listed = " and ".join(f"{100 * a:.3g} to {100 * b:.3g} %" for a, b in certain)
            reason += f" At {listed} nine in ten members of the ensemble do."
        else:
            reason += (
                f" At no fraction do nine in ten members of the ensemble; at most "
                f"{100 * max(shares):.0f} %."
            )
    return TargetFound(
        target, component, tuple(best), tuple(shares), reach, reason, tuple(windows), tuple(sure)
    )


def _held(
    target: Target, phi: np.ndarray, member_phi: np.ndarray, member_values: np.ndarray
) -> np.ndarray:
    """Whether each member lies in the range at each fraction, shape (m, k)."""
    with np.errstate(divide="ignore", invalid="ignore"):
        logs = np.log(member_values)
    rows = np.stack([np.interp(phi, member_phi, row) for row in logs])
    return target.holds(np.exp(rows))


def met_by(
    target: Target, phi: np.ndarray, member_phi: np.ndarray, member_values: np.ndarray | None
) -> np.ndarray | None:
    """Share of the members that lie in the range at each fraction, shape (k,)."""
    if member_values is None:
        return None
    return _held(target, phi, member_phi, member_values).mean(axis=0)


def _together(found: Sequence[TargetFound], phi: np.ndarray, members: Members) -> AllMet:
    component = found[0].component
    alone = [f.target.words() for f in found if not f.fractions]
    if alone:
        reason = f"None meets all: {' and '.join(alone)} is met by no fraction."
        return AllMet(component, (), (), reason)
    stretches = _spans(found[0])
    for f in found[1:]:
        both = [(max(a[0], b[0]), min(a[1], b[1])) for a in stretches for b in _spans(f)]
        stretches = [(low, high) for low, high in both if low <= high]
    if not stretches:
        each = [f.words().rstrip(".") for f in found]
        own = "; ".join(words[:1].lower() + words[1:] for words in each)
        return AllMet(component, (), (), f"None meets all: {own}.")
    ranged = all(f.target.wanted is None for f in found)
    drawn = [members[1].get(f.target.key) for f in found]
    share = None
    if ranged and all(d is not None for d in drawn):
        held = [
            _held(f.target, phi, members[0], d)
            for f, d in zip(found, drawn, strict=True)
            if d is not None
        ]
        share = np.all(held, axis=0).mean(axis=0)
    out, shares = [], []
    for low, high in sorted(stretches):
        middle = 0.5 * (low + high)
        out.append(Uncertain(middle, low, high, level=LEVEL))
        shares.append(None if share is None else float(np.interp(middle, phi, share)))
    listed = " and ".join(f"{100 * u.low:.3g} to {100 * u.high:.3g} %" for u in out)  # type: ignore[operator]
    which = "Both" if len(found) == 2 else f"All {len(found)}"
    reason = f"{which} targets are met at {listed} of {component}."
    if not ranged:
        reason += (
            " That is where the 90 % intervals of the fractions overlap: at one fraction all "
            "values together are met only within the prediction's band."
        )
    elif share is not None:
        reason += f" There {100 * max(x or 0.0 for x in shares):.0f} % of members meet all."
    return AllMet(component, tuple(out), tuple(shares), reason)


def _spans(f: TargetFound) -> list[tuple[float, float]]:
    """Fractions that a target allows."""
    if f.windows:
        return list(f.windows)
    out = []
    for u in f.fractions:
        value = float(u.value or 0.0)
        if u.low is None or u.high is None:
            out.append((value - ALIKE / 2, value + ALIKE / 2))
        else:
            out.append((float(u.low), float(u.high)))
    return out
