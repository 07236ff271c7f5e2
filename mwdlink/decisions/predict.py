"""From a distribution to the relaxation of the melt, with the band of what is not known."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.chains.polymer import Polymer, need_polymer
from mwdlink.decisions.ensemble import (
    ExponentBelief,
    central_kernel,
    draw,
    exponent_belief,
    kernels_to_use,
)
from mwdlink.decisions.gpc_band import GpcBand, average_bands, error_asked, gpc_limits
from mwdlink.decisions.gpc_scale import as_own
from mwdlink.decisions.predicted import (
    FLOW_RESTS_ON,
    Outputs,
    Recorder,
    bands_of,
    frames,
    quoted,
    stack,
    trimmed,
)
from mwdlink.decisions.properties import Curves, properties_of
from mwdlink.decisions.response import Bank, inner_frequencies
from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.quantity import Uncertain, finite
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model, exponent_cautions
from mwdlink.relaxation.operator import log_grid
from mwdlink.relaxation.spectrum import Spectrum
from mwdlink.relaxation.validity import frequency_cautions
from mwdlink.result import Result

DEFAULT_OMEGA = (1e-4, 1e4, 10)
"""Frequencies unless asked for: low, high [rad/s], points a decade."""


@dataclass(frozen=True, eq=False)
class Prediction(Result):
    """A predicted melt.

    Attributes
    ----------
    distribution : Distribution
    melt : Melt
        Constants at the temperature of the prediction.
    model : Model
        Of the central curves.
    kernels : tuple of str
        In the band.
    belief : ExponentBelief
        What is held of the mixing exponent.
    spectrum : Spectrum
        Positive modes of the central prediction.
    outputs : Outputs
    members : int
    warnings : tuple of Caution
    """

    command: ClassVar[str] = "predict"
    main_table: ClassVar[str] = "sweep.csv"

    distribution: Distribution
    melt: Melt
    model: Model
    kernels: tuple[str, ...]
    belief: ExponentBelief
    spectrum: Spectrum
    outputs: Outputs
    members: int = 0
    gpc: GpcBand | None = None
    warnings: tuple[Caution, ...] = ()

    def payload(self) -> dict[str, Any]:
        averages = averages_of(self.distribution)
        one = np.ones(1)
        spread = average_bands(averages, self.gpc, np.ones((max(self.members, 1), 1)), one)
        model = model_payload(self.model, self.kernels, self.belief, self.members)
        return {
            **self.outputs.blocks(averages, spread),
            "temperature_C": self.melt.temperature_C,
            "central_model": model | {"band_gpc": None if self.gpc is None else self.gpc.to_dict()},
        }

    def tables(self) -> dict[str, Any]:
        return frames(self.outputs) | {"distribution.csv": self.distribution.to_frame()}

    def answer(self) -> str:
        eta0 = self.outputs.bands.get("eta0_Pa_s", self.outputs.values["eta0_Pa_s"])
        text = f"The melt has a zero-shear viscosity of {quoted(eta0, 'Pa s')}"
        crossing = self.outputs.values.get("crossover_omega_rad_per_s")
        if crossing is not None:
            w = self.outputs.bands.get("crossover_omega_rad_per_s", crossing)
            text += f" and its moduli cross at {quoted(w, 'rad/s')}"
        return f"{text}, at {self.melt.temperature_C:g} C."

    def paragraph(self) -> str:
        d = self.distribution
        text = (
            f"{self.answer()} Predicted from a distribution of Mw {d.Mw:.3g} g/mol and dispersity "
            f"{d.dispersity:.3g} with the {self.model.kernel} kernel and a mixing exponent of "
            f"{self.model.exponent:g} ({self.belief.source}), {_rouse_words(self.model)}."
        )
        if self.members:
            text += " " + band_words(self.kernels, self.belief, self.melt, self.members, self.gpc)
        return text

    def cannot_say(self) -> tuple[str, ...]:
        return (
            *gpc_limits([self.distribution], self.gpc),
            "Long-chain branching, fillers and second phases are not in the model.",
            FLOW_RESTS_ON,
        )


def predict(
    distribution: Distribution,
    polymer: Polymer,
    *,
    kernels: Any = None,
    exponent: Any = None,
    rouse: bool = True,
    temperature_C: float | None = None,
    omega: Any = None,
    members: int = 200,
    seed: int = 0,
    gpc_error: Any = None,
) -> Prediction:
    """Linear viscoelasticity and flow of a melt of given distribution.

    The central curves are of the power-law kernel (or the first of `kernels`) and the exponent 2
    unless the card or `exponent` says otherwise. The bands spread over kernels, exponent, scatter
    of the viscosity law, the errors of a GPC table and, where the card gives a range, the plateau
    modulus.

    Parameters
    ----------
    distribution : Distribution
        Masses equivalent to polystyrene are converted where the card can.
    polymer : Polymer
    kernels : sequence of str, optional
        Default: all the card has constants for.
    exponent : float or (float, float), optional
        A number fixes it, a pair is a range; default the card's, else the prior 2.0 +- 0.2.
    rouse : bool
        Whether the Rouse part is added.
    temperature_C : float, optional
        [C]; default the card's own.
    omega : array_like of shape (n,), optional
        Output frequencies [rad/s], ascending; times and rates of the other tables follow them.
    members : int
        Ensemble members; 0 gives no bands.
    seed : int
    gpc_error : float or GpcError, optional
        Error of the distribution: a number is that of a row, relative [-]. By default a measured
        table has the errors of `GpcError` and a distribution from averages is exact; 0 takes it
        as exact.

    Returns
    -------
    Prediction

    Raises
    ------
    ModelError
        Unknown kernel, exponent out of range, temperature out of the shift law's reach.
    InputError
        Frequencies that are not positive and ascending; no distribution, no polymer.

    Examples
    --------
    >>> from mwdlink.chains.polymer import builtin
    >>> melt = predict(Distribution.from_averages(Mw=1e5, dispersity=3), builtin("hdpe"), members=0)
    >>> 0 < melt.outputs.values["eta0_Pa_s"] < 1e5
    True
    """
    need_polymer(polymer)
    if not isinstance(distribution, Distribution):
        raise InputError(f"predict needs a distribution, not {type(distribution).__name__}.")
    distribution = as_own(distribution, polymer)
    melt = polymer.melt(temperature_C)
    names = kernels_to_use(melt, kernels)
    belief = exponent_belief(melt, exponent)
    w = frequencies(omega)
    model = Model(central_kernel(names), belief.centre, rouse)
    relaxation = Relaxation(distribution, melt, model)
    spectrum = trimmed(relaxation.spectrum(1e-2 / float(w[-1])))

    inner = inner_frequencies(min(w[0], 1e-2 / relaxation.longest_time), float(w[-1]), melt)
    bank = Bank([distribution], melt, rouse, float(inner[-1]))
    draws = draw(melt, names, belief, members, seed) if members > 0 else None
    gpc = GpcBand.of([distribution], error_asked(gpc_error), int(members), seed)
    one = np.ones((1, 1))
    samples: list[Curves] = []
    output = Recorder(w)
    central = bank.response(one, model.kernel, model.exponent)
    output.centre(central, *relaxation.moduli(w))
    curves = central.curves(inner)
    values = {k: finite(v[0]) for k, v in properties_of(curves, melt.density).items()}
    values |= {
        "eta0_Pa_s": relaxation.zero_shear_viscosity,
        "Je0_per_Pa": relaxation.recoverable_compliance,
        "mean_time_s": relaxation.mean_time,
    }
    bands: dict[str, Uncertain] = {}
    if draws is not None:
        for i in range(len(draws)):
            r = bank.response(
                one,
                draws.kernel[i],
                float(draws.exponent[i]),
                float(draws.plateau_levels[draws.plateau[i]]),
                float(draws.time_factor[i]),
                None if gpc is None else gpc.version(i),
            )
            output.member(r)
            samples.append(r.curves(inner))
        marks = {} if gpc is None else {"gpc": gpc.marks(np.ones((len(draws), 1)))}
        bands = bands_of(stack(samples), melt.density, draws, values, marks)
    tables = output.tables(spectrum)
    warnings = merge_cautions(
        polymer.warnings,
        relaxation.warnings,
        exponent_cautions(belief.centre),
        frequency_cautions(float(w[-1]), melt),
        narrow_cautions(spectrum),
    )
    return Prediction(
        distribution,
        melt,
        model,
        names,
        belief,
        spectrum,
        Outputs(tables, values, bands),
        int(members),
        gpc,
        warnings,
    )


def frequencies(omega: Any = None) -> np.ndarray:
    """Output frequencies [rad/s], checked; the default list where None."""
    if omega is None:
        return log_grid(*DEFAULT_OMEGA)
    w = np.atleast_1d(np.asarray(omega, dtype=float))
    if (
        w.ndim != 1
        or w.size < 2
        or not np.all(np.isfinite(w))
        or w[0] <= 0
        or np.any(np.diff(w) <= 0)
    ):
        raise InputError(
            "output frequencies must be at least two, positive and ascending.",
            remedy="Give them as LOW:HIGH:PER_DECADE [rad/s].",
        )
    return w


def averages_of(d: Distribution) -> dict[str, float]:
    """Mn, Mw, Mz [g/mol] and dispersity."""
    return {
        "Mn_g_per_mol": d.Mn,
        "Mw_g_per_mol": d.Mw,
        "Mz_g_per_mol": d.Mz,
        "dispersity": d.dispersity,
    }


def model_payload(
    model: Model, kernels: Sequence[str], belief: ExponentBelief, members: int
) -> dict[str, Any]:
    """What the central curves and the bands rest on."""
    spread: Any = {"value": belief.centre}
    if belief.low is not None:
        spread |= {"low": belief.low, "high": belief.high}
    elif belief.spread > 0:
        spread |= {"standard_deviation": belief.spread}
    return {
        "kernel": model.kernel,
        "exponent": model.exponent,
        "rouse": model.rouse,
        "band_kernels": list(kernels) if members else [],
        "band_exponent": spread if members else None,
        "exponent_source": belief.source,
        "members": members,
    }


def narrow_cautions(spectrum: Spectrum) -> tuple[Caution, ...]:
    """Caution where the spectrum is too narrow for the Cox-Merz rule."""
    return spectrum.flow_curve(np.array([1.0]))[1]


def band_words(
    kernels: Sequence[str],
    belief: ExponentBelief,
    melt: Melt,
    members: int,
    gpc: GpcBand | None = None,
) -> str:
    """What the band spreads over, in a sentence."""
    if belief.low is not None:
        exponent = f"exponents from {belief.low:g} to {belief.high:g} ({belief.source})"
    elif belief.spread > 0:
        exponent = f"exponents of {belief.centre:g} +- {belief.spread:g} ({belief.source})"
    else:
        exponent = f"the exponent {belief.centre:g} ({belief.source})"
    kernel = f"the {kernels[0]} kernel" if len(kernels) == 1 else f"{len(kernels)} kernels"
    text = (
        f"The bands hold 90 % of {members} members over {kernel}, {exponent} and the viscosity "
        f"law's scatter of {melt.scatter_decades:g} decades"
    )
    if melt.plateau_range is not None:
        low, high = melt.plateau_range
        text += f", and plateau moduli from {low:.3g} to {high:.3g} Pa"
    if gpc is not None:
        text += f", and {gpc.words()}"
    return text + "."


def _rouse_words(model: Model) -> str:
    return "with the Rouse part" if model.rouse else "without the Rouse part"
