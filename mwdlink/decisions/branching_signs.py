"""The signs of long-chain branching, one function each.

Every function returns a `Flag`: the number found, what a linear melt shows, where that is known
from, and what else could cause a departure.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from mwdlink.errors import ModelError
from mwdlink.measurement.master import Master
from mwdlink.measurement.spectrum_fit import SpectrumFit
from mwdlink.quantity import Uncertain

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
        "long linear chains; crosslinking in the test; readings near the torque floor; the "
        "entanglement plateau itself, in a window that does not leave it"
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


def superposition(master: Master) -> Flag:
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


def activation_energy(master: Master, polymer: Any) -> Flag:
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
    _, found_low, found_high = _ends(found)
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


def zero_shear_viscosity(
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
    middle, low, high = (float(np.log10(x / line)) for x in _ends(eta0))
    value = Uncertain(middle, low, high, eta0.level, eta0.status)
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
        f"The zero-shear viscosity is {bound}{10**middle:.2g} times that of linear "
        f"{polymer.name} of Mw {Mw:.3g} g/mol ({bound}{middle:+.2f} decades, linear melts lie "
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


def index_from_intrinsic(
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
    middle, low, high = (branching_index(e * factor, intrinsic) for e in _ends(eta0))
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


def curve_shape(
    spectrum: SpectrumFit, plateau: float | None = None
) -> tuple[dict[str, np.ndarray], list[Flag]]:
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
    return curve, [_dip(delta), _low_end(np.log(omega), np.log(storage), modulus[0], plateau)]


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
    middle, low, _ = _ends(value)
    state = "departs" if low > 1.0 else "in line"
    text = (
        f"The phase angle against |G*| passes a dip of {middle:.1f} degrees before it falls "
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


def _low_end(
    x: np.ndarray, storage: np.ndarray, modulus: np.ndarray, plateau: float | None
) -> Flag:
    """Slope of ln G' at the low end less the steepest slope above it, in the flow region.

    Towards low frequency the slope of a melt that is to flow rises towards two; where it falls
    again, something slower is there. The flow region lies below a third of the plateau modulus
    (without one, below a tenth of the largest |G*|).
    """
    top = 0.1 * float(modulus.max()) if plateau is None else 0.3 * plateau
    flow = modulus < top
    # at least the lowest decade: a window that ends in the plateau has no flow region
    flow |= x < x[0] + np.log(10.0)
    end = x < x[0] + 0.25 * np.log(10.0)
    bends, slopes = [], []
    for y in storage:
        slope = np.gradient(y, x)
        slopes.append(float(slope[end].mean()))
        bends.append(slopes[-1] - float(slope[flow].max()))
    value = _sampled(np.array(bends))
    middle, _, high = _ends(value)
    state = "departs" if high < -0.1 else "in line"
    at = slopes[0]
    text = (
        f"At the low end the slope of G' falls towards low frequency (by {-middle:.2f} from "
        f"its steepest, to {at:.2f}) instead of rising towards 2: a second, slower process is "
        "there."
        if state == "departs"
        else f"At the low end the slope of G' is {at:.2f} and does not fall towards low frequency: "
        "no second, slower process shows inside the window."
    )
    source = "limit of linear viscoelasticity: G' goes with the square of the frequency [derived]"
    return Flag(
        "low_frequency", state, value, Uncertain(0.0, -0.1, None), "-", source, text,
        OTHER_CAUSES["low_frequency"],
    )  # fmt: skip


def _sampled(samples: np.ndarray) -> Uncertain:
    """Value of the central curve (the first) with the interval of the others."""
    if samples.size == 1:
        return Uncertain(float(samples[0]))
    return Uncertain.from_samples(samples[1:], float(samples[0]), level=LEVEL)


def _ends(q: Uncertain) -> tuple[float, float, float]:
    """Value, low and high; the value where an end is not known."""
    value = float("nan") if q.value is None else q.value
    return value, value if q.low is None else q.low, value if q.high is None else q.high


def _interval(q: Uncertain) -> str:
    return "" if q.low is None or q.high is None else f" ({q.low:.3g} to {q.high:.3g})"
