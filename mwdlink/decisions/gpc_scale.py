"""What the molar masses of a GPC table are, and how sure one may be of them."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from mwdlink.chains.distribution import CONVERTED, Distribution
from mwdlink.chains.polymer import Polymer
from mwdlink.errors import Caution, merge_cautions

# polystyrene in 1,2,4-trichlorobenzene at 135 C, [eta] = K M^a in dL/g (recalled)
STANDARD_K, STANDARD_A, STANDARD_SOLVENT = 1.21e-4, 0.707, "TCB"


def on_own_scale(
    distribution: Distribution, polymer: Polymer
) -> tuple[Distribution, tuple[Caution, ...]]:
    """The distribution on the polymer's own scale of M, as far as that is known.

    Polystyrene-equivalent masses are converted by equal hydrodynamic volume,
    K_s M_s^(1+a_s) = K M^(1+a), where the card names Mark-Houwink constants in the same solvent.
    Its calibration is `converted` then, and a second time nothing is done.

    Returns
    -------
    Distribution
    cautions : tuple of Caution
    """
    if distribution.calibration == "unstated":
        return distribution, (
            Caution(
                "gpc_scale_unknown",
                "What the GPC's molar masses are is not stated: they are taken as the polymer's "
                "own, within 5 % (recalled). If they are polystyrene-equivalent they are wrong by "
                "about a factor 2 for polyethylene: state --calibration.",
            ),
        )
    if distribution.calibration != "equivalent":
        return distribution, ()
    k, a = polymer.get("mark_houwink.K_dL_per_g"), polymer.get("mark_houwink.a")
    solvent = str(polymer.get("mark_houwink.solvent", ""))
    if k is None or a is None or solvent.upper() != STANDARD_SOLVENT:
        return distribution, (
            Caution(
                "gpc_scale_equivalent",
                "The GPC's molar masses are equivalent to its standards, and the card has no "
                f"Mark-Houwink constants in {STANDARD_SOLVENT} to convert them: they were used as "
                "they are. The 5 % carried are the scatter of a calibration and not the factor "
                "between the two scales, which may be two (recalled) and is not in the intervals.",
            ),
        )

    def own(mass: float) -> float:
        log = (math.log(STANDARD_K / k) + (1 + STANDARD_A) * math.log(mass)) / (1 + a)
        return math.exp(log)

    converted = replace(
        distribution,
        molar_mass=np.array([own(float(m)) for m in distribution.molar_mass]),
        edges=np.array([own(float(m)) for m in distribution.edges]),
        calibration=CONVERTED,
        warnings=tuple(w for w in distribution.warnings if w.code != "calibration_equivalent"),
    )
    return converted, (
        Caution(
            "gpc_scale_converted",
            "Polystyrene-equivalent molar masses were converted with the Mark-Houwink constants of "
            f"the card and of polystyrene in {STANDARD_SOLVENT} (K = {STANDARD_K:g} dL/g, "
            f"a = {STANDARD_A:g}, recalled); 5 % on M is carried.",
        ),
    )


def as_own(distribution: Distribution, polymer: Polymer) -> Distribution:
    """The same for a prediction: what was done to equivalent masses stands in `warnings`."""
    if distribution.calibration != "equivalent":
        return distribution
    found, notes = on_own_scale(distribution, polymer)
    return replace(found, warnings=merge_cautions(found.warnings, notes))
