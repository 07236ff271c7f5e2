"""Measured blends of known fractions held against the mixing rule."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, ClassVar

import numpy as np

from mwdlink.chains.polymer import Polymer
from mwdlink.decisions.blend_judge import (
    TRUSTED_DECADES,
    CheckedBlend,
    blend_data,
    check_each,
    decades_table,
    main_surface,
    rule_error,
)
from mwdlink.decisions.blend_rules import (
    KernelRule,
    Preferred,
    Rule,
    SweptRule,
    exponent_noise,
    exponent_of_versions,
    preferred,
    ranking,
    residuals,
    surface,
)
from mwdlink.decisions.blend_sweeps import MeasuredBank, modes_of
from mwdlink.decisions.blend_verdict import verdict_of
from mwdlink.decisions.components import (
    Component,
    Study,
    settled,
    validity_of,
)
from mwdlink.decisions.ensemble import kernels_to_use
from mwdlink.decisions.gpc_band import GpcBand
from mwdlink.decisions.response import Bank
from mwdlink.decisions.trust import Trust
from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.quantity import Uncertain
from mwdlink.result import Result

REFITS = 80
VERSIONS = 16


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
        """Widest range of frequency in which the rule may be trusted [rad/s]."""
        return max(self.trust.routes[self.route].trusted, key=lambda s: s[1] / s[0], default=None)

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
    data, measured, said = blend_data(study, components, blends, bank, noise, melt.temperature_C)
    rules: list[Rule] = []
    if bank is not None:
        rules.append(SweptRule(bank))
    if known:
        reach = max(float(d.omega[-1]) for d in data) * 10.0
        through = Bank([c.distribution for c in components], melt, rouse, reach)  # type: ignore[misc]
        rules += [KernelRule(through, k) for k in kernels_to_use(melt, kernels)]
    surfaces = [surface(r, data) for r in rules]
    everyone = list(range(len(data)))
    chosen = main_surface(surfaces, main, everyone)
    spread_noise = of_tables = 0.0
    if isinstance(chosen.rule, SweptRule):
        spread_noise = exponent_noise(chosen.rule, data, chosen.best(everyone)[0], chosen.scale)
    elif isinstance(chosen.rule, KernelRule):
        # an error of the tables that all blends share bends the exponent, but then it is the
        # exponent for these tables: it widens what is said of it, neither the verdict on a bag nor
        # the trust in blends of the same components
        own = [c.distribution for c in components]
        gpc = GpcBand.of(own, None, VERSIONS, seed, masses=False)  # type: ignore[arg-type]
        best = chosen.best(everyone)[0]
        of_tables = exponent_of_versions(chosen.rule, gpc, data, best, chosen.scale, VERSIONS)
    checked, misses = check_each(study, components, chosen, data, measured, spread_noise, seed)
    good = [i for i, b in enumerate(checked) if b.agrees is not False] or everyone
    together = preferred(chosen, good, spread_noise)
    exponent = _interval(preferred(chosen, good, float(np.hypot(spread_noise, of_tables))))
    table = ranking(surfaces, data, good)
    routes = {main: rule_error(chosen, data, checked, misses, good, together, _interval(together))}
    for other in ("sweeps", "distributions"):
        mine = [s for s in surfaces if s.rule.route == other]
        if other == main or not mine:
            continue
        s = main_surface(mine, other, good)
        also, errors = check_each(study, components, s, data, measured, 0.0, seed, recovering=False)
        p = preferred(s, good)
        routes[other] = rule_error(s, data, also, errors, good, p, _interval(p))
    left_out = float(np.sqrt(np.mean([np.mean(misses[i] ** 2) for i in good])))
    trust = Trust(
        study.polymer.name,
        melt.temperature_C,
        tuple(c.name for c in components),
        tuple(data[i].name for i in good),
        tuple(b.name for b in checked if b.agrees is False),
        routes,
    )
    columns = decades_table(data, misses)
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


def _interval(p: Preferred) -> Uncertain:
    low, high = p.interval()
    return Uncertain(p.exponent, low, high)
