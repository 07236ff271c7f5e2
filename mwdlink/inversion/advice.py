"""Which measurement would bring a quantity to a wanted precision.

The fit is taken for the truth. For a measurement that could be added (lower frequencies, the same
sweep at a higher temperature, less noise) the Fisher information of the data then at hand, plus
the prior's, gives the interval of the quantity (delta method); the most modest measurement that
would do is then checked by a small ensemble of perturbed refits to data simulated for it, because
where weights are small the delta method is too hopeful.

A precision is half the width of the 90 % interval over the value. It counts noise and smoothing.
An average of which chains too long to be sized may make more than 2 % is a bound and has none.
What no sweep can improve, the scatter of the card's viscosity law, is said beside it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from mwdlink.chains.melt import Melt
from mwdlink.chains.polymer import Polymer
from mwdlink.errors import InputError, ModelError
from mwdlink.inversion.laboratory import HALF_WIDTH, Laboratory
from mwdlink.inversion.objective import Problem
from mwdlink.inversion.solve import Fit
from mwdlink.relaxation.mixing import Model

# a measurement is advised when it would do with this much to spare
TO_SPARE, SHARE_TO_SPARE = 0.85, 0.3
DECADES = (0.5, 1.0, 1.5, 2.0, 2.5, 3.0)
# noise as a part of the present one; a rheometer's own limit
NOISE_PARTS = (0.7, 0.5, 0.35, 0.25)
LEAST_NOISE = 0.003
# the longest cycle that is proposed without a word, and the longest that is proposed at all [s]
LONG_TEST, LONGEST_TEST = 3600.0, 1e5
QUANTITIES = ("Mw", "Mz", "Mw_within_window", "above:M")


@dataclass(frozen=True)
class Option:
    """One measurement that could be made.

    Attributes
    ----------
    kind : str
        `frequency`, `temperature`, `noise` or `frequency and noise`.
    text : str
        What to do, in words.
    omega : ndarray of shape (k,)
        All reduced frequencies then at hand [rad/s], the present ones included.
    sigma : ndarray of shape (2 k,)
        Their relative noise, G' over G''.
    expected : float
        Precision by Fisher information [-].
    checked : float or None
        Precision of the small ensemble [-], where it was run.
    feasible : bool
        False where one cycle would last more than a day and no temperature of the shift law helps.
    """

    kind: str
    text: str
    omega: np.ndarray
    sigma: np.ndarray
    expected: float
    checked: float | None = None
    feasible: bool = True

    @property
    def precision(self) -> float:
        """The checked precision where there is one, else the expected [-]."""
        return self.expected if self.checked is None else self.checked


@dataclass(frozen=True)
class Advice:
    """What would bring one quantity to its wanted precision.

    Attributes
    ----------
    quantity : str
    wanted : float
        Half the 90 % interval over the value [-].
    present : float
        The same of the present data [-], noise and smoothing only.
    options : tuple of Option
        Every measurement looked at.
    best : Option or None
        The most modest one that does it; None when none does, or none is needed.
    card_floor : float
        The same from the scatter of the card's viscosity law alone [-].
    text : str
    """

    quantity: str
    wanted: float
    present: float
    options: tuple[Option, ...]
    best: Option | None
    card_floor: float
    text: str


def advise(
    problem: Problem,
    fit: Fit,
    melt: Melt,
    model: Model,
    omega: np.ndarray,
    sigma: np.ndarray,
    want: Mapping[str, float],
    polymer: Polymer | None = None,
) -> list[str]:
    """One paragraph for each quantity wanted; see `make_advice`."""
    return [a.text for a in make_advice(problem, fit, melt, model, omega, sigma, want, polymer)]


def make_advice(
    problem: Problem,
    fit: Fit,
    melt: Melt,
    model: Model,
    omega: np.ndarray,
    sigma: np.ndarray,
    want: Mapping[str, float],
    polymer: Polymer | None = None,
) -> tuple[Advice, ...]:
    """Which measurement brings each quantity to its wanted precision.

    Parameters
    ----------
    problem : Problem
        Of a sweep.
    fit : Fit
    melt : Melt
    model : Model
    omega : ndarray of shape (n,)
        Frequencies measured [rad/s].
    sigma : ndarray of shape (2 n,)
        Relative noise of G' over G''.
    want : mapping of str to float
        `Mw`, `Mz`, `Mw_within_window` or `above:M` (M in g/mol) to half the 90 % interval over
        the value.
    polymer : Polymer, optional
        Its shift law translates frequency into temperature.

    Raises
    ------
    InputError
        If a quantity or precision cannot be understood.
    """
    check_wanted(want)
    lab = Laboratory(problem, fit, melt, model, np.asarray(omega, float), np.asarray(sigma, float))
    return tuple(_advise_one(lab, name, float(p), polymer) for name, p in want.items())


def check_wanted(want: Mapping[str, float]) -> None:
    """Refuse wishes that cannot be understood, before any computation.

    Raises
    ------
    InputError
    """
    for name, precision in want.items():
        _understand(name, precision)


def _understand(name: str, precision: float) -> None:
    if not (np.isfinite(precision) and precision > 0):
        raise InputError(
            f"a precision of {precision!r} for {name} makes no sense.",
            remedy="Give a fraction: 0.1 for +-10 %.",
        )
    if name in QUANTITIES[:3]:
        return
    if name.startswith("above:"):
        try:
            if float(name[6:]) > 0:
                return
        except ValueError:
            pass
    raise InputError(
        f"no advice can be given for {name!r}.",
        remedy="Ask for Mw, Mz, Mw_within_window or above:M with M in g/mol, as in above:1e6.",
    )


# -- the measurements looked at ------------------------------------------------------------------
def _lower(lab: Laboratory, decades: float) -> tuple[np.ndarray, np.ndarray]:
    """The present sweep continued to lower frequencies at its own density and noise."""
    count = max(int(round(decades * lab.per_decade)), 1)
    bottom = float(lab.omega.min())
    more = bottom * 10.0 ** (-decades * np.arange(count, 0, -1) / count)
    return _merge(lab, more)


def _merge(lab: Laboratory, more: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    n = lab.omega.size
    omega = np.concatenate([lab.omega, more])
    up = np.concatenate([lab.sigma[:n], np.full(more.size, lab.noise)])
    out = np.concatenate([lab.sigma[n:], np.full(more.size, lab.noise)])
    order = np.argsort(omega)
    return omega[order], np.concatenate([up[order], out[order]])


def _frequency_text(lab: Laboratory, decades: float, polymer: Polymer | None) -> str:
    lowest = float(lab.omega.min()) / 10**decades
    word = "decade" if decades == 1.0 else "decades"
    text = f"measure {decades:g} {word} lower, down to {lowest:.2g} rad/s"
    period = 2 * np.pi / lowest
    if period > LONG_TEST:
        text += (
            f" (one cycle lasts {period / 3600:.2g} h: creep with recovery, and a check that the "
            "melt does not degrade meanwhile)"
        )
    elif period > 60:
        text += f" (one cycle lasts {period / 60:.2g} min)"
    warmer = _temperature_for(lab, decades, polymer)
    if warmer is not None:
        text += f", or repeat the sweep at {warmer:.0f} C (the same by the card's shift law)"
    return text


def _feasible(lab: Laboratory, decades: float, polymer: Polymer | None) -> bool:
    period = 2 * np.pi * 10**decades / float(lab.omega.min())
    return period <= LONGEST_TEST or _temperature_for(lab, decades, polymer) is not None


def _temperature_for(
    lab: Laboratory, decades: float, polymer: Polymer | None
) -> float | None:
    """Temperature within the card's reach at which the same sweep reaches as far down [C]."""
    law = None if polymer is None else polymer.shift
    if law is None:
        return None
    now = float(lab.melt.temperature_C)
    for T in np.arange(np.ceil(now) + 1.0, law.reach_C[1] + 1e-9, 1.0):
        if _gain(law, float(T), now) >= decades:
            return float(T)
    return None


