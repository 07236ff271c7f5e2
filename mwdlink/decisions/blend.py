"""Blends of known components: the prediction, every fraction, and the fraction for a target."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, ClassVar

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.chains.polymer import Polymer
from mwdlink.decisions.blend_compute import Computed, Settings, compute
from mwdlink.decisions.blend_live import live_payload
from mwdlink.decisions.blend_routes import Map, map_columns
from mwdlink.decisions.blend_target import Target, TargetFound, parse_target
from mwdlink.decisions.components import (
    Component,
    Validity,
    as_components,
    check_fractions,
    settled,
    validity_of,
)
from mwdlink.decisions.ensemble import ExponentBelief
from mwdlink.decisions.gpc_band import error_asked, gpc_limits
from mwdlink.decisions.predict import band_words, model_payload
from mwdlink.decisions.predicted import Outputs, frames, quoted
from mwdlink.decisions.trust import Trust
from mwdlink.errors import Caution, InputError, merge_cautions
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
    target : TargetFound or None
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
    target: TargetFound | None
    trust: Trust | None
    computed: Computed = field(repr=False)
    members: int = 0
    warnings: tuple[Caution, ...] = ()

    @property
    def names(self) -> tuple[str, ...]:
        """The components' names."""
        return tuple(c.name for c in self.components)

    def payload(self) -> dict[str, Any]:
        blocks = self.outputs.blocks(self.averages, self.average_bands)
        model = model_payload(self.model, self.kernels, self.belief, self.members)
        c = self.computed
        model["band_gpc"] = c.gpc.to_dict() if c.gpc is not None and c.gpc_in_curves else None
        if self.route == "sweeps":
            model |= {"kernel": None, "band_kernels": []}
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
        bound = isinstance(eta0, Uncertain) and eta0.status == "lower_bound"
        least = "at least " if bound else ""
        text = f"{recipe} has a zero-shear viscosity of {least}{quoted(eta0, 'Pa s')}"
        text += f" at {self.melt.temperature_C:g} C."
        if self.target is not None:
            text += f" {self._target_words()}"
        return text

    def _target_words(self) -> str:
        t = self.target
        assert t is not None  # called only with a target
        if not t.fractions:
            return f"Target {t.target.key} = {t.target.wanted:.4g}: {t.reason}"
        parts = []
        for f in t.fractions:
            span = ""
            if f.low is not None and f.high is not None:
                span = f" ({100 * f.low:.3g} to {100 * f.high:.3g} %)"
            parts.append(f"{100 * (f.value or 0.0):.3g} %{span}")
        return (
            f"{t.target.key} = {t.target.wanted:.4g} is met at {' and '.join(parts)} of "
            f"{t.component}."
        )

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


