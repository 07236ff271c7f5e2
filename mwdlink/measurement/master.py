"""Sweeps at several temperatures onto one master curve."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any, ClassVar

import numpy as np

from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.measurement.master_notes import law_text, master_cautions
from mwdlink.measurement.odd_shifts import misses, shift_cautions
from mwdlink.measurement.shift_laws import LawFit, fit_laws, preferred
from mwdlink.measurement.shifts import Curve, ShiftFit, fit_shifts
from mwdlink.measurement.superposition import Superposition, judge
from mwdlink.measurement.sweep import Sweep
from mwdlink.measurement.temperatures import group_temperatures, pooled_noise
from mwdlink.quantity import Uncertain, readonly
from mwdlink.result import Result

LN10 = float(np.log(10.0))
VERTICALS = ("none", "rho-T", "free")
LEVEL = 0.9


@dataclass(frozen=True)
class Step:
    """One temperature of a master curve.

    Attributes
    ----------
    temperature_C : float
        [C]
    sweep : Sweep
        The readings as measured (several sweeps of one temperature put together).
    a_T : Uncertain
        Factor on the frequency [-].
    b_T : float
        Factor on the moduli that was used [-].
    b_T_free : Uncertain
        The factor the curves themselves would choose [-].
    residual : float or None
        Root mean square relative distance from the common curve where another temperature overlaps
        [-]; None without overlap.
    overlap_decades : float
        Width of the overlap with the neighbour nearer to the reference, or the nearest one.
    """

    temperature_C: float
    sweep: Sweep
    a_T: Uncertain
    b_T: float
    b_T_free: Uncertain
    residual: float | None
    overlap_decades: float

    @property
    def factor(self) -> float:
        """a_T as a plain number [-]."""
        return float(self.a_T.value or 1.0)


@dataclass(frozen=True)
class Master(Result):
    """One master curve from sweeps at several temperatures.

    Attributes
    ----------
    reference_C : float
    steps : tuple of Step
        By temperature, ascending.
    vertical : str
        "none", "rho-T" or "free".
    laws : mapping of str to LawFit
        "arrhenius" and, with three temperatures or more, "wlf".
    law : LawFit
        The preferred one.
    superposition : Superposition
    fit : ShiftFit
    branching : tuple
        Flags set by `mwdlink.decisions.branching`; None until it has looked.
    warnings : tuple of Caution
    """

    command: ClassVar[str] = "master"
    main_table: ClassVar[str] = "shifts.csv"

    reference_C: float
    steps: tuple[Step, ...]
    vertical: str
    laws: dict[str, LawFit]
    law: LawFit
    superposition: Superposition
    fit: ShiftFit
    branching: tuple[Any, ...] | None = None
    warnings: tuple[Caution, ...] = ()

    # -- the curve ----------------------------------------------------------------------------
    def master_sweep(self) -> Sweep:
        """The master curve as one sweep at the reference temperature, ready for `invert`."""
        parts = [s.sweep.shifted(s.factor, s.b_T) for s in self.steps]
        named: dict[str, Any] = {
            "temperature_C": self.reference_C,
            "label": "master curve",
            "warnings": (),
        }
        if all(p.sigma_storage is not None and p.sigma_loss is not None for p in parts):
            named["sigma_storage"] = np.concatenate([p.sigma_storage for p in parts])
            named["sigma_loss"] = np.concatenate([p.sigma_loss for p in parts])
        sweep = Sweep.from_arrays(
            np.concatenate([p.omega for p in parts]),
            np.concatenate([p.storage for p in parts]),
            np.concatenate([p.loss for p in parts]),
            **named,
        )
        # the parts interleave by construction: that they were put in order is no news
        quiet = tuple(w for w in sweep.warnings if w.code not in ("points_sorted", "points_merged"))
        return sweep.with_(warnings=quiet)

    def with_branching(self, flags: Sequence[Any], warnings: Sequence[Caution] = ()) -> Master:
        """A copy that carries branching flags."""
        return replace(
            self, branching=tuple(flags), warnings=merge_cautions(self.warnings, warnings)
        )

    # -- output -------------------------------------------------------------------------------
    def payload(self) -> dict[str, Any]:
        return {
            "reference_C": self.reference_C,
            "vertical": self.vertical,
            "shift": {"kind": self.law.kind, **self.law.constants},
            "laws": {k: v.to_dict() for k, v in self.laws.items()},
            "superposition": self.superposition.to_dict(),
            "branching": {
                "flags": [f.to_dict() for f in self.branching or ()],
                "assessed": self.branching is not None,
            },
            "shifts": [
                {
                    "temperature_C": s.temperature_C,
                    "a_T": s.a_T,
                    "b_T": s.b_T,
                    "b_T_free": s.b_T_free,
                    "residual": s.residual,
                    "overlap_decades": s.overlap_decades,
                    "points": len(s.sweep),
                }
                for s in self.steps
            ],
        }

    def tables(self) -> dict[str, Any]:
        return {
            "master.csv": self._master_table(),
            "shifts.csv": self._shift_table(),
            "bands.csv": self._band_table(),
            "phase_angle.csv": self.phase_angle_table(),
        }

    def _master_table(self) -> Any:
        import pandas as pd

        rows = []
        for s, model in zip(self.steps, self.fit.model, strict=True):
            lift = s.b_T
            rows.append(
                pd.DataFrame(
                    {
                        "omega [rad/s]": s.sweep.omega * s.factor,
                        "G' [Pa]": s.sweep.storage * lift,
                        "G'' [Pa]": s.sweep.loss * lift,
                        "G' fit [Pa]": np.exp(model[0]) * lift,
                        "G'' fit [Pa]": np.exp(model[1]) * lift,
                        # the curve's temperature, so that the table reads back as one sweep
                        "T [C]": self.reference_C,
                        "measured at [C]": s.temperature_C,
                    }
                )
            )
        frame = pd.concat(rows, ignore_index=True)
        return frame.sort_values("omega [rad/s]", kind="stable", ignore_index=True)

    def _shift_table(self) -> Any:
        import pandas as pd

        T = np.array([s.temperature_C for s in self.steps])
        table: dict[str, Any] = {
            "T [C]": T,
            "a_T [-]": [s.a_T.value for s in self.steps],
            "a_T low [-]": [s.a_T.low for s in self.steps],
            "a_T high [-]": [s.a_T.high for s in self.steps],
            "log10 a_T [-]": [np.log10(s.factor) for s in self.steps],
            "b_T [-]": [s.b_T for s in self.steps],
            "b_T free [-]": [s.b_T_free.value for s in self.steps],
            "b_T free low [-]": [s.b_T_free.low for s in self.steps],
            "b_T free high [-]": [s.b_T_free.high for s in self.steps],
        }
        for name, law in self.laws.items():
            title = {"wlf": "WLF", "arrhenius": "Arrhenius"}[name]
            table[f"a_T {title} [-]"] = 10.0 ** law.log10_factor(T)
        table["residual [-]"] = [s.residual for s in self.steps]
        table["overlap [decades]"] = [s.overlap_decades for s in self.steps]
        table["points"] = [len(s.sweep) for s in self.steps]
        return pd.DataFrame(table)

    def _band_table(self) -> Any:
        import pandas as pd

        return pd.DataFrame(
            {
                "omega low [rad/s]": [b.low for b in self.superposition.bands],
                "omega high [rad/s]": [b.high for b in self.superposition.bands],
                "residual [-]": [b.residual for b in self.superposition.bands],
                "limit [-]": [b.limit for b in self.superposition.bands],
                "points": [b.points for b in self.superposition.bands],
            }
        )

    def phase_angle_table(self) -> Any:
        """Phase angle against |G*| of every temperature: no shift in frequency enters."""
        import pandas as pd

        return pd.concat(
            [
                pd.DataFrame(
                    {
                        "T [C]": s.temperature_C,
                        "|G*| [Pa]": s.sweep.complex_modulus * s.b_T,
                        "delta [deg]": np.degrees(np.arctan(s.sweep.tan_delta)),
                    }
                )
                for s in self.steps
            ],
            ignore_index=True,
        )

    # -- words --------------------------------------------------------------------------------
    def answer(self) -> str:
        T = [s.temperature_C for s in self.steps]
        if misses(self.law):
            law = f"no law follows the shifts (missed by {self.law.residual_decades:.2g} decades)"
        else:
            law = f"the shifts follow {law_text(self.law)}"
        return (
            f"{len(T)} temperatures from {T[0]:.4g} to {T[-1]:.4g} C make one master curve at "
            f"{self.reference_C:.4g} C; {law}. {self.superposition.text()}"
        )

    def paragraph(self) -> str:
        text = self.answer()
        if "wlf" in self.laws:
            other = self.laws["wlf" if self.law.kind == "arrhenius" else "arrhenius"]
            text += (
                f" The other law, {law_text(other)}, misses the shifts by "
                f"{other.residual_decades:.3f} decades (this one by "
                f"{self.law.residual_decades:.3f})."
            )
        treatment = {
            "none": "Moduli were not shifted vertically.",
            "rho-T": "Moduli were shifted by density times absolute temperature.",
            "free": "Vertical factors were fitted freely.",
        }[self.vertical]
        return f"{text} {treatment}"

    def cannot_say(self) -> tuple[str, ...]:
        T = [s.temperature_C for s in self.steps]
        out = [
            f"Outside {T[0]:.4g} to {T[-1]:.4g} C the shift law is extrapolated.",
            "That curves superpose does not prove linear chains, and a failure does not prove "
            "branching: filler, gel, a second phase or a sample that changes do it too.",
        ]
        if len(T) < 4:
            out.append(f"With {len(T)} temperatures Arrhenius and WLF can hardly be told apart.")
        return tuple(out)


def make_master(
    sweeps: Sequence[Sweep],
    reference_C: float,
    *,
    vertical: str = "none",
    polymer: Any = None,
    same_temperature: float = 1.0,
    noise: float | None = None,
    members: int = 200,
    seed: int = 0,
    level: float = LEVEL,
) -> Master:
    """One master curve from sweeps at several temperatures.

    Parameters
    ----------
    sweeps : sequence of Sweep
        Each with its temperature; two temperatures or more.
    reference_C : float
        Temperature of the master curve [C]; measured or not.
    vertical : str
        "none" (default), "rho-T" (density times absolute temperature; density from `polymer`, else
        constant) or "free" (fitted).
    polymer : Polymer, optional
        For the density of "rho-T".
    same_temperature : float
        Steps within this are one temperature [K].
    noise : float, optional
        Relative noise [-]; default columns, else estimated and pooled over the sweeps.
    members : int
        Perturbed shifts behind the intervals; 0 gives none.
    seed : int
    level : float
        Probability of the intervals.

    Returns
    -------
    Master
        Horizontal factors multiply the frequency, vertical ones the moduli: reduced omega is
        a_T omega, reduced G is b_T G, both one at the reference.

    Raises
    ------
    InputError
        Fewer than two temperatures, a sweep without one, fewer than four points at one, no overlap
        between neighbours, an unknown `vertical`.
    NotConverged
    """
    if vertical not in VERTICALS:
        raise InputError(
            f"vertical shift {vertical!r} is unknown.", remedy=f"Choose {', '.join(VERTICALS)}."
        )
    groups, notes = group_temperatures(sweeps, same_temperature)
    T = np.array([t for t, _ in groups])
    parts = [s for _, s in groups]
    sigma, notes_noise = pooled_noise(parts, noise)
    curves = [_curve(p, s) for p, s in zip(parts, sigma, strict=True)]
    pivot = int(np.argmin(np.abs(T - reference_C)))
    fixed = _rho_T(T, reference_C, polymer) if vertical == "rho-T" else np.zeros(T.size)
    names = [f"{t:.4g} C" for t in T]
    fit = fit_shifts(curves, pivot, vertical=fixed, free_vertical=vertical == "free", names=names)
    free = fit if vertical == "free" else fit_shifts(curves, pivot, free_vertical=True, start=fit)
    # where the curves do not superpose, the misfit and not the noise limits the shifts
    scale = max(1.0, fit.chi2_per_point)
    _check_determined(scale * np.diag(fit.covariance), names)
    rng = np.random.default_rng(np.random.SeedSequence(seed))
    y = fit.log_shift / LN10
    laws, draws = fit_laws(
        T, y, fit.covariance * scale / LN10**2, pivot, reference_C,
        members=members, rng=rng, level=level,
    )  # fmt: skip
    law = preferred(laws)
    to_reference, drawn = _reference_offset(law, float(T[pivot]), members)
    y = y + to_reference
    draws = draws + drawn[:, None]
    reduced = [p.omega * 10.0**a for p, a in zip(parts, y, strict=True)]
    b = np.exp(fit.log_vertical)
    verdict, overlap = judge(
        reduced,
        fit,
        sigma,
        [p.complex_modulus * f for p, f in zip(parts, b, strict=True)],
        [np.arctan(p.tan_delta) for p in parts],
    )
    free_scale = np.sqrt(max(1.0, free.chi2_per_point))
    steps = tuple(
        Step(
            float(T[k]),
            parts[k],
            _factor(y[k], draws[:, k], level),
            float(b[k]),
            _free_factor(free, k, free_scale, level, members > 0),
            _rms(fit.residual[k][:, overlap[k]]),
            _overlap(reduced, k, pivot),
        )
        for k in range(T.size)
    )
    warnings = merge_cautions(
        *(p.warnings for p in parts),
        notes,
        notes_noise,
        master_cautions(T, reference_C, same_temperature, steps, vertical, fixed, free, free_scale,
                  verdict, polymer),
        shift_cautions(T, y, law),
    )  # fmt: skip
    return Master(float(reference_C), steps, vertical, laws, law, verdict, fit, None, warnings)


def _check_determined(variance: np.ndarray, names: list[str]) -> None:
    """Refuse shifts the data leave open by a decade or more: they would be no answer.

    A variance below zero is one too large to be computed.

    Raises
    ------
    InputError
    """
    variance = np.where(variance < 0, np.inf, variance)
    k = int(np.argmax(variance))
    if not variance[k] < LN10**2:
        raise InputError(
            f"the shift of the sweep at {names[k]} is not determined by the data.",
            remedy="Its curve is too noisy or too featureless where it overlaps the others: give "
            "more points or a wider range, or leave this temperature out.",
        )


def _curve(sweep: Sweep, sigma: np.ndarray) -> Curve:
    x, up, out = (readonly(np.log(y)) for y in (sweep.omega, sweep.storage, sweep.loss))
    return Curve(x, up, out, readonly(sigma[0]), readonly(sigma[1]))


def _rho_T(T: np.ndarray, reference_C: float, polymer: Any) -> np.ndarray:
    """ln b_T = ln(rho_0 T_0/(rho T))."""
    kelvin, kelvin_0 = T + 273.15, reference_C + 273.15
    ratio = kelvin_0 / kelvin
    if polymer is not None:
        ratio = ratio * np.array([polymer.density(reference_C) / polymer.density(t) for t in T])
    return np.log(ratio)


def _reference_offset(law: LawFit, pivot_C: float, members: int) -> tuple[float, np.ndarray]:
    """log10 a_T of the pivot relative to the reference, by the law; nothing where they agree."""
    if abs(pivot_C - law.reference_C) < 1e-9:
        return 0.0, np.zeros(members)
    drawn = np.array([float(law.log10_factor(pivot_C, c)) for c in law.members])
    value = float(law.log10_factor(pivot_C))
    return value, np.where(np.isfinite(drawn), drawn, value) if members else np.zeros(0)


def _factor(y: float, draws: np.ndarray, level: float) -> Uncertain:
    value = float(10.0**y)
    if draws.size == 0:
        return Uncertain(value, level=level)
    return Uncertain.from_samples(10.0**draws, value, level=level)


def _free_factor(free: ShiftFit, k: int, scale: float, level: float, wanted: bool) -> Uncertain:
    value = float(np.exp(free.log_vertical[k]))
    if not wanted:
        return Uncertain(value, level=level)
    half = 1.6449 * free.vertical_sigma[k] * scale
    return Uncertain(value, value * float(np.exp(-half)), value * float(np.exp(half)), level)


def _rms(x: np.ndarray) -> float | None:
    return float(np.sqrt(np.mean(x**2))) if x.size else None


def _overlap(reduced: list[np.ndarray], k: int, pivot: int) -> float:
    """Decades shared with the neighbour towards the pivot (at the pivot: the better neighbour)."""
    if k == pivot:
        near = [j for j in (k - 1, k + 1) if 0 <= j < len(reduced)]
    else:
        near = [k + 1 if k < pivot else k - 1]
    best = 0.0
    for j in near:
        low = max(reduced[k][0], reduced[j][0])
        high = min(reduced[k][-1], reduced[j][-1])
        best = max(best, float(np.log10(high / low)) if high > low else 0.0)
    return best
