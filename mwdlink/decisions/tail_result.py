"""What `find_tail` gives back."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from mwdlink.decisions import tail_words
from mwdlink.errors import Caution
from mwdlink.inversion.joint_explain import Explanation
from mwdlink.quantity import Uncertain, readonly
from mwdlink.result import Result


@dataclass(frozen=True, eq=False)
class Tail(Result):
    """The high end of a distribution, from GPC and sweep together.

    Attributes
    ----------
    beyond : float
        Molar mass the tail begins at [g/mol].
    fraction : Uncertain
        All weight beyond it [-].
    excess : Uncertain
        What of it is beyond the smooth continuation of the GPC's curve [-].
    detection_limit : float or None
        Smallest tail that nine in ten such pairs of data would show [-]; None where none up to
        5 wt% would.
    time_law_factor : Uncertain
        Factor on the card's relaxation times that the pair asks for [-].
    exponent, gpc_factor, modulus_factor : Uncertain
        Mixing exponent; M of the GPC over true M; level of the moduli over the card's [-].
    explanations : tuple of Explanation
    averages : mapping
        Mn, Mw, Mz [g/mol] and dispersity, uncertain with status.
    advice : tuple of str
    window : (float, float)
        Molar masses the sweep follows [g/mol].
    gpc_range : (float, float)
        Molar masses the GPC's curve was used over [g/mol].
    kernels : tuple of mappings
    fit : mapping
    model : mapping
        Kernels, exponent and Rouse part used.
    distribution_table, gpc_table, fit_table : mapping of str to ndarray
    warnings : tuple of Caution
    """

    command: ClassVar[str] = "tail"
    main_table: ClassVar[str] = "distribution.csv"

    beyond: float
    fraction: Uncertain
    excess: Uncertain
    detection_limit: float | None
    time_law_factor: Uncertain
    exponent: Uncertain
    gpc_factor: Uncertain
    modulus_factor: Uncertain
    explanations: tuple[Explanation, ...]
    averages: Mapping[str, Uncertain]
    advice: tuple[str, ...]
    window: tuple[float, float]
    gpc_range: tuple[float, float]
    kernels: tuple[Mapping[str, Any], ...]
    fit: Mapping[str, Any]
    model: Mapping[str, Any]
    distribution_table: Mapping[str, np.ndarray]
    gpc_table: Mapping[str, np.ndarray]
    fit_table: Mapping[str, np.ndarray]
    warnings: tuple[Caution, ...] = ()

    def __post_init__(self) -> None:
        for name in ("distribution_table", "gpc_table", "fit_table"):
            table = {k: readonly(v) for k, v in getattr(self, name).items()}
            object.__setattr__(self, name, table)

    @property
    def found(self) -> bool:
        """Whether a tail was found: the excess's low end is above zero."""
        return self.excess.low is not None and self.excess.low > 0

    @property
    def at_most(self) -> float | None:
        """Weight beyond M that would not have been missed [-].

        The interval's high end, or the GPC's continuation and the smallest tail that would have
        shown where that is more: what is said to be absent is never less than what could be missed.
        """
        high = self.fraction.high
        if high is None or self.fraction.value is None or self.detection_limit is None:
            return high
        continued = self.fraction.value - (self.excess.value or 0.0)
        return max(high, continued + self.detection_limit)

    def payload(self) -> dict[str, Any]:
        return {
            "tail": {
                "M_g_per_mol": self.beyond,
                "fraction": self.fraction,
                "excess": self.excess,
                "detection_limit": self.detection_limit,
                "at_most": self.at_most,
                "found": self.found,
                "gpc_high_g_per_mol": self.gpc_range[1],
            },
            "time_law_factor": self.time_law_factor,
            "explanations": [
                {"name": e.name, "support": e.support, "chi2_per_point": e.chi2_per_point}
                for e in self.explanations
            ],
            "averages": dict(self.averages),
            "window": {
                "M_low_g_per_mol": self.window[0],
                "M_high_g_per_mol": self.window[1],
            },
            "gpc": {
                "M_low_g_per_mol": self.gpc_range[0],
                "M_high_g_per_mol": self.gpc_range[1],
                "mass_factor": self.gpc_factor,
            },
            "exponent": self.exponent,
            "modulus_factor": self.modulus_factor,
            "kernels": [dict(k) for k in self.kernels],
            "fit": dict(self.fit),
            "advice": list(self.advice),
        }

    def tables(self) -> dict[str, Any]:
        import pandas as pd

        return {
            "distribution.csv": pd.DataFrame(dict(self.distribution_table)),
            "gpc_only.csv": pd.DataFrame(dict(self.gpc_table)),
            "fit.csv": pd.DataFrame(dict(self.fit_table)),
        }

    def answer(self) -> str:
        text = tail_words.answer(
            self.found,
            self.beyond,
            self.fraction,
            self.excess,
            self.detection_limit,
            self.at_most,
        )
        codes = {w.code for w in self.warnings}
        if self.fraction.status == "resolved":
            return text
        return f"{text} {tail_words.reservation(codes)}"

    def paragraph(self) -> str:
        best, *others = self.explanations
        second = others[0] if others else None
        text = (
            f"{self.answer()} GPC (used from {tail_words.mass(self.gpc_range[0])} to "
            f"{tail_words.mass(self.gpc_range[1])}) and sweep were fitted as one distribution, "
            "with the time law, the mixing exponent and the GPC's molar-mass factor left to adjust "
            f"within their priors. Best supported is {tail_words.EXPLAINED[best.name]} "
            f"({100 * best.support:.0f} % of the evidence)"
        )
        if second is not None and second.support >= 0.01:
            text += f", then {tail_words.EXPLAINED[second.name]} ({100 * second.support:.0f} %)"
        return text + ". All of it supposes linear chains."

    def cannot_say(self) -> tuple[str, ...]:
        out = [
            "Whether the chains are branched: one temperature cannot rule branching out.",
            f"How the weight beyond {tail_words.mass(self.window[1])} is spread over molar mass: "
            "the sweep sees that it is there, not how long the chains are.",
        ]
        if self.averages["Mz_g_per_mol"].status != "resolved":
            out.append("The z average: only a lower bound is known.")
        return tuple(out)
