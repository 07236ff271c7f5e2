"""Where the model itself is out of its depth: said with every prediction, never silent."""

from __future__ import annotations

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.errors import Caution
from mwdlink.relaxation.mixing import Model

# published: Park and Larson, Macromolecules 37 (2004) 597
DILATED_TUBE_GR = 0.064
# published: Watanabe et al., Macromolecules 37 (2004) 1937
CONSTRAINT_RELEASE_GR = 0.5
# two peaks count as two parts when this far apart, this high and this deep between them
APART_DECADES = 0.5
LEAST_HEIGHT = 0.03
DEEPEST_VALLEY = 0.7
SMOOTH_DECADES = 0.06


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
    gr = two_part_ratio(distribution, melt)
    if gr is not None and gr > DILATED_TUBE_GR:
        text = (
            f"Gr = {gr:.2g} is above {DILATED_TUBE_GR}: the long chains reptate in a tube "
            "dilated by the short ones (Park and Larson 2004, published), and double reptation "
            "misplaces their relaxation."
        )
        if gr > CONSTRAINT_RELEASE_GR:
            text += (
                f" Above about {CONSTRAINT_RELEASE_GR:g} constraint release rules a dilute long "
                "component altogether (Watanabe et al. 2004, published)."
            )
        out.append(Caution("dilated_tube", text))
    if not model.rouse:
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


def two_part_ratio(distribution: Distribution, melt: Melt) -> float | None:
    """Gr of a clearly two-part distribution, from its two peaks; None for any other.

    The curve is smoothed a little first, so that noise makes no parts.
    """
    if distribution.molar_mass.size < 8:
        return _ratio_of_two_chains(distribution, melt)
    x = np.log10(distribution.molar_mass)
    even = np.linspace(x[0], x[-1], max(int((x[-1] - x[0]) / (SMOOTH_DECADES / 3)), 20))
    w = np.interp(even, x, distribution.density)
    reach = np.arange(-9, 10)
    bell = np.exp(-0.5 * (reach * (even[1] - even[0]) / SMOOTH_DECADES) ** 2)
    w = np.convolve(w, bell / bell.sum(), mode="same")
    inner = w[1:-1]
    tops = np.flatnonzero((inner > w[:-2]) & (inner >= w[2:])) + 1
    if tops.size < 2:
        return None
    main = int(tops[np.argmax(w[tops])])
    best: tuple[float, int] | None = None
    for i in tops.tolist():
        a, b = min(i, main), max(i, main)
        deep = w[a : b + 1].min() < DEEPEST_VALLEY * w[i]
        if i != main and deep and w[i] > LEAST_HEIGHT * w[main]:
            if even[b] - even[a] >= APART_DECADES and (best is None or w[i] > best[0]):
                best = float(w[i]), i
    if best is None:
        return None
    low, high = sorted((10.0 ** even[main], 10.0 ** even[best[1]]))
    return struglinski_graessley(float(high), float(low), 0.8 * melt.entanglement_molar_mass)


def _ratio_of_two_chains(distribution: Distribution, melt: Melt) -> float | None:
    """Gr of a handful of separate chains: the longest against the shortest that entangles."""
    held = (distribution.mass > LEAST_HEIGHT / 2) & (melt.Z(distribution.molar_mass) >= 1)
    chains = distribution.molar_mass[held]
    if chains.size < 2 or chains[-1] / chains[0] < 10**APART_DECADES:
        return None
    return struglinski_graessley(
        float(chains[-1]), float(chains[0]), 0.8 * melt.entanglement_molar_mass
    )
