"""A predicted blend: what it holds, and how it is said."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, ClassVar

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.chains.polymer import Polymer
from mwdlink.decisions.blend_compute import Computed
from mwdlink.decisions.blend_live import live_payload
from mwdlink.decisions.blend_routes import Map, map_columns
from mwdlink.decisions.blend_target import TargetFound
from mwdlink.decisions.blend_targets import AllMet
from mwdlink.decisions.components import Component, Validity
from mwdlink.decisions.ensemble import ExponentBelief
from mwdlink.decisions.gpc_band import gpc_limits
from mwdlink.decisions.predict import band_words, model_payload
from mwdlink.decisions.predicted import FLOW_RESTS_ON, Outputs, frames, quoted
from mwdlink.decisions.trust import Trust
from mwdlink.errors import Caution
from mwdlink.quantity import Uncertain
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.spectrum import Spectrum
from mwdlink.result import Result


@dataclass(frozen=True, eq=False)
class Blend(Result):
    """A predicted blend.

    Attributes
    ----------
    components : tuple of Component
    fractions : ndarray of shape (n,)
        Weight fractions of polymer [-], sum 1.
    polymer : Polymer
    melt : Melt
    route : str
        `sweeps` or `distributions`: what the curves rest on.
    model : Model
        Of the central curves; the kernel has no part in the route through sweeps.
    kernels : tuple of str
        In the band.
    belief : ExponentBelief
    distribution : Distribution or None
        The blend's, where every component's is known.
    averages, average_bands : mapping
        Mn, Mw, Mz, dispersity; empty where a distribution is missing.
    spectrum : Spectrum
    outputs : Outputs
    map : Map
        Every property against the fraction of the first component.
    difference : mapping or None
        How the other route differs: `storage_decades`, `loss_decades` (root mean square over the
        common frequencies), `eta0_ratio`.
    classical : mapping
        What the log-additive and the Mw-additive rule give for eta0, where the components' is
        known.
    validity : Validity
    targets : tuple of TargetFound
        In the order given.
    all_met : AllMet or None
        Where several are met at once.
    trust : Trust or None
    computed : Computed
        What the pictures that move need.
    members : int
    warnings : tuple of Caution
    """

    command: ClassVar[str] = "blend"
    main_table: ClassVar[str] = "sweep.csv"

    components: tuple[Component, ...]
    fractions: np.ndarray
    polymer: Polymer
    melt: Melt
    route: str
    model: Model
    kernels: tuple[str, ...]
    belief: ExponentBelief
    distribution: Distribution | None
    averages: Mapping[str, float]
    average_bands: Mapping[str, Uncertain]
    spectrum: Spectrum
    outputs: Outputs
    map: Map
    difference: Mapping[str, Any] | None
    classical: Mapping[str, Any]
    validity: Validity
    targets: tuple[TargetFound, ...]
    all_met: AllMet | None
    trust: Trust | None
    computed: Computed = field(repr=False)
    members: int = 0
    warnings: tuple[Caution, ...] = ()

    @property
    def names(self) -> tuple[str, ...]:
        """The components' names."""
        return tuple(c.name for c in self.components)

    @property
    def target(self) -> TargetFound | None:
        """The first target."""
        return self.targets[0] if self.targets else None

    def payload(self) -> dict[str, Any]:
        blocks = self.outputs.blocks(self.averages, self.average_bands)
        model = model_payload(self.model, self.kernels, self.belief, self.members)
        c = self.computed
        model["band_gpc"] = c.gpc.to_dict() if c.gpc is not None and c.gpc_in_curves else None
        if self.route == "sweeps":
            model |= {"kernel": None, "band_kernels": []}
        several = {}
        if self.all_met is not None:
            several = {
                "targets": [t.to_dict() for t in self.targets],
                "targets_met": self.all_met.to_dict(),
            }
        return {
            **blocks,
            "blend": {
                "fractions": dict(zip(self.names, self.fractions.tolist(), strict=True)),
                "route": self.route,
                "Gr": self.validity.Gr,
                "Mw_ratio": self.validity.ratio,
                "Z": dict(self.validity.Z),
                "routes_differ": self.difference,
                "trust": None if self.trust is None else list(self.trust.blends),
            },
            "target": None if self.target is None else self.target.to_dict(),
            **several,
            "classical": dict(self.classical),
            "temperature_C": self.melt.temperature_C,
            "central_model": model,
        }

    def tables(self) -> dict[str, Any]:
        import pandas as pd

        out = frames(self.outputs)
        if self.distribution is not None:
            out["distribution.csv"] = self.distribution.to_frame()
        out["fractions.csv"] = pd.DataFrame(map_columns(self.map, list(self.names), self.fractions))
        if self.computed.classical_columns:
            out["classical.csv"] = pd.DataFrame(dict(self.computed.classical_columns))
        return out

    def live_data(self) -> dict[str, Any] | None:
        """Curves and properties for a page with a slider; None unless there are two components."""
        return live_payload(self)

    def answer(self) -> str:
        recipe = " + ".join(
            f"{100 * f:.4g} % {n}" for n, f in zip(self.names, self.fractions, strict=True)
        )
        eta0 = self.outputs.bands.get("eta0_Pa_s", self.outputs.values.get("eta0_Pa_s"))
        # a bound without an interval (no members) is one all the same
        least = "" if self.route == "distributions" or self.computed.terminal else "at least "
        text = f"{recipe} has a zero-shear viscosity of {least}{quoted(eta0, 'Pa s')}"
        text += f" at {self.melt.temperature_C:g} C."
        if self.all_met is not None:
            text += f" {self.all_met.reason}"
        elif self.target is not None:
            text += f" {self.target.words()}"
        return text

    def paragraph(self) -> str:
        if self.route == "sweeps":
            how = (
                "Predicted from the components' own measured spectra, "
                f"G = (sum of phi G_i^(1/b))^b with b = {self.model.exponent:.3g} "
                f"({self.belief.source}); no distribution and no kernel enters."
            )
        else:
            how = (
                f"Predicted from the components' distributions with the {self.model.kernel} kernel "
                f"and a mixing exponent of {self.model.exponent:.3g} ({self.belief.source})."
            )
            if self.members:
                gpc = self.computed.gpc if self.computed.gpc_in_curves else None
                how += " " + band_words(self.kernels, self.belief, self.melt, self.members, gpc)
        text = f"{self.answer()} {how}"
        if self.trust is not None:
            text += (
                f" The band holds the error found on {len(self.trust.blends)} measured blends of "
                "known fractions."
            )
        if self.difference is not None:
            text += (
                f" The route through {self.difference['other_route']} differs by "
                f"{self.difference['loss_decades']:.2g} decades in G''."
            )
        return text

    def cannot_say(self) -> tuple[str, ...]:
        out = [
            "The rule is for linear chains of one polymer, mixed on the scale of molecules: a "
            "powder mix that is not molecularly mixed obeys no rule.",
        ]
        if self.trust is None:
            out.append(
                "Without measured blends of known fractions (blendcheck) the rule's own error is "
                "only the spread of kernels and exponents."
            )
        if self.route == "sweeps" and not self.computed.terminal:
            out.append(
                "The components' sweeps do not reach terminal flow: zero-shear viscosity and "
                "compliance of the blend are lower bounds, the melt flow rate may be unknown."
            )
        out.append(FLOW_RESTS_ON)
        if self.distribution is not None:
            own = [c.distribution for c in self.components]
            c = self.computed
            if self.route == "distributions" and c.gpc is not None and not c.gpc_in_curves:
                out.append(
                    "Errors of the GPC are in the band as part of the error that the measured "
                    "blends of the same components have shown, not a second time."
                )
            elif self.route == "distributions":
                out.extend(gpc_limits(own, c.gpc))  # type: ignore[arg-type]
        return tuple(out)
