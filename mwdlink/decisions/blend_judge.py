"""Each measured blend against the rule that the others prefer: residuals, ratios, trust."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from mwdlink.decisions.blend_recover import Recovered, RuleSpread, recover
from mwdlink.decisions.blend_rules import (
    BlendData,
    Preferred,
    Surface,
    SweptRule,
    preferred,
    residuals,
)
from mwdlink.decisions.blend_sweeps import MeasuredBank, Modes, modes_of
from mwdlink.decisions.components import Component, Study, at_temperature, check_fractions
from mwdlink.decisions.properties import Curves, crossovers
from mwdlink.decisions.response import Response
from mwdlink.decisions.trust import Decade, RuleError
from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.measurement.noise import noise_of
from mwdlink.quantity import Uncertain
from mwdlink.relaxation.operator import log_grid

TRUSTED_DECADES = 0.05
"""A decade of frequency is trusted where the rule missed by no more than this [decades]."""


@dataclass(frozen=True, eq=False)
class CheckedBlend:
    """One blend against the rule found on the others.

    Attributes
    ----------
    name : str
    weighed : mapping of str to float
    recovered : mapping of str to Uncertain
    agrees : bool or None
    bias, scatter : float
        Mean and root mean square of log10(predicted/measured) over both moduli at the weighed
        fractions [decades].
    misfit : float
        Root mean square residual at the recovered fractions [decades].
    eta0_ratio, crossover_ratio : float or None
        Predicted over measured.
    exponent : float
        Of the other blends [-].
    """

    name: str
    weighed: Mapping[str, float]
    recovered: Mapping[str, Uncertain]
    agrees: bool | None
    bias: float
    scatter: float
    misfit: float
    eta0_ratio: float | None
    crossover_ratio: float | None
    exponent: float

    def to_dict(self) -> dict[str, Any]:
        return {
            "name": self.name,
            "weighed": dict(self.weighed),
            "recovered": dict(self.recovered),
            "agrees": self.agrees,
            "bias_decades": self.bias,
            "scatter_decades": self.scatter,
            "misfit_at_recovered_decades": self.misfit,
            "eta0_ratio": self.eta0_ratio,
            "crossover_ratio": self.crossover_ratio,
            "exponent_of_the_others": self.exponent,
        }


def blend_data(
    study: Study,
    components: Sequence[Component],
    blends: Sequence[Any],
    bank: MeasuredBank | None,
    noise: float | None,
    temperature_C: float,
) -> tuple[list[BlendData], list[Modes], tuple[Caution, ...]]:
    """Each blend's points within the components' range, and its own spectrum."""
    out, measured = [], []
    said: list[Caution] = []
    for k, b in enumerate(blends):
        unknown = set(b.fractions) - {c.name for c in components}
        if unknown:
            raise InputError(
                f"blend {b.name!r} names {', '.join(sorted(unknown))}, which is no component."
            )
        try:
            phi = check_fractions(study.shares(b), len(components))
        except InputError as error:
            raise InputError(f"blend {b.name!r}: {error.message}", remedy=error.remedy) from None
        sweep, notes = at_temperature(b.sweep, b.temperature_C, study.polymer, temperature_C)
        said.extend(notes)
        said.extend(sweep.warnings)
        inside = np.ones(len(sweep), dtype=bool)
        if bank is not None:
            low, high = bank.omega
            inside = (sweep.omega >= low * 0.999) & (sweep.omega <= high * 1.001)
        if inside.sum() < 4:
            raise InputError(
                f"blend {b.name!r} has fewer than four points where all components were measured.",
                path=b.sweep.path,
                remedy="Measure components and blends over the same frequencies.",
            )
        sweep = sweep.select(inside)
        if len(sweep) < len(b.sweep):
            said.append(
                Caution(
                    "blend_points_outside",
                    f"{len(b.sweep) - len(sweep)} points of {b.name} lie outside the components' "
                    "common range and are not judged.",
                )
            )
        weights = noise_of(sweep, noise)
        out.append(
            BlendData(
                b.name,
                phi,
                np.asarray(sweep.omega),
                np.log(np.concatenate([sweep.storage, sweep.loss])),
                np.concatenate([weights.sigma_storage, weights.sigma_loss]),
            )
        )
        measured.append(modes_of(sweep, 0, k, noise))
    return out, measured, merge_cautions(said)


def main_surface(surfaces: Sequence[Surface], route: str, blends: Sequence[int]) -> Surface:
    """The surface of a route; through distributions that of the kernel which suits best."""
    mine = [s for s in surfaces if s.rule.route == route]
    if len(mine) == 1:
        return mine[0]
    # one scale for all kernels, else each would be forgiven by its own measure
    scale = min(s.scale for s in mine)
    level = [Surface(s.rule, s.rms, scale) for s in mine]
    return min(level, key=lambda s: float(s.loss(blends).min()))


def check_each(
    study: Study,
    components: Sequence[Component],
    s: Surface,
    data: Sequence[BlendData],
    measured: Sequence[Modes],
    noise: float,
    seed: int,
    recovering: bool = True,
) -> tuple[list[CheckedBlend], list[np.ndarray]]:
    """Every blend against the exponent (and time law) of the others."""
    everyone = list(range(len(data)))
    others = [preferred(s, [j for j in everyone if j != i], noise) for i in everyone]
    misses: list[np.ndarray] = []
    responses: list[Response] = []
    for i, d in enumerate(data):
        r = s.rule.response(d.phi[None, :], others[i].exponent)
        misses.append(residuals(r, 0, d, np.array([others[i].factor]))[0])
        responses.append(r.scaled(others[i].factor))
    out = []
    for i, d in enumerate(data):
        if recovering:
            rest = [j for j in everyone if j != i]
            spread = RuleSpread.of([misses[j] for j in rest], [data[j].omega for j in rest])
            found = recover(s.rule, d, others[i], spread, study.fraction_uncertainty, seed + i)
        else:
            found = Recovered(tuple(Uncertain(float(x)) for x in d.phi), None, 0.0)
        out.append(
            CheckedBlend(
                d.name,
                {c.name: float(x) for c, x in zip(components, d.phi, strict=True)},
                {c.name: u for c, u in zip(components, found.fractions, strict=True)},
                found.agrees,
                float(np.mean(misses[i])),
                float(np.sqrt(np.mean(misses[i] ** 2))),
                found.misfit,
                _eta0_ratio(s, responses[i], measured[i]),
                _crossover_ratio(responses[i], d, measured[i]),
                others[i].exponent,
            )
        )
    return out, misses


def _eta0_ratio(s: Surface, r: Response, m: Modes) -> float | None:
    if not m.terminal:
        return None
    if isinstance(s.rule, SweptRule) and not s.rule.bank.terminal:
        return None
    return float(r.terminal[0][0] / m.eta0)


def _crossover_ratio(r: Response, d: BlendData, m: Modes) -> float | None:
    w = log_grid(float(d.omega[0]), float(d.omega[-1]), 10)
    if w.size < 4:
        return None
    one = np.ones(1)
    up, out = m.moduli(w)
    seen = crossovers(Curves(w, up[None, :], out[None, :], one, one))[0][0]
    told = crossovers(Curves(w, *r.moduli(w), one, one))[0][0]
    return float(told / seen) if np.isfinite(seen) and np.isfinite(told) else None


def _decade_of(omega: np.ndarray) -> np.ndarray:
    x = np.log10(omega)
    decade = np.floor(x + 1e-9).astype(int)
    # a last point just on the border of a decade belongs to the one below
    return np.where((decade == decade.max()) & (x - decade < 0.05), decade - 1, decade)


def decades_table(data: Sequence[BlendData], misses: Sequence[np.ndarray]) -> dict[str, list[Any]]:
    out: dict[str, list[Any]] = {
        k: []
        for k in (
            "blend",
            "omega low [rad/s]",
            "omega high [rad/s]",
            "points",
            "bias G' [decades]",
            "scatter G' [decades]",
            "bias G'' [decades]",
            "scatter G'' [decades]",
        )
    }
    for d, r in zip(data, misses, strict=True):
        n = d.omega.size
        decade = _decade_of(d.omega)
        for k in np.unique(decade):
            mask = decade == k
            a, b = r[:n][mask], r[n:][mask]
            row = (
                d.name,
                float(10.0**k),
                float(10.0 ** (k + 1)),
                int(mask.sum()),
                float(a.mean()),
                float(a.std()),
                float(b.mean()),
                float(b.std()),
            )
            for name, value in zip(out, row, strict=True):
                out[name].append(value)
    return out


def rule_error(
    s: Surface,
    data: Sequence[BlendData],
    checked: Sequence[CheckedBlend],
    misses: Sequence[np.ndarray],
    good: Sequence[int],
    together: Preferred,
    exponent: Uncertain,
) -> RuleError:
    """What later predictions should carry."""
    pooled: dict[int, tuple[list[np.ndarray], list[np.ndarray]]] = {}
    for i in good:
        n = data[i].omega.size
        decade = _decade_of(data[i].omega)
        for k in np.unique(decade):
            mask = decade == k
            a, b = pooled.setdefault(int(k), ([], []))
            a.append(misses[i][:n][mask])
            b.append(misses[i][n:][mask])
    decades = []
    top = max(float(data[i].omega[-1]) for i in good)
    for k in sorted(pooled):
        up, out = (np.concatenate(x) for x in pooled[k])
        rms = float(np.sqrt(np.mean(up**2))), float(np.sqrt(np.mean(out**2)))
        decades.append(
            Decade(
                float(10.0**k),
                min(float(10.0 ** (k + 1)), top),
                rms[0],
                rms[1],
                float(up.mean()),
                float(out.mean()),
                max(rms) <= TRUSTED_DECADES,
            )
        )
    ratios = [checked[i].eta0_ratio for i in good]
    logs = [np.log10(x) for x in ratios if x is not None and x > 0]
    return RuleError(
        s.rule.kernel,
        together.exponent,
        float(exponent.low or together.exponent),
        float(exponent.high or together.exponent),
        float(np.sqrt(np.mean([np.mean(misses[i] ** 2) for i in good]))),
        float(np.sqrt(np.mean(np.square(logs)))) if len(logs) >= 2 else None,
        together.factor,
        tuple(decades),
    )
