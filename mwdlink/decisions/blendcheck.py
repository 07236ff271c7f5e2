"""Measured blends of known fractions held against the mixing rule."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, ClassVar

import numpy as np

from mwdlink.chains.polymer import Polymer
from mwdlink.decisions.blend_recover import Recovered, RuleSpread, recover
from mwdlink.decisions.blend_rules import (
    BlendData,
    KernelRule,
    Preferred,
    Rule,
    Surface,
    SweptRule,
    exponent_noise,
    preferred,
    ranking,
    residuals,
    surface,
)
from mwdlink.decisions.blend_sweeps import MeasuredBank, Modes, modes_of
from mwdlink.decisions.blend_verdict import verdict_of
from mwdlink.decisions.components import (
    Component,
    Study,
    at_temperature,
    check_fractions,
    settled,
    validity_of,
)
from mwdlink.decisions.ensemble import kernels_to_use
from mwdlink.decisions.properties import Curves, crossovers
from mwdlink.decisions.response import Bank, Response
from mwdlink.decisions.trust import Decade, RuleError, Trust
from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.measurement.noise import noise_of
from mwdlink.quantity import Uncertain
from mwdlink.relaxation.operator import log_grid
from mwdlink.result import Result

TRUSTED_DECADES = 0.05
"""A decade of frequency is trusted where the rule missed by no more than this [decades]."""

REFITS = 80


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


@dataclass(frozen=True, eq=False)
class BlendCheck(Result):
    """How far the mixing rule can be trusted for these components.

    Attributes
    ----------
    polymer : Polymer
    components : tuple of Component
    route : str
        `sweeps` or `distributions`: which prediction was judged.
    blends : tuple of CheckedBlend
    exponent : Uncertain
        Mixing exponent the agreeing blends prefer [-].
    left_out : float
        Root mean square error on left-out blends that agree [decades].
    rules : tuple of mapping
        Ranking by left-out error.
    residual_columns : mapping of str to list
        Bias and scatter per blend and decade of frequency.
    trust : Trust
    verdict : str
    warnings : tuple of Caution
    """

    command: ClassVar[str] = "blendcheck"
    main_table: ClassVar[str] = "blends.csv"

    polymer: Polymer
    components: tuple[Component, ...]
    route: str
    blends: tuple[CheckedBlend, ...]
    exponent: Uncertain
    left_out: float
    rules: tuple[Mapping[str, Any], ...]
    residual_columns: Mapping[str, list[Any]] = field(repr=False)
    trust: Trust
    verdict: str
    temperature_C: float = 0.0
    warnings: tuple[Caution, ...] = ()

    @property
    def trusted(self) -> tuple[float, float] | None:
        """Range of frequency in which the rule may be trusted [rad/s]."""
        good = [d for d in self.trust.routes[self.route].decades if d.trusted]
        return (good[0].low, good[-1].high) if good else None

    def payload(self) -> dict[str, Any]:
        span = self.trusted
        return {
            "verdict": self.verdict,
            "blends": [b.to_dict() for b in self.blends],
            "exponent": self.exponent,
            "left_out": {
                "scatter_decades": self.left_out,
                "by_route": {k: r.scatter for k, r in self.trust.routes.items()},
            },
            "rules": [dict(r) for r in self.rules],
            "trusted": None
            if span is None
            else {"omega_low_rad_per_s": span[0], "omega_high_rad_per_s": span[1]},
            "route": self.route,
            "temperature_C": self.temperature_C,
        }

    def tables(self) -> dict[str, Any]:
        import pandas as pd

        rows = []
        for b in self.blends:
            row: dict[str, Any] = {"blend": b.name}
            for name, f in b.weighed.items():
                u = b.recovered[name]
                row |= {
                    f"weighed {name} [-]": f,
                    f"recovered {name} [-]": u.value,
                    f"recovered {name} low [-]": u.low,
                    f"recovered {name} high [-]": u.high,
                }
            row |= {
                "agrees": {True: "yes", False: "no", None: "cannot judge"}[b.agrees],
                "bias [decades]": b.bias,
                "scatter [decades]": b.scatter,
                "eta0 predicted/measured [-]": b.eta0_ratio,
                "crossover omega predicted/measured [-]": b.crossover_ratio,
            }
            rows.append(row)
        return {
            "blends.csv": pd.DataFrame(rows),
            "residuals.csv": pd.DataFrame(dict(self.residual_columns)),
            "rules.csv": pd.DataFrame(
                [
                    {
                        "kernel": r["kernel"],
                        "exponent [-]": r["exponent"],
                        "exponent fitted": "yes" if r["fitted"] else "no",
                        "scatter on a blend left out [decades]": r["scatter_decades"],
                    }
                    for r in self.rules
                ]
            ),
            "trust.toml": self.trust.to_toml(),
        }

    def to_frame(self) -> Any:
        return self.tables()["blends.csv"]

    def answer(self) -> str:
        return self.verdict.split(". ")[0].rstrip(".") + "."

    def paragraph(self) -> str:
        e = self.exponent
        return (
            f"{self.verdict} The blends prefer a mixing exponent of {e.value:.3g} "
            f"({e.low:.3g} to {e.high:.3g}); predicted and measured moduli of a blend that was "
            f"left out differ by {self.left_out:.2g} decades (root mean square)."
        )

    def cannot_say(self) -> tuple[str, ...]:
        out = [
            "A blend that disagrees may be mislabelled, badly mixed or degraded; the rheology of "
            "one sample does not tell which. Weigh, mix and measure it again.",
        ]
        if len(self.blends) < 3:
            out.append(
                "With fewer than three blends it cannot be told which of them is the odd one, and "
                "the exponent leans on its prior."
            )
        return tuple(out)


def check_blends(
    study: Study,
    *,
    kernels: Any = None,
    rouse: bool = True,
    noise: float | None = None,
    route: str | None = None,
    seed: int = 0,
) -> BlendCheck:
    """Hold measured blends of known fractions against the rule.

    Parameters
    ----------
    study : Study
        Components (distribution, sweep or both) and blends with weighed fractions and sweeps.
    kernels : sequence of str, optional
        For the ranking through distributions; default all the card can serve.
    rouse : bool
    noise : float, optional
        Relative noise of all sweeps [-]; default their columns, else estimated.
    route : str, optional
        Which prediction is judged; default sweeps where all components have them.
    seed : int

    Returns
    -------
    BlendCheck
        Its `trust` carries the error found into later predictions.

    Raises
    ------
    InputError
        No blends, no common route, or blends measured where the components were not.
    """
    melt = study.melt
    components, notes = settled(study.components, study.polymer, melt.temperature_C)
    blends = [b for b in study.blends if b.sweep is not None]
    if not blends:
        raise InputError(
            "the study has no measured blend.",
            path=study.paths[0] if study.paths else None,
            remedy="Add [[blend]] entries with name, fractions and sweep.",
        )
    swept = all(c.sweep is not None for c in components)
    known = all(c.distribution is not None for c in components)
    main = route or ("sweeps" if swept else "distributions")
    if (main == "sweeps" and not swept) or (main == "distributions" and not known):
        raise InputError(
            "the components have no common route: give every component a sweep, or every "
            "component a distribution."
        )
    bank = None
    if swept:
        bank = MeasuredBank(
            [
                modes_of(c.sweep, REFITS, seed + 17 * i, noise)  # type: ignore[arg-type]
                for i, c in enumerate(components)
            ]
        )
    data, measured, said = _data(study, components, blends, bank, noise, melt.temperature_C)
    rules: list[Rule] = []
    if bank is not None:
        rules.append(SweptRule(bank))
    if known:
        reach = max(float(d.omega[-1]) for d in data) * 10.0
        through = Bank([c.distribution for c in components], melt, rouse, reach)  # type: ignore[misc]
        rules += [KernelRule(through, k) for k in kernels_to_use(melt, kernels)]
    surfaces = [surface(r, data) for r in rules]
    everyone = list(range(len(data)))
    chosen = _main_surface(surfaces, main, everyone)
    spread_noise = 0.0
    if isinstance(chosen.rule, SweptRule):
        spread_noise = exponent_noise(chosen.rule, data, chosen.best(everyone)[0], chosen.scale)
    checked, misses = _check_each(study, components, chosen, data, measured, spread_noise, seed)
    good = [i for i, b in enumerate(checked) if b.agrees is not False] or everyone
    together = preferred(chosen, good, spread_noise)
    low, high = together.interval()
    exponent = Uncertain(together.exponent, low, high)
    table = ranking(surfaces, data, good)
    routes = {main: _error(chosen, data, checked, misses, good, together, exponent)}
    for other in ("sweeps", "distributions"):
        mine = [s for s in surfaces if s.rule.route == other]
        if other == main or not mine:
            continue
        s = _main_surface(mine, other, good)
        also, errors = _check_each(
            study, components, s, data, measured, 0.0, seed, recovering=False
        )
        p = preferred(s, good)
        span = p.interval()
        routes[other] = _error(
            s, data, also, errors, good, p, Uncertain(p.exponent, span[0], span[1])
        )
    left_out = float(np.sqrt(np.mean([np.mean(misses[i] ** 2) for i in good])))
    trust = Trust(
        study.polymer.name,
        melt.temperature_C,
        tuple(c.name for c in components),
        tuple(data[i].name for i in good),
        tuple(b.name for b in checked if b.agrees is False),
        routes,
    )
    columns = _decades_table(data, misses)
    factor = together.factor
    plain = [
        float(
            np.mean(residuals(chosen.rule.response(d.phi[None, :], 2.0), 0, d, np.array([factor])))
        )
        for d in data
    ]
    text = verdict_of(checked, left_out, exponent, routes[main], table, plain, TRUSTED_DECADES)
    warnings = merge_cautions(
        study.warnings,
        study.polymer.warnings,
        melt.warnings,
        notes,
        said,
        validity_of(components, None, melt).warnings,
    )
    return BlendCheck(
        polymer=study.polymer,
        components=components,
        route=main,
        blends=tuple(checked),
        exponent=exponent,
        left_out=left_out,
        rules=tuple(table),
        residual_columns=columns,
        trust=trust,
        verdict=text,
        temperature_C=melt.temperature_C,
        warnings=warnings,
    )


def _data(
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


def _main_surface(surfaces: Sequence[Surface], route: str, blends: Sequence[int]) -> Surface:
    """The surface of a route; through distributions that of the kernel which suits best."""
    mine = [s for s in surfaces if s.rule.route == route]
    if len(mine) == 1:
        return mine[0]
    # one scale for all kernels, else each would be forgiven by its own measure
    scale = min(s.scale for s in mine)
    level = [Surface(s.rule, s.rms, scale) for s in mine]
    return min(level, key=lambda s: float(s.loss(blends).min()))


def _check_each(
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


def _decades_table(data: Sequence[BlendData], misses: Sequence[np.ndarray]) -> dict[str, list[Any]]:
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


def _error(
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
