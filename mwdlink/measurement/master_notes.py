"""What a master curve has to say for itself: its law in words, and its cautions."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from mwdlink.errors import Caution
from mwdlink.measurement.shift_laws import LawFit
from mwdlink.measurement.shifts import ShiftFit
from mwdlink.measurement.superposition import Superposition
from mwdlink.quantity import Uncertain

# Free vertical factors must differ by this much, and by four standard errors, to be spoken of.
VERTICAL_TOLD = 0.03


def law_text(law: LawFit) -> str:
    def span(q: Uncertain) -> str:
        return "" if q.low is None or q.high is None else f" ({q.low:.3g} to {q.high:.3g})"

    c = law.constants
    if law.kind == "arrhenius":
        e = c["energy_kJ_per_mol"]
        return f"an Arrhenius law with {e.value:.3g} kJ/mol{span(e)}"
    return (
        f"a WLF law with c1 = {c['c1'].value:.3g}{span(c['c1'])} and c2 = {c['c2_K'].value:.4g} "
        f"K{span(c['c2_K'])}"
    )


def master_cautions(
    T: np.ndarray,
    reference_C: float,
    same_temperature: float,
    steps: Sequence[Any],
    vertical: str,
    fixed: np.ndarray,
    free: ShiftFit,
    free_scale: float,
    verdict: Superposition,
    polymer: Any,
) -> tuple[Caution, ...]:
    out = []
    nearest = float(np.min(np.abs(T - reference_C)))
    if nearest > same_temperature:
        where = "between" if T[0] < reference_C < T[-1] else "outside"
        text = (
            f"{reference_C:g} C was not measured and lies {where} the measured temperatures: the "
            "curve was taken there by the fitted shift law."
        )
        out.append(Caution("reference_not_measured", text))
    if vertical == "rho-T" and polymer is None:
        text = "Without a polymer the density was taken as constant: b_T is T_ref/T alone."
        out.append(Caution("density_assumed", text))
    if vertical != "free":
        pivot = int(np.argmin(np.abs(T - reference_C)))
        off = free.log_vertical - (fixed - fixed[pivot])
        told = (np.abs(off) > VERTICAL_TOLD) & (np.abs(off) > 4 * free.vertical_sigma * free_scale)
        if told.any():
            k = int(np.argmax(np.abs(off) * told))
            text = (
                f"Left free, the curves ask for vertical factors that differ from those used, most "
                f"at {T[k]:.4g} C ({np.exp(free.log_vertical[k]):.3f} against "
                f"{np.exp(fixed[k] - fixed[pivot]):.3f}). Linear polyethylene and polypropylene "
                "need none; branched ones do (Mavridis & Shroff, published). A change of gap or "
                "filling between the steps does it too."
            )
            out.append(Caution("vertical_disagrees", text))
    thin = [s for s in steps if s.overlap_decades < 0.5]
    if thin:
        shown = ", ".join(f"{s.temperature_C:.4g} C ({s.overlap_decades:.2f})" for s in thin)
        text = (
            f"Less than half a decade of overlap with the neighbour [decades]: {shown}. The shifts "
            "there rest on few points; a temperature in between would help."
        )
        out.append(Caution("thin_overlap", text))
    if not verdict.passed:
        out.append(Caution("superposition_failed", verdict.text()))
    return tuple(out)
