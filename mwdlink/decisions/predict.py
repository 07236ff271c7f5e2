"""From a distribution to the relaxation of the melt, with the band of what is not known."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, ClassVar

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.chains.polymer import Polymer
from mwdlink.decisions.ensemble import (
    Draws,
    ExponentBelief,
    band,
    central_kernel,
    curve_band,
    draw,
    exponent_belief,
    kernels_to_use,
)
from mwdlink.decisions.properties import INDEX_FREQUENCIES, Curves, properties_of
from mwdlink.decisions.response import Bank, inner_frequencies
from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.quantity import Uncertain
from mwdlink.relaxation.flow import STANDARD_LOADS_KG
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.operator import log_grid
from mwdlink.relaxation.spectrum import Spectrum
from mwdlink.relaxation.validity import frequency_cautions
from mwdlink.result import Result

DEFAULT_OMEGA = (1e-4, 1e4, 10)
"""Frequencies unless asked for: low, high [rad/s], points a decade."""

Band = tuple[np.ndarray, np.ndarray]


@dataclass(frozen=True)
class Outputs:
    """Curves and numbers of one predicted melt, with bands: what `predict` and `blend` share.

    Attributes
    ----------
    curves : mapping of str to mapping of str to ndarray
        Table name to header to column, bands included.
    values : mapping of str to float or None
        Properties by name (see `properties.properties_of`).
    bands : mapping of str to Uncertain
        The same names; empty without members.
    """

    curves: Mapping[str, Mapping[str, np.ndarray]]
    values: Mapping[str, float | None]
    bands: Mapping[str, Uncertain] = field(default_factory=dict)

    def blocks(
        self, averages: Mapping[str, float], spread: Mapping[str, Uncertain]
    ) -> dict[str, Any]:
        """The keys `averages` to `indices` of a record, and `bands` in the same shape."""
        plain = _shape(dict(self.values) | dict(averages))
        out = dict(plain)
        if self.bands:
            out["bands"] = _shape(dict(self.bands) | dict(spread))
        else:
            out["bands"] = None
        return out


def _shape(values: Mapping[str, Any]) -> dict[str, Any]:
    averages = ("Mn_g_per_mol", "Mw_g_per_mol", "Mz_g_per_mol", "dispersity")
    crossing = {
        "omega_rad_per_s": values.get("crossover_omega_rad_per_s"),
        "G_Pa": values.get("crossover_G_Pa"),
    }
    flow = [
        {"load_kg": load, "MFR_g_per_10min": values.get(f"MFR_g_per_10min@{load:g}")}
        for load in STANDARD_LOADS_KG
    ]
    return {
        "averages": {k: values[k] for k in averages if k in values} or None,
        "terminal": {k: values.get(k) for k in ("eta0_Pa_s", "Je0_per_Pa", "mean_time_s")},
        "crossover": None if crossing["omega_rad_per_s"] is None else crossing,
        "melt_flow": [f for f in flow if f["MFR_g_per_10min"] is not None],
        "indices": {
            **{f"eta_{w:g}": values.get(f"viscosity_Pa_s@{w:g}") for w in INDEX_FREQUENCIES},
            "thinning_0.1_100": values.get("thinning_0.1_100"),
            "tan_delta_0.1": values.get("tan_delta@0.1"),
        },
    }


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
    warnings: tuple[Caution, ...] = ()

    def payload(self) -> dict[str, Any]:
        averages = averages_of(self.distribution)
        exact = {k: Uncertain(v, v, v) for k, v in averages.items()}
        return {
            **self.outputs.blocks(averages, exact),
            "temperature_C": self.melt.temperature_C,
            "central_model": model_payload(self.model, self.kernels, self.belief, self.members),
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
            text += " " + band_words(self.kernels, self.belief, self.melt, self.members)
        return text

    def cannot_say(self) -> tuple[str, ...]:
        return (
            "The band takes the distribution as given: errors of the GPC are not in it. One per "
            "cent in Mw is about three and a half per cent in the zero-shear viscosity.",
            "Long-chain branching, fillers and second phases are not in the model.",
            "Steady flow and melt flow rate rest on the Cox-Merz rule; the central melt flow rate "
            "has no entrance correction, its band takes up to a fifth of the load as lost there.",
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
) -> Prediction:
    """Linear viscoelasticity and flow of a melt of given distribution.

    The central curves are of the power-law kernel (or the first of `kernels`) and the exponent 2
    unless the card or `exponent` says otherwise. The bands spread over kernels, exponent, scatter
    of the viscosity law and, where the card gives a range, the plateau modulus.

    Parameters
    ----------
    distribution : Distribution
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

    Returns
    -------
    Prediction

    Raises
    ------
    ModelError
        Unknown kernel, exponent out of range, temperature out of the shift law's reach.
    InputError
        Frequencies that are not positive and ascending.

    Examples
    --------
    >>> from mwdlink.chains.polymer import builtin
    >>> melt = predict(Distribution.from_averages(Mw=1e5, dispersity=3), builtin("hdpe"), members=0)
    >>> 0 < melt.outputs.values["eta0_Pa_s"] < 1e5
    True
    """
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
    one = np.ones((1, 1))
    samples: list[Curves] = []
    output = Recorder(w)
    central = bank.response(one, model.kernel, model.exponent)
    output.centre(central, *relaxation.moduli(w))
    curves = central.curves(inner)
    values = {k: _number(v[0]) for k, v in properties_of(curves, melt.density).items()}
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
            )
            output.member(r)
            samples.append(r.curves(inner))
        bands = bands_of(stack(samples), melt.density, draws, values)
    tables = output.tables(spectrum)
    warnings = merge_cautions(
        polymer.warnings,
        relaxation.warnings,
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


def stack(samples: Sequence[Curves]) -> Curves:
    """Rows of several sets of curves together."""
    return Curves(
        samples[0].omega,
        np.vstack([c.storage for c in samples]),
        np.vstack([c.loss for c in samples]),
        np.concatenate([c.eta0 for c in samples]),
        np.concatenate([c.Je0 for c in samples]),
    )


def bands_of(
    curves: Curves, density: float | None, draws: Draws, values: Mapping[str, float | None]
) -> dict[str, Uncertain]:
    """Interval and budget of every property of an ensemble."""
    out = {}
    for name, x in properties_of(curves, density, draws.lost).items():
        if values.get(name) is not None:
            out[name] = band(x, values[name], draws)
    return out


def _number(x: float) -> float | None:
    return float(x) if np.isfinite(x) else None


class Recorder:
    """Collects the central curves and the members' and turns them into tables with bands."""

    def __init__(self, omega: np.ndarray) -> None:
        self.omega = omega
        self.time = 1.0 / omega[::-1]
        self.central: dict[str, np.ndarray] = {}
        self.samples: dict[str, list[np.ndarray]] = {}

    def _curves(self, r: Any, storage: np.ndarray, loss: np.ndarray) -> dict[str, np.ndarray]:
        t = self.time
        n = t.size
        fine = r.relaxation(np.concatenate([t, t * 0.9, t * 1.1]))[0]
        modulus, started = fine[:n], r.started(t)[0]
        eta0 = float(r.terminal[0][0])
        # -dG/dln t, to first order the density of modes at tau = t
        slope = np.maximum(fine[n : 2 * n] - fine[2 * n :], 1e-30)
        return {
            "G'": storage,
            "G''": loss,
            "|eta*|": np.hypot(storage, loss) / self.omega,
            "tan delta": loss / storage,
            "G": modulus,
            "eta+": started,
            "eta-/eta0": np.clip(1.0 - started / eta0, 1e-12, 1.0),
            "slope": slope,
        }

    def centre(self, r: Any, storage: np.ndarray, loss: np.ndarray) -> None:
        """Set the central melt, moduli given."""
        self.central = self._curves(r, storage, loss)

    def member(self, r: Any, offset: Any = None) -> None:
        """Add a member of the ensemble.

        `offset` takes frequencies and gives what to add to ln G' and ln G'' there.
        """
        storage, loss = r.moduli(self.omega)
        up, out = storage[0], loss[0]
        if offset is not None:
            a, b = offset(self.omega)
            up, out = up * np.exp(a), out * np.exp(b)
        found = self._curves(r, up, out)
        if offset is not None:
            a, b = offset(1.0 / self.time)
            for name in ("G", "slope"):
                found[name] = found[name] * np.exp(a)
            found["eta+"] = found["eta+"] * np.exp(b)
        for k, v in found.items():
            self.samples.setdefault(k, []).append(v)

    @property
    def bands(self) -> dict[str, Band]:
        """Low and high of every curve; empty without members."""
        return {k: curve_band(np.array(v), self.central[k]) for k, v in self.samples.items()}

    def tables(self, spectrum: Spectrum) -> dict[str, dict[str, np.ndarray]]:
        """Columns by table and header."""
        bands = self.bands
        seen = self.central["G"] > 1e-12 * self.central["G"].max()

        def columns(*pairs: tuple[str, str], mask: Any = slice(None)) -> dict[str, np.ndarray]:
            out = {}
            for name, unit in pairs:
                out[f"{name} [{unit}]"] = self.central[name][mask]
                if name in bands:
                    out[f"{name} low [{unit}]"] = bands[name][0][mask]
                    out[f"{name} high [{unit}]"] = bands[name][1][mask]
            return out

        sweep = {"omega [rad/s]": self.omega} | columns(
            ("G'", "Pa"), ("G''", "Pa"), ("|eta*|", "Pa s"), ("tan delta", "-")
        )
        relaxation = {"t [s]": self.time[seen]} | columns(
            ("G", "Pa"), ("eta+", "Pa s"), ("eta-/eta0", "-"), mask=seen
        )
        eta = spectrum.flow_curve(self.omega)[0]
        flow = {"rate [1/s]": self.omega, "eta [Pa s]": eta}
        modes = {"tau [s]": spectrum.tau, "g [Pa]": spectrum.strength}
        if bands:
            share = eta / self.central["|eta*|"]
            low, high = bands["|eta*|"]
            flow |= {
                "eta low [Pa s]": np.minimum(low * share, eta),
                "eta high [Pa s]": np.maximum(high * share, eta),
            }
            modes |= self._mode_band(spectrum, *bands["slope"])
        return {
            "sweep.csv": sweep,
            "spectrum.csv": modes,
            "relaxation.csv": relaxation,
            "flow.csv": flow,
        }

    def _mode_band(self, s: Spectrum, low: np.ndarray, high: np.ndarray) -> dict[str, np.ndarray]:
        # single modes have no meaning of their own; their density has: its relative band is that
        # of -dG/dln t at t = tau
        x, c = np.log(self.time), self.central["slope"]
        seen = c > 1e-12 * c.max()
        at = np.log(s.tau)
        down = np.interp(at, x[seen], (low / c)[seen])
        up = np.interp(at, x[seen], (high / c)[seen])
        return {"g low [Pa]": s.strength * down, "g high [Pa]": s.strength * up}


