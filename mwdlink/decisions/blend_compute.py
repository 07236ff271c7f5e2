"""The numbers of a blend: routes, ensemble, tables, map over the fraction, target."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.gpc_error import GpcError
from mwdlink.chains.melt import Melt
from mwdlink.decisions.blend_parts import (
    average_bands_of,
    central_map,
    classical_rules,
    common_frequencies,
    exact_averages,
    fraction_draws,
    member_map,
    noise_marks,
    offset_of,
    properties_known,
    routes_differ,
    shown,
    spectrum_of_blend,
    sweep_cautions,
)
from mwdlink.decisions.blend_routes import (
    Map,
    RuleOffsets,
    ThroughDistributions,
    ThroughSweeps,
    band_map,
    moved,
    property_bands,
    reached,
)
from mwdlink.decisions.blend_sweeps import (
    MeasuredBank,
    Quadratic,
    modes_of,
)
from mwdlink.decisions.blend_target import Target, TargetFound
from mwdlink.decisions.blend_targets import AllMet, bound_said, find_all
from mwdlink.decisions.components import Component
from mwdlink.decisions.ensemble import (
    Draws,
    ExponentBelief,
    central_kernel,
    draw,
    exponent_belief,
    kernels_to_use,
)
from mwdlink.decisions.gpc_band import GpcBand
from mwdlink.decisions.predict import frequencies, narrow_cautions
from mwdlink.decisions.predicted import Outputs, Recorder, stack
from mwdlink.decisions.properties import INDEX_FREQUENCIES
from mwdlink.decisions.response import Bank, inner_frequencies
from mwdlink.decisions.trust import RuleError, Trust
from mwdlink.errors import Caution, merge_cautions
from mwdlink.quantity import Uncertain, finite
from mwdlink.relaxation.flow import STANDARD_LOADS_KG
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.operator import log_grid
from mwdlink.relaxation.spectrum import Spectrum
from mwdlink.relaxation.validity import frequency_cautions

SAMPLE_POINTS = 21
REFITS = 60


@dataclass(frozen=True, eq=False)
class Settings:
    """What a blend is computed with (see `blend`)."""

    route: str
    kernels: Any = None
    exponent: Any = None
    rouse: bool = True
    omega: Any = None
    noise: float | None = None
    fraction_uncertainty: float = 0.0
    members: int = 200
    seed: int = 0
    trust: Trust | None = None
    targets: tuple[Target, ...] = ()
    gpc_error: GpcError | None = None

    @property
    def error(self) -> RuleError | None:
        """What the trust file says of this route."""
        return None if self.trust is None else self.trust.routes.get(self.route)


@dataclass(frozen=True, eq=False)
class Computed:
    """All numbers of a blend."""

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
    classical_columns: Mapping[str, np.ndarray]
    gpc: GpcBand | None
    gpc_in_curves: bool
    targets: tuple[TargetFound, ...]
    all_met: AllMet | None
    terminal: bool
    quadratic: Quadratic | None
    central: Any
    curve_bands: Mapping[str, Any] = field(default_factory=dict)
    omega: np.ndarray = field(default_factory=lambda: np.empty(0))
    warnings: tuple[Caution, ...] = ()


def compute(components: Sequence[Component], phi: np.ndarray, melt: Melt, s: Settings) -> Computed:
    """Everything a Blend holds."""
    belief = _belief(melt, s)
    measured = None
    if all(c.sweep is not None for c in components):
        refits = min(REFITS, s.members)
        measured = MeasuredBank(
            [
                modes_of(c.sweep, refits, s.seed + 17 * i, s.noise)  # type: ignore[arg-type]
                for i, c in enumerate(components)
            ]
        )
    known = all(c.distribution is not None for c in components)
    names: tuple[str, ...] = kernels_to_use(melt, s.kernels)
    kernel = central_kernel(names)
    error = s.error
    if s.route == "distributions" and error is not None and error.kernel in names:
        kernel, names = error.kernel, (error.kernel,)
    model = Model(kernel, belief.centre, s.rouse)
    draws = draw(melt, names, belief, s.members, s.seed) if s.members > 0 else None
    if draws is not None and (s.route == "sweeps" or error is not None):
        # the card's constants have no part in it, or the blends have fixed them
        draws = Draws(
            draws.kernel if s.route == "distributions" else (kernel,) * len(draws),
            draws.exponent,
            np.ones(len(draws)),
            np.zeros(len(draws), dtype=int),
            np.array([melt.plateau_modulus]),
            draws.lost,
        )
    bank = None
    route: ThroughDistributions | ThroughSweeps
    mixed = gpc = None
    # blends measured with these components have these components' GPC errors in them
    learned = error is not None and {c.name for c in components} <= set(s.trust.components)  # type: ignore[union-attr]
    gpc_in_curves = False
    if known:
        own = [c.distribution for c in components]
        gpc = GpcBand.of(own, s.gpc_error, s.members, s.seed)  # type: ignore[arg-type]
        gpc_in_curves = s.route == "distributions" and gpc is not None and not learned
        mixed = Distribution.blend(
            [(c.distribution, f) for c, f in zip(components, phi, strict=True)]  # type: ignore[misc]
        )
    if s.route == "sweeps":
        assert measured is not None  # the route was checked against the components
        route = ThroughSweeps(measured, belief, draws)
        w = common_frequencies(measured, s.omega)
        inner = log_grid(*measured.omega, 10)
    else:
        relaxation = Relaxation(mixed, melt, model)  # type: ignore[arg-type]
        w = frequencies(s.omega)
        ends = [
            Relaxation(c.distribution, melt, model).longest_time  # type: ignore[arg-type]
            for c in components
        ]
        inner = inner_frequencies(min(w[0], 1e-2 / max(ends)), float(w[-1]), melt)
        bank = Bank([c.distribution for c in components], melt, s.rouse, float(inner[-1]))  # type: ignore[misc]
        factor = 1.0 if error is None else error.time_factor
        route = ThroughDistributions(
            bank, kernel, belief, draws, factor, gpc if gpc_in_curves else None
        )
    terminal = s.route == "distributions" or measured is None or measured.terminal
    offsets = RuleOffsets.of(error, s.members, s.seed) if error and s.members else None
    frequencies_at, loads = _asked(s.targets)

    central = route.central(phi)
    recorder = Recorder(w)
    up, out = central.moduli(w)
    recorder.centre(central, up[0], out[0])
    spectrum = spectrum_of_blend(
        central, w, measured, None if s.route == "sweeps" else relaxation, error
    )
    values = {
        k: finite(v[0])
        for k, v in properties_known(
            reached(central.curves(inner), terminal),
            terminal,
            melt.density,
            0.0,
            loads,
            frequencies_at,
        ).items()
    }
    shares, extra = fraction_draws(phi, s)
    bands: dict[str, Uncertain] = {}
    if draws is not None:
        samples = []
        for i in range(len(draws)):
            r = route.member(i, shares[i])
            recorder.member(r, None if offsets is None else offset_of(offsets, i))
            samples.append(moved(reached(r.curves(inner), terminal), offsets, i))
        status = {} if terminal else dict.fromkeys(TERMINAL, "lower_bound")
        if s.route == "sweeps" and measured is not None:
            marks = noise_marks(measured, len(draws))
            extra = {"noise": np.hstack([marks, *extra.values()])}
        if gpc is not None and gpc_in_curves:
            extra = extra | {"gpc": gpc.marks(shares)}
        bands = property_bands(
            stack(samples), melt.density, draws, values, extra, frequencies_at, status
        )
    first, quadratic, central_values = central_map(
        route, phi, inner, melt.density, loads, frequencies_at, terminal, belief
    )
    sample_first = np.linspace(0.0, 1.0, SAMPLE_POINTS)
    sampled = member_map(
        route, phi, sample_first, inner, melt.density, loads, frequencies_at, terminal, offsets, s
    )
    m = band_map(first, central_values, sample_first, sampled)
    targets, all_met = find_all(
        s.targets, [c.name for c in components], phi, first, m.values, (sample_first, sampled)
    )
    if not terminal:
        targets = tuple(bound_said(t) if t.target.name in TERMINAL else t for t in targets)
    averages = {}
    if known:
        averages = {k: float(v[0]) for k, v in exact_averages(components, phi[None, :]).items()}
    classical, columns = classical_rules(route, phi, melt, inner, terminal, first)
    difference = None
    if measured is not None and known:
        if bank is None:
            ends = [
                Relaxation(c.distribution, melt, model).longest_time  # type: ignore[arg-type]
                for c in components
            ]
            bank = Bank([c.distribution for c in components], melt, s.rouse, float(inner[-1]))  # type: ignore[misc]
            other: Any = ThroughDistributions(bank, kernel, belief)
        else:
            other = ThroughSweeps(measured, belief)
        difference = routes_differ(route, other, phi, log_grid(*measured.omega, 10), measured)
    notes = narrow_cautions(spectrum)
    if s.route == "distributions":
        # Gr of the blend is judged from the components themselves
        kept = [c for c in relaxation.warnings if c.code != "dilated_tube"]
        notes = merge_cautions(notes, kept, frequency_cautions(float(w[-1]), melt))
    else:
        notes = merge_cautions(notes, sweep_cautions(components, measured, w))
    return Computed(
        model=model,
        kernels=names,
        belief=belief,
        distribution=None if mixed is None else shown(components, phi),
        averages=averages,
        average_bands=average_bands_of(components, shares, averages, gpc, phi),
        spectrum=spectrum,
        outputs=Outputs(recorder.tables(spectrum), values, bands),
        map=m,
        difference=difference,
        classical=classical,
        classical_columns=columns,
        gpc=gpc,
        gpc_in_curves=gpc_in_curves,
        targets=targets,
        all_met=all_met,
        terminal=terminal,
        quadratic=quadratic,
        central=route,
        curve_bands=recorder.bands,
        omega=inner,
        warnings=notes,
    )


TERMINAL = ("eta0_Pa_s", "Je0_per_Pa", "mean_time_s")


def _belief(melt: Melt, s: Settings) -> ExponentBelief:
    if s.exponent is None and s.error is not None:
        return s.error.belief
    return exponent_belief(melt, s.exponent)


def _asked(targets: Sequence[Target]) -> tuple[tuple[float, ...], tuple[float, ...]]:
    """Frequencies and loads of the properties, the targets' among them."""
    w, loads = list(INDEX_FREQUENCIES), list(STANDARD_LOADS_KG)
    for target in targets:
        if target.at is None:
            continue
        into = loads if target.name.startswith("MFR") else w
        if not any(abs(x / target.at - 1) < 1e-9 for x in into):
            into.append(target.at)
    return tuple(w), tuple(loads)
