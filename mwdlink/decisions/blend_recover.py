"""The fractions of a blend read back from its rheology, with what may be wrong in the reading."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.optimize import least_squares

from mwdlink.decisions.blend_rules import BlendData, Preferred, Rule
from mwdlink.decisions.ensemble import LEVEL
from mwdlink.quantity import Uncertain

FRACTIONS = np.linspace(0.0, 1.0, 201)
MEMBERS = 80
# a standard error no reading is better than: pellets sampled for a disc of a gram
LEAST_ERROR = 0.003
# beyond this half width the rheology does not tell the fraction
BLIND = 0.2
# disagreement is said at 2.6 standard errors (99 %): with six blends one false alarm in sixteen
# studies, where 90 % would give one in every second
DISAGREES = 2.576


@dataclass(frozen=True, eq=False)
class Recovered:
    """Fractions read back.

    Attributes
    ----------
    fractions : tuple of Uncertain
        By component [-].
    agrees : bool or None
        With the weighed ones; None where the rheology cannot tell.
    misfit : float
        Root mean square residual at the recovered fractions [decades].
    """

    fractions: tuple[Uncertain, ...]
    agrees: bool | None
    misfit: float


@dataclass(frozen=True)
class RuleSpread:
    """Smooth errors that remain of a rule on other blends: standard deviations.

    Attributes
    ----------
    offset : float
        Common to all frequencies [decades].
    slope : float
        Per decade of frequency [decades].
    """

    offset: float
    slope: float

    @classmethod
    def of(cls, residuals: Sequence[np.ndarray], omegas: Sequence[np.ndarray]) -> RuleSpread:
        """From residuals (2 n,) of several blends at their frequencies (n,); robustly."""
        offsets, slopes = [], []
        for r, w in zip(residuals, omegas, strict=True):
            x = np.log10(w) - np.log10(w).mean()
            x = np.concatenate([x, x])
            offsets.append(float(np.mean(r)))
            slopes.append(float(x @ r / max(x @ x, 1e-9)))
        if len(offsets) < 2:
            return cls(0.02, 0.01)

        def size(values: list[float]) -> float:
            # about zero, not about their mean: a common bias is an error too
            return float(1.4826 * np.median(np.abs(values)))

        return cls(max(size(offsets), 0.002), max(size(slopes), 0.001))


def recover(
    rule: Rule,
    data: BlendData,
    others: Preferred,
    spread: RuleSpread,
    weighing: float,
    seed: int = 0,
    members: int = MEMBERS,
) -> Recovered:
    """Read a blend's fractions back by fitting its sweep with the components' curves.

    Parameters
    ----------
    rule : Rule
    data : BlendData
    others : Preferred
        Exponent and time factor from the other blends, so that the blend does not judge itself.
    spread : RuleSpread
        What the rule missed on the other blends.
    weighing : float
        Standard error of a weighed fraction [-].
    seed, members : int
    """
    rng = np.random.default_rng(np.random.SeedSequence([seed, 0x7265]))
    fit = _fit_two if data.phi.size == 2 else _fit_many
    best, misfit = fit(rule, data, data.log_moduli, others.exponent, others.factor, None)
    x = np.log10(data.omega) - np.log10(data.omega).mean()
    x = np.concatenate([x, x])
    rows = []
    count = members if data.phi.size == 2 else members // 2
    for k in range(count):
        e = float(np.clip(others.exponent + others.spread * rng.standard_normal(), 1.0, 8.0))
        shape = spread.offset * rng.standard_normal() + spread.slope * rng.standard_normal() * x
        moved = (
            data.log_moduli
            + data.sigma * rng.standard_normal(data.sigma.size)
            + np.log(10.0) * shape
        )
        rows.append(fit(rule, data, moved, e, others.factor, k)[0])
    sample = np.array(rows)
    out, off = [], 0.0
    blind = False
    for i in range(data.phi.size):
        u = Uncertain.from_samples(sample[:, i], float(best[i]), level=LEVEL)
        half = 0.5 * float(np.subtract(*np.quantile(sample[:, i], [0.95, 0.05]))) / 1.645
        error = float(np.sqrt(half**2 + weighing**2 + LEAST_ERROR**2))
        out.append(u)
        off = max(off, abs(float(best[i]) - float(data.phi[i])) / error)
        blind = blind or 1.645 * half > BLIND
    return Recovered(tuple(out), None if blind else bool(off <= DISAGREES), misfit)


def _fit_two(
    rule: Rule,
    data: BlendData,
    target: np.ndarray,
    exponent: float,
    factor: float,
    member: int | None,
) -> tuple[np.ndarray, float]:
    phi = np.stack([FRACTIONS, 1 - FRACTIONS], axis=1)
    up, out = rule.response(phi, exponent, member).moduli(data.omega * factor)
    miss = (np.log(np.hstack([up, out])) - target) / data.sigma
    cost = np.sum(miss**2, axis=1)
    i = int(np.argmin(cost))
    p = float(FRACTIONS[i])
    if 0 < i < FRACTIONS.size - 1:
        a, b, c = cost[i - 1], cost[i], cost[i + 1]
        p += 0.5 * (a - c) / max(a - 2 * b + c, 1e-300) * (FRACTIONS[1] - FRACTIONS[0])
    rms = float(np.sqrt(np.mean((miss[i] * data.sigma) ** 2)) / np.log(10.0))
    return np.array([p, 1 - p]), rms


def _fit_many(
    rule: Rule,
    data: BlendData,
    target: np.ndarray,
    exponent: float,
    factor: float,
    member: int | None,
) -> tuple[np.ndarray, float]:
    w = data.omega * factor

    def miss(free: np.ndarray) -> np.ndarray:
        last = 1.0 - free.sum()
        phi = np.clip(np.append(free, last), 0.0, None)
        up, out = rule.response((phi / phi.sum())[None, :], exponent, member).moduli(w)
        r = (np.log(np.concatenate([up[0], out[0]])) - target) / data.sigma
        return np.append(r, 1e3 * min(last, 0.0))

    start = np.clip(data.phi[:-1], 0.02, 0.96)
    start = start / max(1.0, start.sum() / 0.98)
    found = least_squares(
        miss, start, bounds=(0.0, 1.0), diff_step=1e-3, max_nfev=25, xtol=1e-6, ftol=1e-6
    )
    phi = np.clip(np.append(found.x, 1.0 - found.x.sum()), 0.0, None)
    phi = phi / phi.sum()
    r = miss(phi[:-1])[:-1] * data.sigma / np.log(10.0)
    return phi, float(np.sqrt(np.mean(r**2)))
