"""Where the model itself is out of its depth: said with every prediction, never silent."""

from __future__ import annotations

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.errors import Caution
from mwdlink.relaxation.mixing import Model

# published: Park and Larson, Macromolecules 37 (2004) 597
DILATED_TUBE_GR = 0.064


def struglinski_graessley(m_long: float, m_short: float, entanglement: float) -> float:
    """Gr = M_long M_e^2 / M_short^3, constraint release against reptation [-].

    M_e as printed by the source one compares with (0.8 of 1000 rho R T/G_N in many tables).
    """
    return m_long * entanglement**2 / m_short**3


def cautions(distribution: Distribution, melt: Melt, model: Model) -> tuple[Caution, ...]:
    """Validity warnings of a prediction from a distribution."""
    out: list[Caution] = []
    if melt.law_range is not None:
        low, high = melt.law_range
        above, below = distribution.weight_above(high), distribution.weight_below(low)
        if above > 0.01:
            out.append(
                Caution(
                    "law_range_above",
                    f"{100 * above:.2g} % of the weight is above {high:.2g} g/mol, beyond the "
                    "range the viscosity law was fitted on; its times are extrapolated.",
                )
            )
        if below > 0.25:
            out.append(
                Caution(
                    "law_range_below",
                    f"{100 * below:.2g} % of the weight is below {low:.2g} g/mol, beyond the range "
                    "the viscosity law was fitted on.",
                )
            )
    if melt.critical_molar_mass is not None:
        short = distribution.weight_below(melt.critical_molar_mass)
        if short > 0.05:
            out.append(
                Caution(
                    "short_chains",
                    f"{100 * short:.2g} % of the weight is below the critical molar mass: short "
                    "chains dilute the network and may shift the friction itself (Schausberger et "
                    "al., published), which is not in the model.",
                )
            )
    gr = _gr_of(distribution, melt)
    if gr is not None and gr > DILATED_TUBE_GR:
        out.append(
            Caution(
                "dilated_tube",
                f"Gr = {gr:.2g} is above {DILATED_TUBE_GR}: the long chains reptate in a tube "
                "dilated by the short ones (Park and Larson 2004, published), and double reptation "
                "misplaces their relaxation.",
            )
        )
    if model.kernel != "fluctuation" and not model.rouse:
        out.append(
            Caution(
                "rouse_off",
                "The Rouse part is off: moduli are too low at high frequency, and chains too short "
                "to entangle are counted as network.",
            )
        )
    return tuple(out)


def frequency_cautions(omega_max: float, melt: Melt) -> tuple[Caution, ...]:
    """Caution where frequencies pass the reach of the model."""
    if omega_max * melt.equilibration_time > 1.0:
        return (
            Caution(
                "glassy_modes_missing",
                f"Frequencies above {1 / melt.equilibration_time:.2g} rad/s are beyond 1/tau_e: "
                "glassy modes are not in the model.",
            ),
        )
    return ()


def _gr_of(distribution: Distribution, melt: Melt) -> float | None:
    """Gr of a clearly two-part distribution: a valley between two peaks decides the parts."""
    w = distribution.density
    x = np.log10(distribution.molar_mass)
    if w.size < 20:
        return None
    inner = w[1:-1]
    tops = np.flatnonzero((inner > w[:-2]) & (inner >= w[2:]) & (inner > 0.03 * w.max())) + 1
    if tops.size < 2:
        return None
    first, last = tops[0], tops[-1]
    valley = w[first : last + 1].min()
    if valley > 0.7 * min(w[first], w[last]) or x[last] - x[first] < 0.5:
        return None
    return struglinski_graessley(
        float(distribution.molar_mass[last]),
        float(distribution.molar_mass[first]),
        0.8 * melt.entanglement_molar_mass,
    )
