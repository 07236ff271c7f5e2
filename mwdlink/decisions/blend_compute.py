"""The numbers of a blend: routes, ensemble, tables, map over the fraction, target."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.decisions.blend_routes import (
    Map,
    RuleOffsets,
    ThroughDistributions,
    ThroughSweeps,
    along,
    band_map,
    bounded,
    moved,
    property_bands,
)
from mwdlink.decisions.blend_sweeps import (
    MeasuredBank,
    Modes,
    Quadratic,
    log_additive,
    modes_of,
    root_additive,
)
from mwdlink.decisions.blend_target import Target, TargetFound, find_fractions
from mwdlink.decisions.components import Component
from mwdlink.decisions.ensemble import (
    Draws,
    ExponentBelief,
    central_kernel,
    draw,
    exponent_belief,
    kernels_to_use,
)
from mwdlink.decisions.predict import (
    Outputs,
    Recorder,
    frequencies,
    narrow_cautions,
    stack,
    trimmed,
)
from mwdlink.decisions.properties import INDEX_FREQUENCIES, Curves, properties_of
from mwdlink.decisions.response import Bank, Response, inner_frequencies
from mwdlink.decisions.trust import RuleError, Trust
from mwdlink.errors import Caution, merge_cautions
from mwdlink.quantity import Uncertain
from mwdlink.relaxation.flow import STANDARD_LOADS_KG
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.modes import positive_modes
from mwdlink.relaxation.operator import log_grid
from mwdlink.relaxation.spectrum import Spectrum
from mwdlink.relaxation.validity import frequency_cautions

MAP_POINTS = 101
SAMPLE_POINTS = 21
MOST_MAP_MEMBERS = 100
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
    target: Target | None = None

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
    target: TargetFound | None
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
    mixed = None
    if known:
        mixed = Distribution.blend(
            [(c.distribution, f) for c, f in zip(components, phi, strict=True)]  # type: ignore[misc]
        )
    if s.route == "sweeps":
        assert measured is not None  # the route was checked against the components
        route = ThroughSweeps(measured, belief, draws)
        w = _common(measured, s.omega)
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
        route = ThroughDistributions(bank, kernel, belief, draws, factor)
    terminal = s.route == "distributions" or measured is None or measured.terminal
    offsets = RuleOffsets.of(error, s.members, s.seed) if error and s.members else None
    frequencies_at, loads = _asked(s.target)

    central = route.central(phi)
    recorder = Recorder(w)
    up, out = central.moduli(w)
    recorder.centre(central, up[0], out[0])
    spectrum = _spectrum(central, w, measured, None if s.route == "sweeps" else relaxation, error)
    fix = (lambda c: c) if terminal else bounded
    values = {
        k: float(v[0]) if np.isfinite(v[0]) else None
        for k, v in properties_of(
            fix(central.curves(inner)), melt.density, 0.0, loads, frequencies_at
        ).items()
    }
    if not terminal:
        values = _without_flow(values, central, inner)
    shares, extra = _fraction_draws(phi, s)
    bands: dict[str, Uncertain] = {}
    if draws is not None:
        samples = []
        for i in range(len(draws)):
            r = route.member(i, shares[i])
            recorder.member(r, None if offsets is None else _offset_of(offsets, i))
            samples.append(moved(fix(r.curves(inner)), offsets, i))
        status = {} if terminal else dict.fromkeys(_TERMINAL, "lower_bound")
        if s.route == "sweeps" and measured is not None:
            marks = _noise_marks(measured, len(draws))
            extra = {"noise": np.hstack([marks, *extra.values()])}
        bands = property_bands(
            stack(samples), melt.density, draws, values, extra, frequencies_at, status
        )
    first, quadratic, central_values = _central_map(
        route, phi, inner, melt.density, loads, frequencies_at, fix, belief
    )
    sample_first = np.linspace(0.0, 1.0, SAMPLE_POINTS)
    sampled = _member_map(
        route, phi, sample_first, inner, melt.density, loads, frequencies_at, fix, offsets, s
    )
    m = band_map(first, central_values, sample_first, sampled)
    others = [c.name for c in components[1:]]
    target = None
    if s.target is not None:
        nothing = np.full(first.size, np.nan)
        target = find_fractions(
            s.target,
            components[0].name,
            first,
            m.values.get(s.target.key, nothing),
            sample_first,
            sampled.get(s.target.key),
            others,
        )
    averages = {}
    if known:
        averages = {k: float(v[0]) for k, v in _averages(components, phi[None, :]).items()}
    classical, columns = _classical(route, phi, melt, inner, terminal, first)
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
        difference = _difference(route, other, phi, log_grid(*measured.omega, 10), measured)
    notes = narrow_cautions(spectrum)
    if s.route == "distributions":
        # Gr of the blend is judged from the components themselves
        own = [c for c in relaxation.warnings if c.code != "dilated_tube"]
        notes = merge_cautions(notes, own, frequency_cautions(float(w[-1]), melt))
    else:
        notes = merge_cautions(notes, _sweep_cautions(components, measured, w))
    return Computed(
        model=model,
        kernels=names,
        belief=belief,
        distribution=None if mixed is None else shown(components, phi),
        averages=averages,
        average_bands=_average_bands(components, shares, averages),
        spectrum=spectrum,
        outputs=Outputs(recorder.tables(spectrum), values, bands),
        map=m,
        difference=difference,
        classical=classical,
        classical_columns=columns,
        target=target,
        terminal=terminal,
        quadratic=quadratic,
        central=route,
        curve_bands=recorder.bands,
        omega=inner,
        warnings=notes,
    )


_TERMINAL = ("eta0_Pa_s", "Je0_per_Pa", "mean_time_s")


def shown(components: Sequence[Component], phi: np.ndarray) -> Distribution:
    """The blend's curve on even cells of log M, as smooth as the components' own.

    For relaxation and averages the weights stay at the components' nodes; side by side the nodes
    of two tables make a comb, which is right in sum but no curve to look at.
    """
    parts = [(c.distribution, f) for c, f in zip(components, phi, strict=True) if f > 0]
    low = min(d.compact(1e-9).edges[0] for d, _ in parts)  # type: ignore[union-attr]
    high = max(d.compact(1e-9).edges[-1] for d, _ in parts)  # type: ignore[union-attr]
    x = np.linspace(np.log10(low), np.log10(high), int(np.log10(high / low) * 40) + 2)
    density = sum(
        f * np.interp(x, np.log10(d.molar_mass), d.density, left=0.0, right=0.0)  # type: ignore[union-attr]
        for d, f in parts
    )
    label = " + ".join(f"{100 * f:.3g} % {c.name}" for c, f in zip(components, phi, strict=True))
    return Distribution.from_nodes(10.0**x, density, label=label)


def _belief(melt: Melt, s: Settings) -> ExponentBelief:
    if s.exponent is None and s.error is not None:
        return s.error.belief
    return exponent_belief(melt, s.exponent)


def _common(bank: MeasuredBank, omega: Any) -> np.ndarray:
    from mwdlink.errors import InputError

    low, high = bank.omega
    if not low < high:
        raise InputError(
            "the components' sweeps have no common range of frequencies.",
            remedy="Shift them to one temperature or measure over a common range.",
        )
    return log_grid(low, high, 10) if omega is None else frequencies(omega)


def _asked(target: Target | None) -> tuple[tuple[float, ...], tuple[float, ...]]:
    """Frequencies and loads of the properties, the target's among them."""
    w, loads = list(INDEX_FREQUENCIES), list(STANDARD_LOADS_KG)
    if target is not None and target.at is not None:
        into = loads if target.name.startswith("MFR") else w
        if not any(abs(x / target.at - 1) < 1e-9 for x in into):
            into.append(target.at)
    return tuple(w), tuple(loads)


