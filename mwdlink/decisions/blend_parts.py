"""Pieces of a blend's computation: averages, maps over the fraction, classical rules, cautions."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.decisions.blend_routes import RuleOffsets, along, moved, reached
from mwdlink.decisions.blend_sweeps import (
    MeasuredBank,
    Modes,
    Quadratic,
    log_additive,
    root_additive,
)
from mwdlink.decisions.components import Component
from mwdlink.decisions.ensemble import ExponentBelief
from mwdlink.decisions.gpc_band import MOMENTS, GpcBand, average_bands, averages_from
from mwdlink.decisions.predict import frequencies
from mwdlink.decisions.predicted import trimmed
from mwdlink.decisions.properties import Curves, properties_of
from mwdlink.decisions.response import Response
from mwdlink.decisions.trust import RuleError
from mwdlink.errors import Caution, InputError
from mwdlink.quantity import Uncertain
from mwdlink.relaxation.flow import wall_stress
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.modes import positive_modes
from mwdlink.relaxation.operator import log_grid
from mwdlink.relaxation.spectrum import Spectrum

if TYPE_CHECKING:
    from mwdlink.decisions.blend_compute import Settings

MAP_POINTS = 101
MOST_MAP_MEMBERS = 100


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


def common_frequencies(bank: MeasuredBank, omega: Any) -> np.ndarray:
    low, high = bank.omega
    if not low < high:
        raise InputError(
            "the components' sweeps have no common range of frequencies.",
            remedy="Shift them to one temperature or measure over a common range.",
        )
    return log_grid(low, high, 10) if omega is None else frequencies(omega)


def spectrum_of_blend(
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


def properties_known(
    curves: Curves,
    terminal: bool,
    density: float | None,
    lost: float | np.ndarray,
    loads: Sequence[float],
    at: Sequence[float],
) -> dict[str, np.ndarray]:
    """All properties; short of terminal flow a melt flow rate that is mostly unmeasured is NaN.

    Most of the flow must lie within the frequencies of the curves.
    """
    out = properties_of(curves, density, lost, loads, at)
    if terminal:
        return out
    lowest = np.hypot(curves.storage[:, 0], curves.loss[:, 0])
    for key in out:
        # the integral weighs with stress cubed: what lies below a tenth of it is a thousandth
        if key.startswith("MFR"):
            unknown = lowest > 0.1 * float(wall_stress(float(key.split("@")[1])))
            out[key] = np.where(unknown, np.nan, out[key])
    return out


def offset_of(offsets: RuleOffsets, i: int) -> Any:
    return lambda omega: offsets.moduli(i, omega)


def fraction_draws(phi: np.ndarray, s: Settings) -> tuple[np.ndarray, dict[str, np.ndarray]]:
    """Fractions of each member (m, n), perturbed by the weighing error."""
    m = max(s.members, 0)
    if m == 0 or s.fraction_uncertainty <= 0:
        return np.tile(phi, (m, 1)), {}
    rng = np.random.default_rng(np.random.SeedSequence([s.seed, 0x66]))
    z = rng.standard_normal((m, phi.size)) * s.fraction_uncertainty
    shares = np.clip(phi + (z - z.mean(axis=1, keepdims=True)) * (phi > 0), 0.0, 1.0)
    shares /= shares.sum(axis=1, keepdims=True)
    return shares, {"noise": shares[:, :-1]}


def noise_marks(bank: MeasuredBank, members: int) -> np.ndarray:
    """One number a member and component that says which refit it took: the mean of ln g tau."""
    rows = np.array([1 + i % max(bank.members, 1) for i in range(members)])
    rows = np.minimum(rows, bank.members)
    return np.stack([np.log(m.strength[rows] @ m.tau) for m in bank.components], axis=1)


def exact_averages(components: Sequence[Component], shares: np.ndarray) -> dict[str, np.ndarray]:
    """Mn, Mw, Mz, dispersity of blends of shares (k, n), from the components' own moments."""
    d = [c.distribution for c in components]
    moments = (shares @ np.array([x.moment(k) for x in d]) for k in MOMENTS)  # type: ignore[union-attr]
    return averages_from(*moments)


def average_bands_of(
    components: Sequence[Component],
    shares: np.ndarray,
    averages: Mapping[str, float],
    gpc: GpcBand | None,
    phi: np.ndarray,
) -> dict[str, Uncertain]:
    if not averages:
        return {}
    if gpc is not None:
        return average_bands(averages, gpc, shares, phi)
    if len(shares) == 0 or np.ptp(shares, axis=0).max() == 0:
        return {k: Uncertain(v, v, v) for k, v in averages.items()}
    rows = exact_averages(components, shares)
    return {k: Uncertain.from_samples(rows[k], averages[k]) for k in averages}


def central_map(
    route: Any,
    phi: np.ndarray,
    inner: np.ndarray,
    density: float,
    loads: Sequence[float],
    at: Sequence[float],
    terminal: bool,
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
    curves = reached(curves, terminal)
    return first, quadratic, properties_known(curves, terminal, density, 0.0, loads, at)


def member_map(
    route: Any,
    phi: np.ndarray,
    first: np.ndarray,
    inner: np.ndarray,
    density: float,
    loads: Sequence[float],
    at: Sequence[float],
    terminal: bool,
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
        own = reached(route.member(int(i), rows).curves(inner), terminal)
        curves = moved(own, offsets, int(i))
        lost = 0.0 if route.draws is None else float(route.draws.lost[i])
        for name, x in properties_known(curves, terminal, density, lost, loads, at).items():
            found.setdefault(name, []).append(x)
    return {k: np.array(v) for k, v in found.items()}


def classical_rules(
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


def routes_differ(
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


def sweep_cautions(
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
