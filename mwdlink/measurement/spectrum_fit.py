"""The relaxation spectrum of a sweep, without any model of the chains."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any, ClassVar

import numpy as np

from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.measurement.checks import Checks
from mwdlink.measurement.consistency import KramersKronig, kramers_kronig
from mwdlink.measurement.continuous import Continuous, fit_continuous, supported_range
from mwdlink.measurement.dense import at_all_readings, averaged
from mwdlink.measurement.modes import ModeFit, describe, parsimonious
from mwdlink.measurement.noise import Weights, chi2_in_words, noise_of
from mwdlink.measurement.sweep import Sweep
from mwdlink.measurement.terminal import REACHED_ETA0 as REACHED_ETA0
from mwdlink.measurement.terminal import crossover_values, terminal_values
from mwdlink.quantity import Uncertain
from mwdlink.relaxation.spectrum import Spectrum
from mwdlink.result import Result

# how well a spectrum should repeat from sweep to sweep, one standard deviation of ln H; twice that
# is published practice (Stadler & Bailly, Rheol. Acta 48 (2009) 33, published)
WANTED_SCATTER = 0.05


@dataclass(frozen=True)
class SpectrumFit(Result):
    """Discrete and continuous relaxation spectrum of a sweep.

    Attributes
    ----------
    sweep : Sweep
    weights : Weights
        The relative errors used and where they came from.
    discrete : ModeFit
        Parsimonious positive modes.
    continuous : Continuous
        H(ln tau) with its band.
    supported : (float, float)
        Range of tau the data support [s].
    kramers_kronig : KramersKronig
    bands : mapping of str to Uncertain
        `eta0_Pa_s`, `Je0_per_Pa`, `mean_time_s`, and of the crossover where there is one.
    terminal_reached : bool
        Whether the window reaches terminal flow as far as eta0 needs it.
    warnings : tuple of Caution
    checks : Checks or None
        Slips, outliers and drift, where they were looked for (`with_checks`).
    """

    command: ClassVar[str] = "spectrum"
    main_table: ClassVar[str] = "continuous.csv"

    sweep: Sweep
    weights: Weights
    discrete: ModeFit
    continuous: Continuous
    supported: tuple[float, float]
    kramers_kronig: KramersKronig
    bands: dict[str, Uncertain] = field(default_factory=dict)
    terminal_reached: bool = False
    warnings: tuple[Caution, ...] = ()
    checks: Checks | None = None

    def with_checks(self, checks: Checks) -> SpectrumFit:
        """The same fit with what the checks of its sweep found; no number changes."""
        # the check names the same readings with more detail
        own = [c for c in self.warnings if c.code != "outliers" or c in self.sweep.warnings]
        return replace(self, checks=checks, warnings=merge_cautions(own, checks.warnings))

    @property
    def spectrum(self) -> Spectrum:
        """The discrete modes as a Spectrum, ready for G(t), flow and the rest."""
        return Spectrum(self.discrete.tau, self.discrete.strength)

    def continuous_spectrum(self, H: np.ndarray | None = None) -> Spectrum:
        """The continuous spectrum (or one of its members) as closely spaced modes."""
        H = self.continuous.H if H is None else H
        return Spectrum(self.continuous.tau, np.maximum(H, 0.0) * self.continuous.step)

    @property
    def supported_mask(self) -> np.ndarray:
        """Nodes of the continuous spectrum inside the supported range, shape (n,)."""
        low, high = self.supported
        return (self.continuous.tau >= low) & (self.continuous.tau <= high)

    def payload(self) -> dict[str, Any]:
        b = self.bands
        terminal = ("eta0_Pa_s", "Je0_per_Pa", "mean_time_s")
        crossing = ("omega_rad_per_s", "G_Pa")
        has = all(k in b for k in crossing)
        return {
            "terminal": {k: b[k].value for k in terminal},
            "crossover": {k: b[k].value for k in crossing} if has else None,
            "bands": {
                "terminal": {k: b[k] for k in terminal},
                "crossover": {k: b[k] for k in crossing} if has else None,
            },
            "supported": {"tau_low_s": self.supported[0], "tau_high_s": self.supported[1]},
            "consistency": {
                "kramers_kronig": self.kramers_kronig.to_dict(),
                **({} if self.checks is None else self.checks.payload()),
            },
            "noise": self._noise(),
            "fit": {
                "modes": int(self.discrete.tau.size),
                "chi2_per_point": self.discrete.chi2_per_point,
                "chi2_per_point_continuous": self._continuous_chi2_per_point,
                "points": self.discrete.points,
                "smoothing": self.continuous.smoothing,
                "effective_parameters": self.continuous.effective_parameters,
                "members": int(self.continuous.members.shape[0]),
            },
        }

    def _noise(self) -> dict[str, Any]:
        if self.weights.estimate is not None:
            return {"relative": self.weights.estimate.relative, "source": "estimated"}
        return {"relative": Uncertain(self.weights.typical), "source": self.weights.source}

    @property
    def _continuous_chi2_per_point(self) -> float:
        c = self.continuous
        return c.chi2 / max(2 * c.storage.size - c.effective_parameters, 1.0)

    def tables(self) -> dict[str, Any]:
        import pandas as pd

        c, s = self.continuous, self.sweep
        spectrum = pd.DataFrame({"tau [s]": self.discrete.tau, "g [Pa]": self.discrete.strength})
        continuous = pd.DataFrame(
            {
                "tau [s]": c.tau,
                "H [Pa]": c.H,
                "H low [Pa]": c.low,
                "H high [Pa]": c.high,
                "supported": self.supported_mask.astype(int),
                "scatter [-]": c.scatter,
            }
        )
        fit = {
            "omega [rad/s]": s.omega,
            "G' [Pa]": s.storage,
            "G'' [Pa]": s.loss,
            "G' fit [Pa]": c.storage,
            "G'' fit [Pa]": c.loss,
            "G' modes [Pa]": self.discrete.storage,
            "G'' modes [Pa]": self.discrete.loss,
            "residual' [-]": s.storage / c.storage - 1.0,
            "residual'' [-]": s.loss / c.loss - 1.0,
            "sigma' [-]": self.weights.sigma_storage,
            "sigma'' [-]": self.weights.sigma_loss,
        }
        if s.rows is not None:
            fit["row"] = s.rows
        return {
            "spectrum.csv": spectrum,
            "continuous.csv": continuous,
            "fit.csv": pd.DataFrame(fit),
            "smoothing.csv": self.smoothing_table(),
            **({} if self.checks is None else self.checks.tables()),
        }

    def smoothing_table(self) -> Any:
        """The whole curve of the smoothing weight: lambda, log evidence, chi2."""
        import pandas as pd

        names = ["lambda [-]", "log evidence [-]", "chi2 [-]"]
        return pd.DataFrame(self.continuous.scan, columns=names)

    def answer(self) -> str:
        eta0 = self.bands["eta0_Pa_s"]
        low, high = self.supported
        if eta0.status == "resolved":
            flow = f"a zero-shear viscosity of {eta0.value:.4g} Pa s{_interval(eta0)}"
        else:
            flow = (
                f"a zero-shear viscosity of at least {eta0.value:.3g} Pa s (the window does not "
                "reach terminal flow)"
            )
        modes = self.discrete.tau.size
        return (
            f"{modes} relaxation mode{'s describe' if modes != 1 else ' describes'} the sweep, "
            f"with {flow}; "
            f"the data support the spectrum from {low:.2g} to {high:.2g} s."
        )

    def paragraph(self) -> str:
        b, w = self.bands, self.weights
        je0, time = b["Je0_per_Pa"], b["mean_time_s"]
        least = "at least " if je0.status == "lower_bound" else ""
        text = (
            f"{self.answer()} The steady-state compliance is {least}{je0.value:.3g} "
            f"1/Pa{_interval(je0)} and the mean relaxation time {least}{time.value:.3g} "
            f"s{_interval(time)}. {self.kramers_kronig.text()}"
        )
        text += (
            f" {w.estimate.text()}" if w.estimate is not None
            else f" Relative errors of {100 * w.typical:.1f} % were used ({w.source})."
        )  # fmt: skip
        return text if self.checks is None else f"{text} {self.checks.text()}".strip()

    def cannot_say(self) -> tuple[str, ...]:
        low, high = self.supported
        out = [
            f"Below {low:.2g} s and above {high:.2g} s the spectrum is continued smoothly, not "
            "measured: half a decade and more is lost at each end of the window."
        ]
        if not self.terminal_reached:
            out.append(
                "The window does not reach terminal flow: zero-shear viscosity, compliance and "
                "mean time are lower bounds. Lower frequencies or a higher temperature would help."
            )
        out.append(
            "Single modes of the discrete spectrum have no meaning by themselves: other sets fit "
            "as well. What the set predicts inside the window does not depend on the choice."
        )
        return tuple(out)


def _interval(q: Uncertain) -> str:
    if q.low is None or q.high is None or q.status != "resolved" or q.low == q.high:
        return ""
    return f" ({q.low:.4g} to {q.high:.4g})"


def fit_spectrum(
    sweep: Sweep,
    *,
    noise: float | None = None,
    members: int = 200,
    seed: int = 0,
    modes: int | None = None,
    smoothing: float | None = None,
) -> SpectrumFit:
    """Relaxation spectrum of a sweep: discrete, continuous with band, and what it supports.

    Parameters
    ----------
    sweep : Sweep
        At least four frequencies.
    noise : float, optional
        Relative noise of one modulus [-]; default the error columns, else estimated, at least 1 %.
    members : int
        Perturbed refits behind the band; 0 gives none.
    seed : int
    modes : int, optional
        Number of discrete modes; None lets the data choose.
    smoothing : float, optional
        A fixed smoothing weight for the continuous spectrum; None lets the evidence choose.

    Returns
    -------
    SpectrumFit

    Raises
    ------
    InputError
        With fewer than four points, or `noise` outside 0 to 1.
    NotConverged

    Notes
    -----
    For any positive spectrum |eta*|(omega) <= eta0 and G'/|G*|^2 (omega) <= Je0 [derived], so both
    are true lower bounds when the window does not reach terminal flow, and are given as such.
    """
    if len(sweep) < 4:
        raise InputError(
            f"{len(sweep)} frequencies are too few for a relaxation spectrum.",
            path=sweep.path,
            remedy="Give at least four, better five per decade over three decades.",
        )
    weights = noise_of(sweep, noise)
    whole = (sweep.omega, sweep.storage, sweep.loss, weights.sigma_storage, weights.sigma_loss)
    data = averaged(*whole)
    discrete = parsimonious(*data, modes=modes)
    continuous = fit_continuous(
        *data,
        members=members,
        seed=seed,
        smoothing=smoothing,
        noise_freedom=None if weights.estimate is None else weights.estimate.degrees_of_freedom,
    )
    if data[0].size < len(sweep):
        discrete = describe(*whole, discrete.tau, discrete.strength, discrete.free)
        continuous = at_all_readings(continuous, *whole)
    verdict = kramers_kronig(sweep, noise)
    bands, reached = terminal_values(sweep, continuous, discrete)
    bands |= crossover_values(sweep, continuous)
    supported = supported_range(sweep.omega)
    warnings = merge_cautions(
        sweep.warnings,
        _cautions(sweep, weights, discrete, continuous, verdict, reached, supported, smoothing),
    )
    return SpectrumFit(
        sweep, weights, discrete, continuous, supported, verdict, bands, reached, warnings
    )


def _cautions(
    sweep: Sweep,
    weights: Weights,
    discrete: ModeFit,
    c: Continuous,
    verdict: KramersKronig,
    reached: bool,
    supported: tuple[float, float],
    smoothing: float | None,
) -> tuple[Caution, ...]:
    out = []
    freedom = discrete.points - discrete.free
    words = chi2_in_words(discrete.chi2_per_point, freedom, weights.source)
    if words:
        out.append(Caution("misfit_unlike_noise", words))
    if not verdict.passed:
        out.append(Caution("kramers_kronig_failed", verdict.text()))
    if weights.estimate is not None and weights.estimate.outliers:
        rows = [
            str(int(sweep.rows[i]) if sweep.rows is not None else i + 1)
            for i in weights.estimate.outliers
        ]
        text = (
            f"Readings in row{'s' if len(rows) > 1 else ''} {', '.join(rows)} stand out from the "
            "spectrum of all the others; they were kept. Leave them out by their row if they are "
            "bad readings."
        )
        out.append(Caution("outliers", text))
    if not reached:
        text = (
            "The window does not reach terminal flow: zero-shear viscosity, compliance and mean "
            "relaxation time are lower bounds."
        )
        out.append(Caution("terminal_not_reached", text))
    if supported[0] >= supported[1]:
        text = (
            f"The window is {sweep.decades:.1f} decades wide; under 1.4 decades no part of a "
            "relaxation spectrum is supported by the data."
        )
        out.append(Caution("window_too_narrow", text))
    if c.counted.any():
        k = int(np.argmax(np.where(c.counted, c.scatter, 0.0)))
        if c.scatter[k] > WANTED_SCATTER:
            text = (
                f"From one sweep like this to the next the spectrum moves by "
                f"{100 * c.scatter[k]:.2g} % (one standard deviation) near {c.tau[k]:.2g} s: the "
                "data carry its height there no better. "
                f"{100 * WANTED_SCATTER:.0f} % take {(c.scatter[k] / WANTED_SCATTER) ** 2:.1f} "
                "times as many points per decade, or less noise."
            )
            out.append(Caution("spectrum_scatters", text))
    if smoothing is None and c.scan.shape[0] > 1:
        k = int(np.argmax(c.scan[:, 1]))
        # the smooth end only says that a log-normal spectrum fits: nothing to warn of
        if k == c.scan.shape[0] - 1:
            text = (
                "The smoothing weight was chosen at the free end of its scan: the spectrum is as "
                "rough as the scan allows, and so is its band."
            )
            out.append(Caution("smoothing_at_end", text))
    return tuple(out)
