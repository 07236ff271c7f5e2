"""Blends of known components: the prediction, every fraction, and the fraction for a target."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from mwdlink.chains.melt import Melt
from mwdlink.chains.polymer import Polymer, need_polymer
from mwdlink.decisions.blend_compute import Settings, compute
from mwdlink.decisions.blend_result import Blend
from mwdlink.decisions.blend_target import Target, parse_target
from mwdlink.decisions.components import (
    Component,
    as_components,
    check_fractions,
    fractions_without_filler,
    settled,
    validity_of,
)
from mwdlink.decisions.gpc_band import error_asked
from mwdlink.decisions.trust import Trust
from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.relaxation.mixing import exponent_cautions


def blend(
    components: Sequence[Any],
    fractions: Any,
    polymer: Polymer,
    *,
    trust: Trust | None = None,
    target: Any = None,
    vary: str | None = None,
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
    target : str or Target, or a sequence of them, optional
        `viscosity_Pa_s@0.1=2e4` and the like, or a range `eta0_Pa_s=1e4:2e4` with either end
        left out; one component's fraction is sought, the others keep their proportions.
    vary : str, optional
        Name of the component whose fraction is varied, in the map and for targets; it comes first
        in the result. Default: the first.
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
    need_polymer(polymer)
    if fractions is None:
        fractions = np.full(len(parts), 1.0 / len(parts))
    phi = check_fractions(fractions, len(parts))
    parts, phi = _varied_first(parts, phi, vary)
    melt = polymer.melt(temperature_C)
    wishes = _targets(target)
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
        targets=wishes,
        gpc_error=error_asked(gpc_error),
    )
    c = compute(ready, phi, melt, settings)
    warnings = merge_cautions(
        polymer.warnings,
        melt.warnings,
        notes,
        fractions_without_filler(ready, phi),
        valid.warnings,
        c.warnings,
        exponent_cautions(c.belief.centre),
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
        targets=c.targets,
        all_met=c.all_met,
        trust=trust,
        computed=c,
        members=int(members),
        warnings=warnings,
    )


def _targets(given: Any) -> tuple[Target, ...]:
    if given is None:
        return ()
    # a tuple may be one target, (name, value)
    one = isinstance(given, (str, Target)) or (isinstance(given, tuple) and _is_pair(given))
    several = [given] if one else list(given)
    found = tuple(parse_target(t) for t in several)
    if len(set(found)) < len(found):
        raise InputError("one target is given twice.", remedy="Give each once.")
    return found


def _is_pair(given: tuple[Any, ...]) -> bool:
    return len(given) == 2 and not isinstance(given[1], (Target, tuple)) and "=" not in str(given)


def _varied_first(
    parts: tuple[Component, ...], phi: np.ndarray, vary: str | None
) -> tuple[tuple[Component, ...], np.ndarray]:
    """Components and fractions with the one to vary in front."""
    if vary is None:
        return parts, phi
    names = [c.name for c in parts]
    if vary not in names:
        raise InputError(
            f"there is no component {vary!r} to vary.",
            remedy=f"Components are {', '.join(names)}.",
        )
    i = names.index(vary)
    order = [i, *[j for j in range(len(parts)) if j != i]]
    return tuple(parts[j] for j in order), phi[order]


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
