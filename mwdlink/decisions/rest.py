"""How long to wait after loading until the melt has forgotten it.

Two ways a melt is strained while it is loaded: a step (a plate moved and stopped), after which the
stress falls as G(t); and steady squeezing, after which it falls as eta-(t). The second is slower,
because steady flow loads the slow modes. Both come from a chain model of a known distribution, or
from the spectrum of a sweep, as far as its window reaches.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import need_polymer
from mwdlink.decisions.ensemble import central_kernel, draw, exponent_belief, kernels_to_use
from mwdlink.decisions.gpc_scale import as_own
from mwdlink.decisions.rest_result import FLOW, LEVEL, RE_ENTANGLEMENT, STEP, Rest, Wait
from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.measurement.spectrum_fit import SpectrumFit, fit_spectrum
from mwdlink.measurement.sweep import Sweep
from mwdlink.quantity import Uncertain, readonly
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.spectrum import Spectrum

RESIDUALS = (0.1, 0.01, 0.001)
# Mean relaxation times of melts in practice (common practice): a sanity line, not a limit.
USUAL_TIMES = (1e-3, 1e3)
# Exponents tried per kernel: the middles of as many equal shares of what is held of it.
NODES = 5


def rest_time(
    source: Any,
    polymer: Any = None,
    *,
    residuals: Sequence[float] = RESIDUALS,
    kernels: Sequence[str] | None = None,
    exponent: Any = None,
    rouse: bool = True,
    temperature_C: float | None = None,
    members: int = 200,
    seed: int = 0,
    noise: float | None = None,
    level: float = LEVEL,
) -> Rest:
    """How long to wait after loading, from a distribution or from a measurement.

    Parameters
    ----------
    source : Distribution, Sweep, SpectrumFit, Spectrum, Relaxation or a sequence of the last two
        A sequence is an ensemble: the first is the central curve, all make the band.
    polymer : Polymer, optional
        Needed with a distribution; with a sweep only for another temperature than its own.
    residuals : sequence of float
        Shares of the stress, 0 < r < 1.
    kernels, exponent, rouse
        Chain model for a distribution: kernel names (None: all the card allows), mixing exponent (a
        number, a (low, high) pair or None for the card's or the prior 2.0 +- 0.2).
    temperature_C : float, optional
        Default the card's own, or the sweep's.
    members : int
        Ensemble members; 0 gives no intervals.
    seed : int
    noise : float, optional
        Relative noise of a sweep [-].
    level : float

    Returns
    -------
    Rest

    Raises
    ------
    InputError
        A residual outside 0 to 1, a distribution without polymer, an unknown kind of source.
    ModelError
        A temperature the card cannot be taken to.

    References
    ----------
    .. [1] Roy & Roland 2013 (published): re-entanglement takes longer than relaxation.
    """
    residuals = tuple(float(r) for r in residuals)
    if not residuals or any(not 0 < r < 1 for r in residuals):
        raise InputError(
            f"residual stresses must lie between 0 and 1, not {residuals}.",
            remedy="Give shares: 0.01 for 1 %.",
        )
    full: float | None = None
    reaches = None
    terminal = True
    warnings: tuple[Caution, ...] = ()
    if isinstance(source, Distribution):
        if polymer is None:
            raise InputError(
                "a distribution says nothing of time without the polymer it is of.",
                remedy="Name a polymer or give a card.",
            )
        need_polymer(polymer)
        source = as_own(source, polymer)
        melt = polymer.melt(temperature_C)
        spectra, warnings = _of_distribution(source, melt, kernels, exponent, rouse, members, seed)
        warnings = merge_cautions(source.warnings, warnings)
        full, temperature_C = melt.plateau_modulus, melt.temperature_C
        words = f"a share of the plateau modulus ({full:.3g} Pa)"
    elif isinstance(source, (Sweep, SpectrumFit)):
        fit = (
            source
            if isinstance(source, SpectrumFit)
            else fit_spectrum(source, noise=noise, members=members, seed=seed)
        )
        spectra = [fit.continuous_spectrum()]
        spectra += [fit.continuous_spectrum(H) for H in fit.continuous.members]
        reaches = 1.0 / float(fit.sweep.omega[0])
        terminal = fit.terminal_reached
        warnings = tuple(w for w in fit.warnings if w.code != "terminal_not_reached")
        if temperature_C is not None and fit.sweep.temperature_C is not None:
            factor, notes = _carried(polymer, fit.sweep.temperature_C, temperature_C)
            spectra = [s.scaled(factor) for s in spectra]
            reaches *= factor
            warnings = merge_cautions(warnings, notes)
        else:
            temperature_C = fit.sweep.temperature_C
        top = float(fit.sweep.complex_modulus.max())
        words = (
            "a share of G(0) of the sweep's own spectrum, which its highest frequency limits "
            f"(|G*| up to {top:.3g} Pa there): of the plateau modulus it would be less"
        )
    else:
        spectra, full, temperature, words = _of_members(source)
        temperature_C = temperature_C if temperature is None else temperature
    return _decays(
        spectra, full, residuals, words, reaches, terminal, temperature_C, level, warnings
    )


def _carried(polymer: Any, have_C: float, want_C: float) -> tuple[float, tuple[Caution, ...]]:
    """Factor on the times from the sweep's temperature to the one asked for, by the card."""
    if abs(have_C - want_C) < 1e-9:
        return 1.0, ()
    law = None if polymer is None else polymer.shift
    if law is None:
        raise InputError(
            f"the sweep is at {have_C:g} C and the answer is wanted at {want_C:g} C.",
            remedy="Name a polymer whose card has a shift law, or ask at the sweep's temperature.",
        )
    notes = (*law.check(have_C, polymer.name), *law.check(want_C, polymer.name))
    factor = float(law.factor(want_C, have_C))
    text = (
        f"Times were carried from {have_C:g} to {want_C:g} C by the shift law of {polymer.name} "
        f"(factor {factor:.3g})."
    )
    return factor, (*notes, Caution("temperature_shifted", text))


def _of_members(source: Any) -> tuple[list[Spectrum], float | None, float | None, str]:
    items = list(source) if isinstance(source, (list, tuple)) else [source]
    spectra, full, temperature = [], None, None
    for item in items:
        if isinstance(item, Spectrum):
            spectra.append(item)
        elif hasattr(item, "spectrum") and hasattr(item, "melt"):
            spectra.append(item.spectrum())
            full = float(item.melt.plateau_modulus) if full is None else full
            temperature = float(item.melt.temperature_C)
        else:
            raise InputError(
                f"no waiting time can be had from a {type(item).__name__}.",
                remedy="Give a distribution with its polymer, a sweep or a spectrum.",
            )
    if not spectra:
        raise InputError("there is nothing to take a waiting time from.")
    words = (
        "a share of G(0), the sum of all modes"
        if full is None
        else f"a share of the plateau modulus ({full:.3g} Pa)"
    )
    return spectra, full, temperature, words


def _of_distribution(
    distribution: Distribution,
    melt: Any,
    kernels: Sequence[str] | None,
    exponent: Any,
    rouse: bool,
    members: int,
    seed: int,
) -> tuple[list[Spectrum], tuple[Caution, ...]]:
    """Central spectrum and an ensemble over kernels, exponent and the viscosity law's scatter.

    Every time of the melt goes with the law's factor, so a few spectra, scaled, are enough.
    """
    names = kernels_to_use(melt, kernels)
    belief = exponent_belief(melt, exponent)
    first = central_kernel(names)
    central = Relaxation(distribution, melt, Model(first, belief.centre, rouse))
    base = central.spectrum()
    if members == 0:
        return [base], tuple(central.warnings)
    draws = draw(melt, names, belief, members, seed)
    # a few exponents serve all members: a spectrum costs a tenth of a second, scaling it nothing
    nodes = belief.at((np.arange(NODES) + 0.5) / NODES)
    nodes = np.array([belief.centre]) if belief.fixed else nodes
    nearest = np.argmin(np.abs(draws.exponent[:, None] - nodes), axis=1)
    made: dict[tuple[str, int], Spectrum] = {}
    spectra = [base]
    for i in range(members):
        key = (draws.kernel[i], int(nearest[i]))
        if key not in made:
            model = Model(key[0], float(nodes[key[1]]), rouse)
            made[key] = Relaxation(distribution, melt, model).spectrum()
        # the viscosity law stays what the plateau modulus is: times go with its inverse
        share = float(draws.plateau_levels[draws.plateau[i]]) / melt.plateau_modulus
        spectra.append(made[key].scaled(float(draws.time_factor[i]) / share))
    return spectra, tuple(central.warnings)


def _decays(
    spectra: list[Spectrum],
    full: float | None,
    residuals: tuple[float, ...],
    words: str,
    reaches: float | None,
    terminal: bool,
    temperature_C: float | None,
    level: float,
    warnings: tuple[Caution, ...],
) -> Rest:
    central = spectra[0]
    slowest = max(
        float(s.tau[s.strength * s.tau > 1e-9 * s.zero_shear_viscosity][-1]) for s in spectra
    )
    fastest = float(central.tau[0])
    t = np.geomspace(fastest / 10, slowest * max(10.0, 3 * np.log(1 / min(residuals))), 600)
    decay = np.exp(-np.multiply.outer(t, 1.0 / central.tau))
    same = all(s.tau is central.tau or np.array_equal(s.tau, central.tau) for s in spectra[1:])
    steps, flows = [], []
    for s in spectra:
        e = decay if same else np.exp(-np.multiply.outer(t, 1.0 / s.tau))
        steps.append(e @ s.strength / (s.strength.sum() if full is None else full))
        flows.append(e @ (s.strength * s.tau) / s.zero_shear_viscosity)
    curves = {STEP: np.array(steps), FLOW: np.array(flows)}
    bands = {k: _band(c, level) for k, c in curves.items()}
    waits = []
    for after in (STEP, FLOW):
        for r in residuals:
            times = np.array([_crossing(t, c, r) for c in curves[after]])
            waits.append(Wait(r, after, _quantity(times, reaches, terminal, level)))
    mean = Uncertain.from_samples(
        [s.mean_time for s in spectra[1:]] or [central.mean_time], central.mean_time, level=level
    )
    if reaches is not None and not terminal:
        mean = Uncertain(mean.value, mean.low, mean.high, level, "lower_bound")
    if len(spectra) == 1:
        mean = Uncertain(central.mean_time, None, None, level, mean.status)
    notes = [RE_ENTANGLEMENT]
    if not USUAL_TIMES[0] <= central.mean_time <= USUAL_TIMES[1]:
        text = (
            f"The mean relaxation time of {central.mean_time:.3g} s lies outside the 1e-3 to 1e3 s "
            "usual for melts in practice: check temperature, units and molar mass."
        )
        notes.append(Caution("relaxation_time_unusual", text))
    if any(w.time.status == "lower_bound" for w in waits):
        text = (
            f"The window speaks for times up to about {reaches:.3g} s only: waiting times beyond "
            "are lower bounds."
        )
        notes.append(Caution("window_too_short", text))
    return Rest(
        tuple(waits),
        readonly(t),
        readonly(curves[STEP][0]),
        readonly(curves[FLOW][0]),
        readonly(bands[STEP]),
        readonly(bands[FLOW]),
        words,
        reaches,
        mean,
        temperature_C,
        level,
        merge_cautions(warnings, notes),
    )


def _band(curves: np.ndarray, level: float) -> np.ndarray:
    if curves.shape[0] == 1:
        return np.vstack([curves[0], curves[0]])
    low, high = np.quantile(curves[1:], [(1 - level) / 2, (1 + level) / 2], axis=0)
    return np.vstack([np.minimum(low, curves[0]), np.maximum(high, curves[0])])


def _crossing(t: np.ndarray, curve: np.ndarray, r: float) -> float:
    """First time at which a falling curve is below r, interpolated in log-log."""
    below = np.flatnonzero(curve < r)
    if below.size == 0:
        return float(t[-1])
    i = int(below[0])
    if i == 0:
        return float(t[0])
    a, b = np.log(curve[i - 1]), np.log(max(curve[i], 1e-300))
    share = (np.log(r) - a) / (b - a)
    return float(np.exp(np.log(t[i - 1]) + share * np.log(t[i] / t[i - 1])))


def _quantity(times: np.ndarray, reaches: float | None, terminal: bool, level: float) -> Uncertain:
    """A waiting time; where the window does not reach that far only that it is not shorter."""
    value, samples = float(times[0]), times[1:]
    if reaches is None or value <= reaches or terminal and value <= 3.0 * reaches:
        if samples.size == 0:
            return Uncertain(value, level=level)
        return Uncertain.from_samples(samples, value, level=level)
    # at the end of the window the stress was still above the residual: that much is known
    high = float(np.quantile(samples, (1 + level) / 2)) if samples.size else value
    return Uncertain(reaches, reaches, max(high, value), level, "lower_bound")
