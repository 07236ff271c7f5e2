"""A card of the user's own material, from samples with both GPC and rheology."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.chains.polymer import Polymer
from mwdlink.decisions.blend_sweeps import modes_of
from mwdlink.decisions.calibrate_card import WIDENED, card_toml, fitted_card, scatter_of
from mwdlink.decisions.calibrate_fit import (
    INDEPENDENT,
    MODEL_ERROR,
    NAMES,
    PRIOR,
    SAMPLE_SHIFT,
    Fitted,
    Sample,
    changed,
    fit,
    with_gpc_errors,
)
from mwdlink.decisions.components import Study, settled
from mwdlink.decisions.ensemble import central_kernel, exponent_belief, kernels_to_use
from mwdlink.errors import Caution, InputError, NotConverged, merge_cautions
from mwdlink.measurement.noise import noise_of
from mwdlink.quantity import Uncertain
from mwdlink.relaxation.mixing import Model
from mwdlink.result import Result

# a constant counts as fixed by the data when they narrow its prior to less than this share
NARROWED = 0.6
# Mw of the samples must differ by this factor before a law's exponent can be told
LEAST_SPAN = 2.0
# what the predicted moduli are good to, in units of the plateau modulus
NUMERICAL = 1e-8
# a kernel takes part in the intervals while its misfit is within this factor of the best
ADMISSIBLE = 2.0


@dataclass(frozen=True, eq=False)
class Calibration(Result):
    """Constants of the user's own material.

    Attributes
    ----------
    polymer : Polymer
        The card that was started from.
    card : mapping
        The new card, in the shape of `Polymer.to_dict()`.
    samples : tuple of Sample
    fits : tuple of Fitted
        By kernel, the central one first.
    viscosity, network : mapping
        Uncertain quantities by key.
    exponent : Uncertain
        Mixing exponent [-], with the central kernel.
    kept : mapping of str to str
        What the data do not fix, and why; the published value stands.
    warnings : tuple of Caution
    """

    command: ClassVar[str] = "calibrate"
    main_table: ClassVar[str] = "residuals.csv"

    polymer: Polymer
    card: Mapping[str, Any]
    samples: tuple[Sample, ...]
    fits: tuple[Fitted, ...]
    viscosity: Mapping[str, Any]
    network: Mapping[str, Any]
    exponent: Uncertain
    kept: Mapping[str, str]
    measured_eta0: tuple[float | None, ...]
    warnings: tuple[Caution, ...] = ()

    def fitted_polymer(self) -> Polymer:
        """The new card as a Polymer."""
        return Polymer.from_dict(self.card, origin="calibrate")

    def payload(self) -> dict[str, Any]:
        return {
            "viscosity": dict(self.viscosity),
            "network": dict(self.network),
            "exponent": self.exponent,
            "kept": dict(self.kept),
            "kernels": [
                {
                    "kernel": f.kernel,
                    "chi2_per_point": f.chi2_per_point,
                    "mixing_exponent": float(f.values[3]),
                    "law_exponent": float(f.values[1]),
                    "converged": f.converged,
                }
                for f in self.fits
            ],
            "samples": [s.name for s in self.samples],
        }

    def tables(self) -> dict[str, Any]:
        import pandas as pd

        f = self.fits[0]
        rows = []
        for i, s in enumerate(self.samples):
            r = f.residuals[i]
            n = s.omega.size
            rows.append(
                {
                    "sample": s.name,
                    "Mw [g/mol]": s.distribution.Mw,
                    "dispersity [-]": s.distribution.dispersity,
                    "eta0 measured [Pa s]": self.measured_eta0[i],
                    "eta0 law [Pa s]": float(f.eta0[i]),
                    "time shift [-]": float(np.exp(f.shifts[i])),
                    "bias G' [decades]": float(np.mean(r[:n]) / np.log(10)) if n else None,
                    "scatter G' [decades]": float(np.std(r[:n]) / np.log(10)) if n else None,
                    "bias G'' [decades]": float(np.mean(r[n:]) / np.log(10)) if n else None,
                    "scatter G'' [decades]": float(np.std(r[n:]) / np.log(10)) if n else None,
                }
            )
        return {"residuals.csv": pd.DataFrame(rows), "card.toml": card_toml(self.card)}

    def to_frame(self) -> Any:
        return self.tables()["residuals.csv"]

    def answer(self) -> str:
        fixed = [n for n in ("viscosity level", *_WORDS.values()) if n not in self.kept]
        fixed = list(dict.fromkeys(fixed))
        if not fixed:
            return "These samples fix none of the card's constants; the published values stand."
        e = self.viscosity["eta0_at_pivot_Pa_s"]
        text = (
            f"At {self.viscosity['pivot_g_per_mol']:.3g} g/mol the viscosity law gives "
            f"{e.value:.3g} Pa s ({e.low:.3g} to {e.high:.3g})"
        )
        if self.kept:
            stand = "stands" if len(self.kept) == 1 else "stand"
            text += f"; the published {' and '.join(self.kept)} {stand}"
        return text + "."

    def paragraph(self) -> str:
        v, n = self.viscosity, self.network["plateau_modulus_Pa"]
        out = (
            f"From {len(self.samples)} samples with the {self.fits[0].kernel} kernel: "
            f"{self.answer()} Exponent of the law {_spoken(v['exponent'])}, plateau modulus "
            f"{_spoken(n)} Pa, mixing exponent {_spoken(self.exponent)}."
        )
        for what, why in self.kept.items():
            out += f" Kept as published: {what} ({why})."
        return out

    def cannot_say(self) -> tuple[str, ...]:
        return (
            "The constants belong to the calibration of the GPC they were fitted with: molar "
            "masses of another calibration need another law.",
            "The mixing exponent has meaning only with the kernel it was fitted with.",
        )


_WORDS = {
    "level": "viscosity level",
    "exponent": "law exponent",
    "plateau_modulus": "plateau modulus",
    "mixing_exponent": "mixing exponent",
}


def calibrate(
    study: Study,
    *,
    kernels: Any = None,
    rouse: bool = True,
    noise: float | None = None,
) -> Calibration:
    """Fit viscosity law, plateau modulus and mixing exponent to a study's samples.

    Parameters
    ----------
    study : Study
        Components with a distribution and a sweep (or `eta0_Pa_s`); measured blends of
        components with distributions count as samples too.
    kernels : sequence of str, optional
        The first is central (the power-law one by default); all that fit take part in the
        intervals.
    rouse : bool
    noise : float, optional
        Relative noise of all sweeps [-].

    Returns
    -------
    Calibration
        With a card of status `fitted` for what the data fix; the rest stays as published.

    Raises
    ------
    InputError
        No sample has both.
    NotConverged
    """
    melt = study.melt
    samples, notes, measured = _samples(study, melt, noise)
    names = kernels_to_use(melt, kernels)
    centre = names[0] if kernels else central_kernel(names)
    order = [centre, *[k for k in names if k != centre]]
    masses = np.array([s.distribution.Mw for s in samples])
    pivot = float(np.exp(np.mean(np.log(masses))))
    belief = exponent_belief(melt)
    start = np.array([0.0, melt.law_exponent, 0.0, belief.centre])
    kept = _unfixable(samples, masses)
    free = [n not in kept for n in NAMES]
    model = Model(centre, belief.centre, rouse)
    samples = with_gpc_errors(samples, melt, model, np.zeros(len(samples)))
    first = _converged(fit(samples, melt, centre, rouse, start, free, pivot))
    if any(s.gpc is not None for s in samples):
        # once more with the constants found: the errors' reach depends on them
        found = changed(melt, first.values, pivot)
        model = Model(centre, float(first.values[3]), rouse)
        samples = with_gpc_errors(samples, found, model, first.shifts)
        first = _converged(fit(samples, melt, centre, rouse, start, free, pivot))
    # whatever the data hardly narrow goes back to its published value
    for i, name in enumerate(NAMES):
        if first.free[i] and first.spread[i] > NARROWED * PRIOR[i]:
            kept[name] = "the data hardly narrow what was known before"
    again = [n not in kept for n in NAMES]
    whole = first
    if again != free:
        first = _converged(fit(samples, melt, centre, rouse, start, again, pivot))
    others = [fit(samples, melt, k, rouse, start, again, pivot) for k in order[1:]]
    fits = (first, *others)
    best = min(f.chi2_per_point for f in fits)
    admissible = [f for f in fits if f.converged and f.chi2_per_point <= ADMISSIBLE * best + 0.1]
    if first.chi2_per_point > ADMISSIBLE * best + 0.1:
        better = min(fits, key=lambda f: f.chi2_per_point).kernel
        notes.append(
            Caution(
                "another_kernel_fits_better",
                f"The {better} kernel fits these samples clearly better than {centre}; calibrate "
                f"with --kernel {better} and use the card with it.",
            )
        )
    for s, shift in zip(samples, first.shifts, strict=True):
        if abs(shift) > 3.0 * SAMPLE_SHIFT:
            notes.append(
                Caution(
                    "sample_odd",
                    f"The times of {s.name} lie a factor {np.exp(shift):.2g} from the law of the "
                    "others: a GPC error, a wrong label or another polymer. Leave it out and see.",
                )
            )
    spread = _spread(first, admissible)
    # what is said of a constant holds what those that were kept leave open; the card does not: it
    # is used with the kept ones, whose own spread comes with them
    said_of = np.where(first.free, np.maximum(spread, _spread(whole, admissible)), spread)
    viscosity, network, exponent = _quantities(
        first, said_of, melt, study.polymer, pivot, kept, samples
    )
    card = fitted_card(study, first, spread, melt, pivot, kept, samples, masses)
    said = {_WORDS[k]: v for k, v in kept.items()}
    return Calibration(
        polymer=study.polymer,
        card=card,
        samples=tuple(samples),
        fits=fits,
        viscosity=viscosity,
        network=network,
        exponent=exponent,
        kept=said,
        measured_eta0=tuple(measured),
        warnings=merge_cautions(study.warnings, study.polymer.warnings, melt.warnings, notes),
    )


def _converged(f: Fitted) -> Fitted:
    if not f.converged:
        raise NotConverged("the calibration did not converge; see whether a sample is odd", f)
    return f


def _samples(
    study: Study, melt: Melt, noise: float | None
) -> tuple[list[Sample], list[Caution], list[float | None]]:
    components, cautions = settled(study.components, study.polymer, melt.temperature_C)
    notes = list(cautions)
    sources: list[tuple[str, Distribution | None, Any, float | None]] = [
        (c.name, c.distribution, c.sweep, c.eta0_Pa_s) for c in components
    ]
    by_name = {c.name: c.distribution for c in components}
    for b in study.blends:
        parts = [(by_name.get(k), f) for k, f in b.fractions.items()]
        if b.sweep is not None and all(d is not None for d, _ in parts):
            mixed = Distribution.blend([(d, f) for d, f in parts if d is not None])
            sources.append((b.name, mixed, b.sweep, None))
    out: list[Sample] = []
    measured: list[float | None] = []
    for name, distribution, sweep, eta0 in sources:
        if distribution is None or (sweep is None and eta0 is None):
            notes.append(
                Caution(
                    "sample_incomplete",
                    f"{name} lacks {'a distribution' if distribution is None else 'rheology'} and "
                    "takes no part.",
                )
            )
            continue
        if sweep is None:
            none = np.empty(0)
            out.append(Sample(name, distribution, none, none, none, eta0))
            measured.append(eta0)
            continue
        w = noise_of(sweep, noise)
        sigma = np.hypot(np.concatenate([w.sigma_storage, w.sigma_loss]), MODEL_ERROR)
        sigma = sigma * np.sqrt(max(len(sweep) / INDEPENDENT, 1.0))
        both = np.concatenate([sweep.storage, sweep.loss])
        # far below terminal flow G' is a difference of large numbers, for the model too
        sigma = np.hypot(sigma, NUMERICAL * melt.plateau_modulus / both)
        log_moduli = np.log(both)
        out.append(Sample(name, distribution, np.asarray(sweep.omega), log_moduli, sigma, eta0))
        m = modes_of(sweep, 0, 0, noise)
        measured.append(m.eta0 if m.terminal else eta0)
    if not out:
        raise InputError(
            "no sample of the study has both a distribution and rheology.",
            path=study.paths[0] if study.paths else None,
            remedy="Give components a distribution and a sweep (or eta0_Pa_s).",
        )
    return out, notes, measured


def _unfixable(samples: Sequence[Sample], masses: np.ndarray) -> dict[str, str]:
    """What these samples cannot fix whatever their quality, and why."""
    kept: dict[str, str] = {}
    span = float(masses.max() / masses.min())
    if len(samples) < 3 or span < LEAST_SPAN:
        why = f"the samples' Mw span a factor {span:.3g} only" if len(samples) > 1 else "one sample"
        if len(samples) >= 2 and span >= LEAST_SPAN:
            why = "two samples give a line, not a law"
        kept["exponent"] = why
    if all(s.omega.size == 0 for s in samples):
        kept["plateau_modulus"] = "no sweep is given"
        kept["mixing_exponent"] = "no sweep is given"
    return kept


def _spread(first: Fitted, admissible: Sequence[Fitted]) -> np.ndarray:
    """Standard errors with the difference between kernels that fit as well."""
    out = first.spread.copy()
    if len(admissible) > 1:
        between = np.std([f.values for f in admissible], axis=0)
        out = np.where(first.free, np.hypot(out, between), out)
    return out


def _uncertain(value: float, low: float, high: float, kept: bool) -> Uncertain:
    return Uncertain(value, low, high, status="assumed" if kept else "resolved")


def _quantities(
    f: Fitted,
    spread: np.ndarray,
    melt: Melt,
    polymer: Polymer,
    pivot: float,
    kept: Mapping[str, str],
    samples: Sequence[Sample],
) -> tuple[dict[str, Any], dict[str, Any], Uncertain]:
    level, a, ln_g, beta = f.values
    e0 = float(melt.zero_shear_law(pivot) * np.exp(level))
    s = WIDENED * spread
    if "level" in kept:
        s[0] = WIDENED * np.log(10.0) * melt.scatter_decades
    coefficient = e0 / pivot**a
    # the coefficient stands at 1 g/mol: the law's exponent moves it by ln(pivot) for each unit
    slope = 0.0 if "exponent" in kept else s[1] * np.log(pivot)
    s_k = float(np.hypot(s[0], slope))
    g = melt.plateau_modulus * float(np.exp(ln_g))
    viscosity = {
        "coefficient": _uncertain(
            coefficient, coefficient * np.exp(-s_k), coefficient * np.exp(s_k), "level" in kept
        ),
        "exponent": _uncertain(float(a), float(a - s[1]), float(a + s[1]), "exponent" in kept),
        "eta0_at_pivot_Pa_s": _uncertain(
            e0, e0 * float(np.exp(-s[0])), e0 * float(np.exp(s[0])), "level" in kept
        ),
        "pivot_g_per_mol": pivot,
        "scatter_decades": scatter_of(f, samples),
        "temperature_C": melt.temperature_C,
    }
    if "exponent" in kept:
        viscosity["exponent"] = Uncertain(float(a), status="assumed")
    network = {
        "plateau_modulus_Pa": Uncertain(g, status="assumed")
        if "plateau_modulus" in kept
        else Uncertain(g, g * float(np.exp(-s[2])), g * float(np.exp(s[2])))
    }
    exponent = _uncertain(
        float(beta), max(float(beta - s[3]), 1.0), float(beta + s[3]), "mixing_exponent" in kept
    )
    return viscosity, network, exponent


def _spoken(u: Uncertain) -> str:
    if u.low is None or u.high is None or u.status == "assumed":
        return f"{u.value:.3g}" + (" (as published)" if u.status == "assumed" else "")
    return f"{u.value:.3g} ({u.low:.3g} to {u.high:.3g})"