def _spectrum(
    central: Response,
    w: np.ndarray,
    measured: MeasuredBank | None,
    relaxation: Relaxation | None,
    error: RuleError | None,
) -> Spectrum:
    if relaxation is not None:
        s = trimmed(relaxation.spectrum(1e-2 / float(w[-1])))
        return s if error is None else s.scaled(error.time_factor)
    assert measured is not None  # one of the two routes
    tau = log_grid(
        min(m.tau[0] for m in measured.components), max(m.tau[-1] for m in measured.components), 6
    )
    t, g = central.times, central.modulus[0]
    held = (g > 1e-20 * g.max()) & (t > 1e-2 * tau[0])
    x = positive_modes(t[held], g[held], tau)
    return trimmed(Spectrum(tau[x > 0], x[x > 0]))


def _without_flow(
    values: dict[str, float | None], central: Response, inner: np.ndarray
) -> dict[str, float | None]:
    """Melt flow rates only where most of the flow lies within the measured frequencies."""
    c = central.curves(inner)
    lowest = float(np.hypot(c.storage[0, 0], c.loss[0, 0]))
    from mwdlink.relaxation.flow import wall_stress

    out = dict(values)
    for key in values:
        # the integral weighs with stress cubed: what lies below a tenth of it is a thousandth
        if key.startswith("MFR") and lowest > 0.1 * float(wall_stress(float(key.split("@")[1]))):
            out[key] = None
    return out