def _gain(law: object, T: float, now: float) -> float:
    """Decades of frequency a higher temperature is worth."""
    try:
        return -float(np.log10(law.factor(T, now)))  # type: ignore[attr-defined]
    except (InputError, ModelError, ValueError):
        return -np.inf


def _options(lab: Laboratory, name: str, polymer: Polymer | None) -> list[Option]:
    out = []
    for d in DECADES:
        omega, sigma = _lower(lab, d)
        text = _frequency_text(lab, d, polymer)
        found, feasible = lab.expected(omega, sigma, name), _feasible(lab, d, polymer)
        out.append(Option("frequency", text, omega, sigma, found, feasible=feasible))
    law = None if polymer is None else polymer.shift
    if law is not None and law.reach_C[1] > lab.melt.temperature_C + 5.0:
        T = float(law.reach_C[1])
        gain = _gain(law, T, lab.melt.temperature_C)
        if gain > 0.05:
            omega, sigma = _merge(lab, lab.omega * 10**-gain)
            text = (
                f"repeat the sweep at {T:g} C, the highest the card's shift law covers, worth "
                f"{gain:.2g} decades, and use both"
            )
            found = lab.expected(omega, sigma, name)
            out.append(Option("temperature", text, omega, sigma, found))
    for part in NOISE_PARTS:
        sigma = np.maximum(part * lab.sigma, LEAST_NOISE)
        text = (
            f"bring the noise from {100 * lab.noise:.2g} to {100 * float(np.median(sigma)):.2g} % "
            f"(the mean of {int(np.ceil(part**-2))} sweeps, if their errors are independent)"
        )
        found = lab.expected(lab.omega, sigma, name)
        out.append(Option("noise", text, lab.omega, sigma, found))
    for d in (1.0, 2.0, 3.0):
        omega, sigma = _lower(lab, d)
        sigma = np.maximum(0.35 * sigma, LEAST_NOISE)
        text = (
            _frequency_text(lab, d, polymer)
            + f", and bring the noise to {100 * float(np.median(sigma)):.2g} %"
        )
        found, feasible = lab.expected(omega, sigma, name), _feasible(lab, d, polymer)
        out.append(Option("frequency and noise", text, omega, sigma, found, feasible=feasible))
    return out