def frames(outputs: Outputs) -> dict[str, Any]:
    """The tables as pandas DataFrames."""
    import pandas as pd

    return {name: pd.DataFrame(dict(columns)) for name, columns in outputs.curves.items()}


def trimmed(s: Spectrum) -> Spectrum:
    """Without modes that carry less than 1e-9 of the modulus, the viscosity and the compliance."""
    keep = np.zeros(s.tau.size, dtype=bool)
    for power in (0, 1, 2):
        part = s.strength * s.tau**power
        keep |= part > 1e-9 * part.sum()
    return Spectrum(s.tau[keep], s.strength[keep])


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


def quoted(q: Any, unit: str) -> str:
    """`1.2e4 Pa s (0.9e4 to 1.5e4)` of a number or an Uncertain."""
    if isinstance(q, Uncertain):
        if q.value is None:
            return "unknown"
        text = f"{q.value:.3g} {unit}"
        if q.low is not None and q.high is not None and q.high > q.low:
            text += f" ({q.low:.3g} to {q.high:.3g}, {100 * q.level:.0f} % interval)"
        return text
    return "unknown" if q is None else f"{float(q):.3g} {unit}"


def band_words(kernels: Sequence[str], belief: ExponentBelief, melt: Melt, members: int) -> str:
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
    return text + "."


def _rouse_words(model: Model) -> str:
    return "with the Rouse part" if model.rouse else "without the Rouse part"