def _offset_of(offsets: RuleOffsets, i: int) -> Any:
    return lambda omega: offsets.moduli(i, omega)


def _fraction_draws(phi: np.ndarray, s: Settings) -> tuple[np.ndarray, dict[str, np.ndarray]]:
    """Fractions of each member (m, n), perturbed by the weighing error."""
    m = max(s.members, 0)
    if m == 0 or s.fraction_uncertainty <= 0:
        return np.tile(phi, (m, 1)), {}
    rng = np.random.default_rng(np.random.SeedSequence([s.seed, 0x66]))
    z = rng.standard_normal((m, phi.size)) * s.fraction_uncertainty
    shares = np.clip(phi + (z - z.mean(axis=1, keepdims=True)) * (phi > 0), 0.0, 1.0)
    shares /= shares.sum(axis=1, keepdims=True)
    return shares, {"noise": shares[:, :-1]}


def _noise_marks(bank: MeasuredBank, members: int) -> np.ndarray:
    """One number a member and component that says which refit it took: the mean of ln g tau."""
    rows = np.array([1 + i % max(bank.members, 1) for i in range(members)])
    rows = np.minimum(rows, bank.members)
    return np.stack([np.log(m.strength[rows] @ m.tau) for m in bank.components], axis=1)


def _averages(components: Sequence[Component], shares: np.ndarray) -> dict[str, np.ndarray]:
    """Mn, Mw, Mz, dispersity of blends of shares (k, n), from the components' own moments."""
    d = [c.distribution for c in components]
    moments = {k: np.array([x.moment(k) for x in d]) for k in (-1, 1, 2)}  # type: ignore[union-attr]
    mn, mw = 1.0 / (shares @ moments[-1]), shares @ moments[1]
    return {
        "Mn_g_per_mol": mn,
        "Mw_g_per_mol": mw,
        "Mz_g_per_mol": shares @ moments[2] / mw,
        "dispersity": mw / mn,
    }


def _average_bands(
    components: Sequence[Component], shares: np.ndarray, averages: Mapping[str, float]
) -> dict[str, Uncertain]:
    if not averages:
        return {}
    if len(shares) == 0 or np.ptp(shares, axis=0).max() == 0:
        return {k: Uncertain(v, v, v) for k, v in averages.items()}
    rows = _averages(components, shares)
    return {k: Uncertain.from_samples(rows[k], averages[k]) for k in averages}


def _central_map(
    route: Any,
    phi: np.ndarray,
    inner: np.ndarray,
    density: float,
    loads: Sequence[float],
    at: Sequence[float],
    fix: Any,
    belief: ExponentBelief,
    points: int = MAP_POINTS,
) -> tuple[np.ndarray, Quadratic | None, dict[str, np.ndarray]]:
    """Every property at even fractions; three curves do for exponent 2 and two components."""
    first = np.linspace(0.0, 1.0, points)
    quadratic = None
    if phi.size == 2 and belief.centre == 2.0:
        three = np.array([[1.0, 0.0], [0.0, 1.0], [0.5, 0.5]])
        quadratic = Quadratic.of(route.central(three), inner)
        curves = Curves(inner, *quadratic.curves(first))
    else:
        curves = route.central(along(first, phi)).curves(inner)
    return first, quadratic, properties_of(fix(curves), density, 0.0, loads, at)


