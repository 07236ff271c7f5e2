"""Signs of long-chain branching: numbers with their sources and what else could cause them.

No sign proves branching and none excludes it, so nothing here says yes or no. Each flag carries the
number found, what a linear melt would show, where that is known from, and the rival explanations.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any, ClassVar

import numpy as np

from mwdlink.decisions.branching_signs import (
    INTRINSIC_ERROR,
    MW_ERROR,
    Flag,
    activation_energy,
    branching_index,
    curve_shape,
    index_from_intrinsic,
    superposition,
    zero_shear_viscosity,
)
from mwdlink.errors import Caution, ModelError, merge_cautions
from mwdlink.measurement import master as master_curve
from mwdlink.measurement.master import Master
from mwdlink.measurement.spectrum_fit import SpectrumFit, fit_spectrum
from mwdlink.measurement.sweep import Sweep
from mwdlink.result import Result

__all__ = ["Branching", "Flag", "assess_branching", "branching_index", "make_master"]


@dataclass(frozen=True)
class Branching(Result):
    """All signs that could be looked at.

    Attributes
    ----------
    flags : tuple of Flag
    phase_angle : pandas-ready mapping of str to ndarray
        |G*| [Pa], phase angle [deg] with low and high, of the fitted curve.
    next_steps : tuple of str
        What would tell the explanations apart.
    warnings : tuple of Caution
    """

    command: ClassVar[str] = "branching"
    main_table: ClassVar[str] = "branching.csv"

    flags: tuple[Flag, ...]
    phase_angle: dict[str, np.ndarray]
    next_steps: tuple[str, ...]
    warnings: tuple[Caution, ...] = ()

    @property
    def departing(self) -> tuple[Flag, ...]:
        """The flags that depart from a linear melt."""
        return tuple(f for f in self.flags if f.state == "departs")

    def payload(self) -> dict[str, Any]:
        return {
            "branching": {
                "flags": [f.to_dict() for f in self.flags],
                "next_steps": list(self.next_steps),
            }
        }

    def tables(self) -> dict[str, Any]:
        import pandas as pd

        flags = pd.DataFrame(
            {
                "sign": [f.code for f in self.flags],
                "state": [f.state for f in self.flags],
                "value": [f.value.value for f in self.flags],
                "low": [f.value.low for f in self.flags],
                "high": [f.value.high for f in self.flags],
                "linear": [f.expected.value for f in self.flags],
                "linear low": [f.expected.low for f in self.flags],
                "linear high": [f.expected.high for f in self.flags],
                "unit": [f.unit for f in self.flags],
                "source": [f.source for f in self.flags],
                "other causes": [f.other_causes for f in self.flags],
            }
        )
        return {"branching.csv": flags, "phase_angle_fit.csv": pd.DataFrame(self.phase_angle)}

    def answer(self) -> str:
        seen = [f for f in self.flags if f.state != "cannot judge"]
        if not seen:
            return "None of the signs of long-chain branching could be judged from what was given."
        out = self.departing
        if not out:
            return (
                f"The {len(seen)} signs that could be judged are in line with linear chains; that "
                "does not exclude a little branching."
            )
        names = ", ".join(f.code.replace("_", " ") for f in out)
        return (
            f"{len(out)} of {len(seen)} signs depart from a linear melt ({names}): long-chain "
            "branching is one explanation, and each sign has others."
        )

    def paragraph(self) -> str:
        return " ".join([self.answer(), *(f.text for f in self.flags if f.state != "cannot judge")])

    def cannot_say(self) -> tuple[str, ...]:
        out = ["Rheology alone does not prove long-chain branching, and does not exclude it."]
        out += [f.text for f in self.flags if f.state == "cannot judge"]
        return tuple(out)


def assess_branching(
    *,
    master: Master | None = None,
    sweep: Sweep | None = None,
    spectrum: SpectrumFit | None = None,
    polymer: Any = None,
    Mw_g_per_mol: float | None = None,
    Mw_error: float = MW_ERROR,
    dispersity: float | None = None,
    intrinsic_viscosity_dL_per_g: float | None = None,
    intrinsic_error: float = INTRINSIC_ERROR,
    members: int = 100,
    seed: int = 0,
) -> Branching:
    """Look at every sign of long-chain branching for which there is something to look at.

    Parameters
    ----------
    master : Master, optional
        For superposition, activation energy and the phase angle.
    sweep : Sweep, optional
        Default the master curve's.
    spectrum : SpectrumFit, optional
        Of that sweep, where it is at hand.
    polymer : Polymer, optional
        For the linear activation energy and viscosity law.
    Mw_g_per_mol : float, optional
        Absolute weight-average molar mass [g/mol]; `Mw_error` relative.
    dispersity : float, optional
        Mw/Mn: how far the zero-shear viscosity of a broad linear melt may lie above the line.
    intrinsic_viscosity_dL_per_g : float, optional
        In trichlorobenzene at 135 C [dL/g]; `intrinsic_error` relative.
    members : int
        Perturbed refits behind the intervals of the fitted curve.
    seed : int

    Returns
    -------
    Branching
    """
    if spectrum is None:
        if sweep is None and master is not None:
            sweep = master.master_sweep()
        if sweep is not None:
            spectrum = fit_spectrum(sweep, members=members, seed=seed)
    flags = []
    if master is not None:
        flags.append(superposition(master))
        flags.append(activation_energy(master, polymer))
    temperature = None
    if spectrum is not None:
        temperature = spectrum.sweep.temperature_C
        if Mw_g_per_mol is not None:
            flags.append(
                zero_shear_viscosity(
                    spectrum, polymer, temperature, Mw_g_per_mol, Mw_error, dispersity
                )
            )
        if intrinsic_viscosity_dL_per_g is not None:
            flags.append(
                index_from_intrinsic(
                    spectrum, master, polymer, temperature,
                    intrinsic_viscosity_dL_per_g, intrinsic_error,
                )
            )  # fmt: skip
        curve, shape = curve_shape(spectrum, _plateau(polymer, temperature))
        flags += shape
    else:
        curve = {}
    out = tuple(flags)
    warnings = [
        Caution(f"branching_{f.code}", f"{f.text} Other causes: {f.other_causes}.")
        for f in out
        if f.state == "departs"
    ]
    return Branching(out, curve, _next_steps(out, master), tuple(warnings))


def _plateau(polymer: Any, temperature_C: float | None) -> float | None:
    """Plateau modulus [Pa] where the card can say."""
    if polymer is None:
        return None
    try:
        return float(polymer.melt(temperature_C).plateau_modulus)
    except ModelError:
        return None


def make_master(
    sweeps: Sequence[Sweep],
    reference_C: float,
    *,
    polymer: Any = None,
    Mw_g_per_mol: float | None = None,
    dispersity: float | None = None,
    intrinsic_viscosity_dL_per_g: float | None = None,
    **options: Any,
) -> Master:
    """A master curve with its branching flags: `measurement.master.make_master`, then a look.

    Parameters
    ----------
    sweeps, reference_C, polymer
        And all options of `mwdlink.measurement.master.make_master`.
    Mw_g_per_mol, dispersity, intrinsic_viscosity_dL_per_g : float, optional
        As for `assess_branching`.
    """
    made = master_curve.make_master(sweeps, reference_C, polymer=polymer, **options)
    looked = assess_branching(
        master=made,
        polymer=polymer,
        Mw_g_per_mol=Mw_g_per_mol,
        dispersity=dispersity,
        intrinsic_viscosity_dL_per_g=intrinsic_viscosity_dL_per_g,
        members=min(int(options.get("members", 200)), 100),
        seed=int(options.get("seed", 0)),
    )
    return replace(
        made, branching=looked.flags, warnings=merge_cautions(made.warnings, looked.warnings)
    )


def _next_steps(flags: tuple[Flag, ...], master: Master | None) -> tuple[str, ...]:
    out = []
    seen = {f.code: f.state for f in flags}
    if master is None:
        out.append(
            "Sweeps at two or more temperatures would give the flow activation energy and show "
            "whether the melt superposes."
        )
    if seen.get("branching_index") is None:
        out.append("For polyethylene, [eta] in trichlorobenzene gives a branching index.")
    if seen.get("zero_shear_viscosity") is None:
        out.append("An absolute Mw (light scattering) tells whether eta0 lies on the linear line.")
    if any(s == "departs" for s in seen.values()):
        out.append(
            "A repeat on a fresh, stabilised sample under nitrogen excludes crosslinking and "
            "degradation; a solution filtered for gel and an ash content exclude gel and filler."
        )
    return tuple(out)