def blend(
    components: Sequence[Any],
    fractions: Any,
    polymer: Polymer,
    *,
    trust: Trust | None = None,
    target: Target | str | None = None,
    route: str | None = None,
    kernels: Any = None,
    exponent: Any = None,
    rouse: bool = True,
    temperature_C: float | None = None,
    omega: Any = None,
    noise: float | None = None,
    fraction_uncertainty: float = 0.0,
    members: int = 200,
    seed: int = 0,
    gpc_error: Any = None,
) -> Blend:
    """Predict a blend, map every fraction, find the fraction that meets a target.

    Parameters
    ----------
    components : sequence of Distribution, Sweep or Component
        Two or more. Where all have sweeps, the curves rest on the measured spectra; the route
        through distributions is then given beside it.
    fractions : sequence of float or None
        Weight fractions of polymer, sum 1 or 100; None takes equal parts (for a target).
    polymer : Polymer
    trust : Trust, optional
        What `check_blends` found: exponent and error of the rule.
    target : str or Target, optional
        `viscosity_Pa_s@0.1=2e4` and the like; the first component's fraction is sought, the
        others keep their proportions.
    route : str, optional
        `sweeps` or `distributions`; default sweeps where all components have them.
    kernels, exponent, rouse, temperature_C, members, seed
        As for `predict`; a trust file's exponent stands before the card's.
    omega : array_like, optional
        Output frequencies [rad/s]; default 1e-4 to 1e4 through distributions, the components'
        common range through sweeps.
    noise : float, optional
        Relative noise of the sweeps [-]; default their columns, else estimated.
    fraction_uncertainty : float
        Standard error of a weighed fraction [-].
    gpc_error : float or GpcError, optional
        Error of the distributions, as for `predict`.

    Returns
    -------
    Blend

    Raises
    ------
    InputError
        Fractions that do not sum up, components of different polymers, no common route.
    ModelError
        As for `predict`.
    """
    parts = as_components(components)
    if len(parts) < 2:
        raise InputError("a blend needs at least two components.")
    if fractions is None:
        fractions = np.full(len(parts), 1.0 / len(parts))
    phi = check_fractions(fractions, len(parts))
    melt = polymer.melt(temperature_C)
    wish = None if target is None else parse_target(target)
    ready, notes = settled(parts, polymer, melt.temperature_C)
    valid = validity_of(ready, phi, melt)
    if trust is not None and trust.polymer and trust.polymer != polymer.name:
        raise InputError(
            f"the trust file is of {trust.polymer}, the blend of {polymer.name}.",
            remedy="Check blends of this polymer, or leave the trust file out.",
        )
    settings = Settings(
        route=_route(ready, route),
        kernels=kernels,
        exponent=exponent,
        rouse=rouse,
        omega=omega,
        noise=noise,
        fraction_uncertainty=float(fraction_uncertainty),
        members=int(members),
        seed=int(seed),
        trust=trust,
        target=wish,
        gpc_error=error_asked(gpc_error),
    )
    c = compute(ready, phi, melt, settings)
    warnings = merge_cautions(
        polymer.warnings,
        melt.warnings,
        notes,
        valid.warnings,
        c.warnings,
        _trust_cautions(trust, ready, melt, settings.route),
    )
    return Blend(
        components=ready,
        fractions=phi,
        polymer=polymer,
        melt=melt,
        route=settings.route,
        model=c.model,
        kernels=c.kernels,
        belief=c.belief,
        distribution=c.distribution,
        averages=c.averages,
        average_bands=c.average_bands,
        spectrum=c.spectrum,
        outputs=c.outputs,
        map=c.map,
        difference=c.difference,
        classical=c.classical,
        validity=valid,
        target=c.target,
        trust=trust,
        computed=c,
        members=int(members),
        warnings=warnings,
    )


def _route(components: Sequence[Component], wanted: str | None) -> str:
    swept = all(c.sweep is not None for c in components)
    known = all(c.distribution is not None for c in components)
    if wanted not in (None, "sweeps", "distributions"):
        raise InputError(f"there is no route {wanted!r}.", remedy="Use sweeps or distributions.")
    if (wanted == "sweeps" and not swept) or (wanted == "distributions" and not known):
        missing = [
            c.name
            for c in components
            if (c.sweep if wanted == "sweeps" else c.distribution) is None
        ]
        raise InputError(
            f"the route through {wanted} needs them of every component; "
            f"{', '.join(missing)} has none."
        )
    if wanted is not None:
        return wanted
    if swept:
        return "sweeps"
    if known:
        return "distributions"
    raise InputError(
        "the components have no common route: some have only a distribution, others only a sweep.",
        remedy="Give every component a distribution, or every component a sweep.",
    )


def _trust_cautions(
    trust: Trust | None, components: Sequence[Component], melt: Melt, route: str
) -> tuple[Caution, ...]:
    if trust is None:
        return ()
    out = []
    if route not in trust.routes:
        out.append(
            Caution(
                "trust_other_route",
                f"The trust file says nothing of the route through {route}: the band is that of a "
                "prediction without it.",
            )
        )
    names = {c.name for c in components}
    if trust.components and not names <= set(trust.components):
        other = ", ".join(sorted(names - set(trust.components)))
        out.append(
            Caution(
                "trust_other_components",
                f"The trust file was made with {', '.join(trust.components)}; for {other} its "
                "error is an assumption.",
            )
        )
    if abs(trust.temperature_C - melt.temperature_C) > 20.0:
        out.append(
            Caution(
                "trust_other_temperature",
                f"The trust file is of {trust.temperature_C:g} C, the prediction of "
                f"{melt.temperature_C:g} C.",
            )
        )
    return tuple(out)