def _member_map(
    route: Any,
    phi: np.ndarray,
    first: np.ndarray,
    inner: np.ndarray,
    density: float,
    loads: Sequence[float],
    at: Sequence[float],
    fix: Any,
    offsets: RuleOffsets | None,
    s: Settings,
) -> dict[str, np.ndarray]:
    """The members' properties at fewer fractions, shape (m, q) each."""
    if s.members == 0:
        return {}
    rows = along(first, phi)
    picked = np.unique(np.linspace(0, s.members - 1, min(MOST_MAP_MEMBERS, s.members)).astype(int))
    found: dict[str, list[np.ndarray]] = {}
    for i in picked:
        curves = moved(fix(route.member(int(i), rows).curves(inner)), offsets, int(i))
        lost = 0.0 if route.draws is None else float(route.draws.lost[i])
        for name, x in properties_of(curves, density, lost, loads, at).items():
            found.setdefault(name, []).append(x)
    return {k: np.array(v) for k, v in found.items()}


def _classical(
    route: Any,
    phi: np.ndarray,
    melt: Melt,
    inner: np.ndarray,
    terminal: bool,
    first: np.ndarray,
) -> tuple[dict[str, Any], dict[str, np.ndarray]]:
    """What a formulator would otherwise use, from the same components' zero-shear viscosities."""
    if not terminal:
        return {}, {}
    pure = route.central(np.eye(phi.size)).terminal[0]
    a = melt.law_exponent
    rows = along(first, phi)
    out = {
        "eta0_log_additive_Pa_s": float(log_additive(phi, pure)[0]),
        "eta0_Mw_additive_Pa_s": float(root_additive(phi, pure, a)[0]),
        "law_exponent": a,
    }
    columns = {
        "fraction [-]": first,
        "eta0 [Pa s]": route.central(rows).terminal[0],
        "eta0 log-additive [Pa s]": log_additive(rows, pure),
        "eta0 Mw-additive [Pa s]": root_additive(rows, pure, a),
    }
    return out, columns


def _difference(
    route: Any, other: Any, phi: np.ndarray, w: np.ndarray, measured: MeasuredBank
) -> dict[str, Any]:
    """The other route against this one, over the components' common frequencies."""
    a, b = route.central(phi), other.central(phi)
    one, two = a.moduli(w), b.moduli(w)
    gaps = [np.log10(y[0] / x[0]) for x, y in zip(one, two, strict=True)]
    return {
        "other_route": other.name,
        "storage_decades": float(np.sqrt(np.mean(gaps[0] ** 2))),
        "loss_decades": float(np.sqrt(np.mean(gaps[1] ** 2))),
        "mean_decades": float(np.mean(gaps)),
        "eta0_ratio": float(b.terminal[0][0] / a.terminal[0][0]) if measured.terminal else None,
    }


def _sweep_cautions(
    components: Sequence[Component], bank: MeasuredBank | None, w: np.ndarray
) -> tuple[Caution, ...]:
    assert bank is not None  # only called on the route through sweeps
    out = []
    short: list[Modes] = [m for m in bank.components if not m.terminal]
    if short:
        names = ", ".join(
            c.name for c, m in zip(components, bank.components, strict=True) if not m.terminal
        )
        out.append(
            Caution(
                "components_not_terminal",
                f"The sweep of {names} does not reach terminal flow: zero-shear viscosity, "
                "compliance and mean time of blends are lower bounds.",
            )
        )
    low, high = bank.omega
    if w[0] < low * (1 - 1e-6) or w[-1] > high * (1 + 1e-6):
        out.append(
            Caution(
                "beyond_components",
                f"Frequencies outside {low:.3g} to {high:.3g} rad/s, the components' common "
                "range, are a smooth continuation, not measured.",
            )
        )
    return tuple(out)
