"""Signs of long-chain branching: numbers with their sources and what else could cause them.

No sign proves branching and none excludes it, so nothing here says yes or no. Each flag carries the
number found, what a linear melt would show, where that is known from, and the rival explanations.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any, ClassVar

import numpy as np

from mwdlink.errors import Caution, ModelError, merge_cautions
from mwdlink.measurement import master as master_curve
from mwdlink.measurement.master import Master
from mwdlink.measurement.spectrum_fit import SpectrumFit, fit_spectrum
from mwdlink.measurement.sweep import Sweep
from mwdlink.quantity import Uncertain
from mwdlink.result import Result

STATES = ("departs", "in line", "cannot judge")
LEVEL = 0.9

# How far quantities of linear melts scatter, where the source says no more.
ENERGY_TOLERANCE = 0.10  # relative; laboratories differ by this on one polymer (common practice)
DISPERSITY_SCATTER = 0.13  # decades of eta0 at fixed Mw (Stadler et al. 2006, secondary)
MW_ERROR = 0.05  # relative, of a molar mass by GPC with light scattering (common practice)
INTRINSIC_ERROR = 0.05  # relative, of an intrinsic viscosity (common practice)
# eta0 over the narrow-fraction law of a log-normal melt, by dispersity: double reptation with an
# exponential kernel and the exponent 3.6 [derived]
BROAD = (np.array([1.0, 1.5, 2.0, 3.0, 4.0, 8.0, 16.0]),
         np.array([1.0, 1.04, 1.32, 2.0, 2.75, 6.3, 15.0]))  # fmt: skip
LCBI_TEMPERATURE = 190.0
LCBI_POLYMERS = ("hdpe", "pe", "polyethylene", "lldpe", "ldpe")

OTHER_CAUSES = {
    "superposition": (
        "a second phase, filler or gel with its own temperature dependence; a sample that degraded "
        "or crosslinked from step to step; a gap or filling that changed with temperature"
    ),
    "activation_energy": (
        "comonomer or side groups, which raise the flow activation energy without any branch point "
        "in the chain's backbone; a sample that degraded (raises the apparent value when measured "
        "upwards) or crosslinked (lowers it); vertical shifts left out"
    ),
    "zero_shear_viscosity": (
        "a broad distribution or a tail of long chains; a molar mass that is not absolute; filler, "
        "gel or a second phase, which lift it; degradation, which lowers it. Slight branching "
        "raises and high branching lowers it (Gabriel & Muenstedt 2002, published), so the sign "
        "proves nothing"
    ),
    "branching_index": (
        "a broad distribution or a tail of long chains; an error of the intrinsic viscosity (5 % "
        "moves the index by 0.05); crosslinking or degradation in the rheometer"
    ),
    "phase_angle": (
        "two populations of linear chains (a bimodal grade); filler, gel or a second phase; "
        "crosslinking in the test"
    ),
    "low_frequency": (
        "filler, gel or a second phase (G' levels off, tan delta flattens); a small amount of very "
        "long linear chains; crosslinking in the test; readings near the torque floor"
    ),
}


@dataclass(frozen=True)
class Flag:
    """One sign.

    Attributes
    ----------
    code : str
        "superposition", "activation_energy", "zero_shear_viscosity", "branching_index",
        "phase_angle" or "low_frequency".
    state : str
        "departs" from a linear melt, "in line" with one, or "cannot judge".
    value : Uncertain
        The number found, in `unit`.
    expected : Uncertain
        What a linear melt shows, in the same unit.
    unit : str
    source : str
        Where the expectation comes from, with its flag.
    text : str
        The sign in one or two sentences.
    other_causes : str
        What else could cause it.
    """

    code: str
    state: str
    value: Uncertain
    expected: Uncertain
    unit: str
    source: str
    text: str
    other_causes: str

    def to_dict(self) -> dict[str, Any]:
        return {
            "code": self.code,
            "state": self.state,
            "value": self.value,
            "expected": self.expected,
            "unit": self.unit,
            "source": self.source,
            "text": self.text,
            "other_causes": self.other_causes,
        }


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


def branching_index(eta0_Pa_s: float, intrinsic_viscosity_dL_per_g: float) -> float:
    """LCBI = eta0^0.179/(4.8 [eta]) - 1, eta0 in poise at 190 C: zero for linear polyethylene.

    Parameters
    ----------
    eta0_Pa_s : float
        Zero-shear viscosity at 190 C [Pa s].
    intrinsic_viscosity_dL_per_g : float
        In trichlorobenzene at 135 C [dL/g].

    References
    ----------
    .. [1] Shroff & Mavridis, Macromolecules 32 (1999) 8454 (published).

    Examples
    --------
    >>> round(branching_index(6160.0, 1.5), 3)
    0.0
    """
    return (10.0 * eta0_Pa_s) ** 0.179 / (4.8 * intrinsic_viscosity_dL_per_g) - 1.0


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
        flags.append(_superposition(master))
        flags.append(_activation_energy(master, polymer))
    temperature = None
    if spectrum is not None:
        temperature = spectrum.sweep.temperature_C
        if Mw_g_per_mol is not None:
            flags.append(
                _zero_shear(spectrum, polymer, temperature, Mw_g_per_mol, Mw_error, dispersity)
            )
        if intrinsic_viscosity_dL_per_g is not None:
            flags.append(
                _index(
                    spectrum, master, polymer, temperature,
                    intrinsic_viscosity_dL_per_g, intrinsic_error,
                )
            )  # fmt: skip
        curve, shape = _shape(spectrum)
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


# -- one function a sign ------------------------------------------------------------------------


def _superposition(master: Master) -> Flag:
    s = master.superposition
    value = Uncertain(s.low_frequency_residual)
    limit = _low_limit(master)
    source = "Wood-Adams & Costeux 2001 (published): superposition fails, worst at low frequency"
    state = "in line" if s.passed else "departs"
    where = "at the low end too" if not s.low_frequency_passed else "not at the low end"
    if s.passed:
        text = (
            f"The temperatures superpose to within {100 * s.residual:.1f} % (at the low end "
            f"{100 * s.low_frequency_residual:.1f} %), as linear melts do; little or very regular "
            "branching may superpose too."
        )
    else:
        text = (
            f"The temperatures do not superpose: {100 * s.residual:.1f} % off one curve, {where} "
            f"({100 * s.low_frequency_residual:.1f} %)."
        )
    return Flag(
        "superposition", state, value, Uncertain(limit, 0.0, limit), "-", source, text,
        OTHER_CAUSES["superposition"],
    )  # fmt: skip


def _low_limit(master: Master) -> float:
    bands = master.superposition.bands
    return bands[0].limit if bands else master.superposition.noise


def _activation_energy(master: Master, polymer: Any) -> Flag:
    found = master.law.activation_energy_interval(master.reference_C)
    law = None if polymer is None else polymer.shift
    other = OTHER_CAUSES["activation_energy"]
    unit = "kJ/mol"
    if law is None:
        text = (
            f"The flow activation energy is {found.value:.3g} kJ/mol at {master.reference_C:g} C; "
            "without a polymer card with a shift law there is nothing linear to compare it with."
        )
        empty = Uncertain(None, status="assumed")
        return Flag("activation_energy", "cannot judge", found, empty, unit, "-", text, other)
    linear = law.activation_energy(master.reference_C) / 1000.0
    low, high = linear * (1 - ENERGY_TOLERANCE), linear * (1 + ENERGY_TOLERANCE)
    found_low = found.value if found.low is None else found.low
    found_high = found.value if found.high is None else found.high
    state = "departs" if found_low > high or found_high < low else "in line"
    source = (
        f"the card of {polymer.name} ({_shift_status(polymer)}); half-width of 10 % and its "
        "rise with branching by common practice"
    )
    side = "above" if found_low > high else "below" if found_high < low else "as"
    text = (
        f"The flow activation energy is {found.value:.3g} kJ/mol"
        f"{_interval(found)} at {master.reference_C:g} C, {side} the {linear:.3g} kJ/mol of the "
        f"linear {polymer.name}."
    )
    return Flag(
        "activation_energy", state, found, Uncertain(linear, low, high), unit, source, text, other
    )


def _shift_status(polymer: Any) -> str:
    for name in ("shift.energy_kJ_per_mol", "shift.c1"):
        constant = polymer.constants.get(name)
        if constant is not None:
            return f"{constant.status}: {constant.source}"
    return "status unknown"


def _zero_shear(
    spectrum: SpectrumFit,
    polymer: Any,
    T: float | None,
    Mw: float,
    Mw_error: float,
    dispersity: float | None,
) -> Flag:
    eta0 = spectrum.bands["eta0_Pa_s"]
    other, unit = OTHER_CAUSES["zero_shear_viscosity"], "decades"
    empty = Uncertain(0.0)
    try:
        melt = None if polymer is None else polymer.melt(T)
    except ModelError:
        melt = None
    if melt is None:
        text = "Without a polymer card at this temperature there is no linear viscosity line."
        none = Uncertain(None, status="assumed")
        return Flag("zero_shear_viscosity", "cannot judge", none, empty, unit, "-", text, other)
    line = float(melt.zero_shear_law(Mw))
    half = 1.645 * float(
        np.sqrt(
            melt.scatter_decades**2
            + DISPERSITY_SCATTER**2
            + (melt.law_exponent * Mw_error / np.log(10)) ** 2
        )
    )
    # double reptation puts a broad linear melt above the narrow-fraction line; measurements on
    # polyethylene say it stays: both are allowed for
    lift = 0.0
    model_text = "; dispersity not given"
    if dispersity is not None:
        lift = float(np.interp(np.log(dispersity), np.log(BROAD[0]), np.log10(BROAD[1])))
        model_text = (
            f"; a log-normal melt of dispersity {dispersity:.3g} may lie {lift:.2f} decades above "
            "it by double reptation (derived)"
        )
    ends = (float(eta0.value or 0.0), eta0.low or eta0.value, eta0.high or eta0.value)
    log_ends = [float(np.log10(x / line)) for x in ends]
    value = Uncertain(log_ends[0], log_ends[1], log_ends[2], eta0.level, eta0.status)
    low = value.value if value.low is None else value.low
    high = value.value if value.high is None else value.high
    if eta0.status == "lower_bound":
        state = "departs" if low > half + lift else "cannot judge"
    else:
        state = "departs" if low > half + lift or high < -half else "in line"
    bound = "at least " if eta0.status == "lower_bound" else ""
    source = (
        f"the viscosity law of {polymer.name}, scatter {melt.scatter_decades:.2g} decades; at "
        "fixed Mw linear polyethylene does not depend on dispersity within 0.13 decades (Stadler "
        f"et al., Rheol. Acta 45 (2006) 755, secondary); Mw to {100 * Mw_error:.0f} %{model_text}"
    )
    text = (
        f"The zero-shear viscosity is {bound}{10**value.value:.2g} times that of linear "
        f"{polymer.name} of Mw {Mw:.3g} g/mol ({bound}{value.value:+.2f} decades, linear melts lie "
        f"within {-half:+.2f} and {half + lift:+.2f})."
    )
    if state == "cannot judge":
        text += " The window does not reach terminal flow, so it may lie higher."
    return Flag(
        "zero_shear_viscosity",
        state,
        value,
        Uncertain(0.0, -half, half + lift),
        unit,
        source,
        text,
        other,
    )


def _index(
    spectrum: SpectrumFit,
    master: Master | None,
    polymer: Any,
    T: float | None,
    intrinsic: float,
    error: float,
) -> Flag:
    other = OTHER_CAUSES["branching_index"]
    source = "Shroff & Mavridis, Macromolecules 32 (1999) 8454 (published): zero for linear chains"
    linear = Uncertain(0.0, -error, error)
    none = Uncertain(None, status="assumed")
    if polymer is not None and polymer.name not in LCBI_POLYMERS:
        text = f"The branching index from [eta] was published for polyethylene, not {polymer.name}."
        return Flag("branching_index", "cannot judge", none, linear, "-", source, text, other)
    eta0 = spectrum.bands["eta0_Pa_s"]
    factor = 1.0
    if T is not None and abs(T - LCBI_TEMPERATURE) > 0.5:
        carried = _to_190(master, polymer, T)
        if carried is None:
            text = "The branching index needs the zero-shear viscosity at 190 C."
            return Flag("branching_index", "cannot judge", none, linear, "-", source, text, other)
        factor = carried
    ends = [eta0.value, eta0.low or eta0.value, eta0.high or eta0.value]
    middle, low, high = (branching_index(float(e) * factor, intrinsic) for e in ends)
    # the intrinsic viscosity's own error, 90 %
    spread = 1.645 * error * (1.0 + middle)
    low = middle - float(np.hypot(middle - low, spread))
    high = middle + float(np.hypot(high - middle, spread))
    value = Uncertain(middle, low, high, LEVEL, eta0.status)
    if eta0.status == "lower_bound":
        state = "departs" if low > 0 else "cannot judge"
    else:
        state = "departs" if low > 0 else "in line"
    bound = "at least " if eta0.status == "lower_bound" else ""
    text = (
        f"The branching index from zero-shear viscosity and [eta] is {bound}{middle:.3f} "
        f"({low:.3f} to {high:.3f}); linear polyethylene gives zero."
    )
    return Flag("branching_index", state, value, linear, "-", source, text, other)


def _to_190(master: Master | None, polymer: Any, T: float) -> float | None:
    """Factor on a viscosity from T to 190 C: by the melt's own shifts, else by the card's."""
    if master is not None:
        law = master.law
        return float(10.0 ** (law.log10_factor(LCBI_TEMPERATURE) - law.log10_factor(T)))
    if polymer is not None and polymer.shift is not None:
        return float(polymer.shift.factor(LCBI_TEMPERATURE, T))
    return None


def _shape(spectrum: SpectrumFit) -> tuple[dict[str, np.ndarray], list[Flag]]:
    """Phase angle against |G*| of the fitted curve, and the two signs its shape can show."""
    c, sweep = spectrum.continuous, spectrum.sweep
    omega = np.geomspace(sweep.omega[0], sweep.omega[-1], 120)
    x = np.multiply.outer(omega, c.tau)
    up, out = x * x / (1 + x * x) * c.step, x / (1 + x * x) * c.step
    H = np.vstack([c.H, c.members]) if c.members.size else c.H[None, :]
    storage, loss = H @ up.T, H @ out.T
    delta = np.degrees(np.arctan2(loss, storage))
    modulus = np.hypot(storage, loss)
    low, high = np.quantile(delta, [0.05, 0.95], axis=0)
    curve = {
        "omega [rad/s]": omega,
        "|G*| [Pa]": modulus[0],
        "delta [deg]": delta[0],
        "delta low [deg]": np.minimum(low, delta[0]),
        "delta high [deg]": np.maximum(high, delta[0]),
    }
    return curve, [_dip(delta), _low_end(np.log(omega), np.log(storage))]


def _dip(delta: np.ndarray) -> Flag:
    """How far the phase angle rises again with rising |G*|: in linear melts it only falls.

    Counted only above the plateau region (angles over 30 degrees), where narrow linear melts too
    pass a minimum.
    """
    dips = np.array([_rise_above(d) for d in delta])
    value = _sampled(dips)
    source = (
        "Trinkle & Friedrich, Rheol. Acta 40 (2001) 322 (published): phase angle against |G*|; "
        "that a dip is the mark of branching is recalled"
    )
    # a hundredth of a right angle is not a dip
    state = "departs" if (value.low if value.low is not None else value.value) > 1.0 else "in line"
    text = (
        f"The phase angle against |G*| passes a dip of {value.value:.1f} degrees before it falls "
        "to the plateau; linear melts of one population fall all the way."
        if state == "departs"
        else "The phase angle falls with rising |G*| without a dip, as in linear melts of one "
        "population."
    )
    expected = Uncertain(0.0, 0.0, 1.0)
    return Flag(
        "phase_angle", state, value, expected, "deg", source, text, OTHER_CAUSES["phase_angle"]
    )


def _rise_above(delta: np.ndarray) -> float:
    """Largest rise of the angle towards higher |G*| from a minimum above 30 degrees [deg]."""
    lowest_so_far = np.minimum.accumulate(delta)
    rise = np.where(lowest_so_far > 30.0, delta - lowest_so_far, 0.0)
    return float(rise.max())


def _low_end(x: np.ndarray, storage: np.ndarray) -> Flag:
    """Bend of ln G' against ln omega over the lowest decade: slope at the end less slope above it.

    Towards low frequency the slope of a melt that is to flow rises towards two; where it falls
    again, something slower is there.
    """
    lowest = x < x[0] + np.log(10.0)
    bends, slopes = [], []
    for y in storage:
        slope = np.gradient(y, x)[lowest]
        half = slope.size // 2
        bends.append(float(slope[:half].mean() - slope[half:].mean()))
        slopes.append(float(slope[:half].mean()))
    value = _sampled(np.array(bends))
    high = value.high if value.high is not None else value.value
    state = "departs" if high < -0.05 else "in line"
    at = slopes[0]
    text = (
        f"At the low end the slope of G' falls towards low frequency (by {-value.value:.2f} within "
        f"the lowest decade, to {at:.2f}) instead of rising towards 2: a second, slower process is "
        "there."
        if state == "departs"
        else f"At the low end the slope of G' is {at:.2f} and does not fall towards low frequency: "
        "no second, slower process shows inside the window."
    )
    source = "limit of linear viscoelasticity: G' goes with the square of the frequency [derived]"
    return Flag(
        "low_frequency", state, value, Uncertain(0.0, -0.05, None), "-", source, text,
        OTHER_CAUSES["low_frequency"],
    )  # fmt: skip


def _sampled(samples: np.ndarray) -> Uncertain:
    """Value of the central curve (the first) with the interval of the others."""
    if samples.size == 1:
        return Uncertain(float(samples[0]))
    return Uncertain.from_samples(samples[1:], float(samples[0]), level=LEVEL)


def _interval(q: Uncertain) -> str:
    return "" if q.low is None or q.high is None else f" ({q.low:.3g} to {q.high:.3g})"


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