def _advise_one(
    lab: Laboratory, name: str, wanted: float, polymer: Polymer | None
) -> Advice:
    options = _options(lab, name, polymer)
    present = max(
        lab.expected(lab.omega, lab.sigma, name), lab.checked(lab.omega, lab.sigma, name)
    )
    floor = HALF_WIDTH * np.log(10.0) * lab.melt.scatter_decades / lab.melt.law_exponent
    head = f"{_words(name)} is now known to {_percent(present)} (noise and smoothing)"
    if not np.isfinite(present):
        head = f"{_words(name)} is now only bounded: chains too long to be sized weigh in"
    if present <= wanted:
        text = f"{head}, within the {100 * wanted:.2g} % wanted: no further measurement is needed"
        text += _card(floor, wanted)
        return Advice(name, wanted, present, tuple(options), None, floor, text)
    kept: dict[str, Option] = {}
    for k, option in enumerate(options):
        # the most modest of each kind, checked by an ensemble
        if not option.feasible or option.kind in kept or option.expected > TO_SPARE * wanted:
            continue
        if option.kind == "frequency and noise" and kept:
            continue
        worst = max(option.expected, lab.checked(option.omega, option.sigma, name, SHARE_TO_SPARE))
        options[k] = option = replace(option, checked=worst)
        if worst <= TO_SPARE * wanted:
            kept[option.kind] = option
    best = min(kept.values(), key=_effort, default=None)
    if best is None:
        closest = min((o for o in options if o.feasible), key=lambda o: o.precision)
        text = (
            f"{head}; nothing looked at here brings it to {100 * wanted:.2g} %. The most would be "
            f"to {closest.text}: {_percent(closest.precision)}"
        )
        if not np.isfinite(closest.precision):
            text = (
                f"{head}, and would after every measurement looked at that takes less than a day a "
                "cycle (up to three decades lower in frequency, less noise). Mw_within_window or "
                "the weight above a molar mass inside the window can be had instead"
            )
    else:
        text = f"{head}; to bring it to {100 * wanted:.2g} %, {best.text}: "
        text += f"{_percent(best.precision)} expected"
        others = [o for o in kept.values() if o is not best]
        if others:
            text += ". Instead one could " + "; or ".join(
                f"{o.text} ({_percent(o.precision)})" for o in others
            )
    return Advice(name, wanted, present, tuple(options), best, floor, text + _card(floor, wanted))


def _effort(option: Option) -> float:
    """Rough order of effort: a warmer sweep, lower frequency, repetition; long tests cost more."""
    order = {"temperature": 0.5, "frequency": 1.0, "noise": 2.0, "frequency and noise": 3.0}
    lowest = float(option.omega.min())
    return order[option.kind] + 0.5 * max(np.log10(2 * np.pi / lowest / 600.0), 0.0)


def _card(floor: float, wanted: float) -> str:
    if floor < 0.3 * wanted:
        return "."
    text = (
        f". Besides, the scatter of the card's viscosity law alone leaves every molar mass "
        f"uncertain by {_percent(floor)}"
    )
    if floor > wanted:
        text += (
            ", more than is wanted: no sweep can mend that, a sample of known distribution can "
            "(calibrate)"
        )
    return text + "."


def _words(name: str) -> str:
    if name.startswith("above:"):
        return f"The weight above {float(name[6:]):.3g} g/mol"
    return {"Mw": "Mw", "Mz": "Mz", "Mw_within_window": "Mw within the window"}[name]


def _percent(x: float) -> str:
    if not np.isfinite(x):
        return "a bound only"
    return f"+-{100 * x:.2g} %" if x < 1.0 else "a factor of two or worse"
