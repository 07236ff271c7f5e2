"""What all the other claims lead one to expect of each: fits and draws of many melts at once.

For every family of distributions and every kernel the unknowns are fitted to all claims, and to all
but one in turn; around each fit melts are drawn and weighed by how well they keep to the claims
(importance weights), and families and kernels by their evidence. What the draws say of the claim
left out is its expected value.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from mwdlink.decisions.datasheet_claims import Claim
from mwdlink.decisions.datasheet_families import FAMILIES, RARITY
from mwdlink.decisions.datasheet_model import CARD, FLOW_ERROR, SheetModel

STEPS = 14
DRAWS = 48
# unknowns further out than this (standard deviations of the prior) are not believed
FARTHEST = 4.0


@dataclass(frozen=True, eq=False)
class Expected:
    """Draws of all quantities from fits that leave one claim out.

    Attributes
    ----------
    values : ndarray of shape (m, q)
        ln of every claim and shadow quantity of each draw.
    weights : ndarray of shape (m,)
        Sum 1.
    cost : float
        Least misfit of the claims that were kept.
    """

    values: np.ndarray
    weights: np.ndarray
    cost: float

    def mean_and_spread(self, column: int) -> tuple[float, float]:
        """Of ln of one quantity; NaN where it could not be computed."""
        y = self.values[:, column]
        good = np.isfinite(y)
        total = float(self.weights[good].sum())
        if total < 0.2:
            return float("nan"), float("nan")
        w = self.weights[good] / total
        mean = float(w @ y[good])
        return mean, float(np.sqrt(max(w @ (y[good] - mean) ** 2, 0.0)))


def claim_sigma(claims: Sequence[Claim]) -> np.ndarray:
    """Standard deviation of ln of each claim."""
    return np.array([0.5 * c.tolerance for c in claims])


def model_sigma(claims: Sequence[Claim]) -> np.ndarray:
    """What the way of predicting each claim is itself good for."""
    flow = {"melt flow": FLOW_ERROR, "flow rate ratio": FLOW_ERROR}
    return np.array([flow.get(c.kind, 0.0) for c in claims])


def expect(
    models: Sequence[SheetModel],
    claims: int,
    masks: np.ndarray,
    seed: int = 0,
    draws: int = DRAWS,
) -> tuple[Expected, ...]:
    """What the claims that each mask keeps lead one to expect of every quantity.

    Parameters
    ----------
    models : sequence of SheetModel
        One per kernel; the first `claims` of their quantities are the sheet's, the others are
        wanted but not claimed.
    claims : int
    masks : ndarray of shape (k, claims)
        1 where a claim is kept, 0 where it is left out.
    seed : int
    draws : int
        Per fit.

    Returns
    -------
    tuple of Expected
        One for each mask.
    """
    target, sigma = _target(models[0].claims[:claims])
    rng = np.random.default_rng(seed)
    collected: list[list[tuple[np.ndarray, np.ndarray, float]]] = [[] for _ in masks]
    start: dict[str, np.ndarray] = {}
    for model in models:
        for family in model.families:
            fitted = _fit(model, family, target, sigma, masks, start.get(family))
            z, cost, chol, evidence = fitted
            # kernels differ little: the next one starts where this one ended
            start[family] = z
            d = z.shape[1]
            push = rng.standard_normal((draws // 2, d))
            push = np.concatenate([push, -push])
            # z = mean + L^-T push, L L' the Hessian
            moved = np.linalg.solve(
                np.swapaxes(chol, 1, 2), np.broadcast_to(push.T, (len(masks), d, len(push)))
            )
            drawn = z[:, None, :] + np.swapaxes(moved, 1, 2)
            y = model.predict(drawn.reshape(-1, d), family).reshape(len(masks), len(push), -1)
            for i, mask in enumerate(masks):
                exact = _cost(y[i, :, :claims], drawn[i], target, sigma, mask)
                gauss = cost[i] - 2.0 * RARITY.get(family, 0.0) + np.sum(push**2, axis=1)
                log_weight = np.clip(-0.5 * (exact - gauss), -30.0, 3.0)
                collected[i].append((y[i], log_weight + evidence[i], float(cost[i])))
    out = []
    for parts in collected:
        log_weight = np.concatenate([p[1] for p in parts])
        weight = np.exp(log_weight - log_weight.max())
        out.append(
            Expected(
                np.concatenate([p[0] for p in parts]),
                weight / weight.sum(),
                min(p[2] for p in parts),
            )
        )
    return tuple(out)


def least_costs(
    models: Sequence[SheetModel],
    claims: int,
    masks: np.ndarray,
    shift: np.ndarray | float = 0.0,
) -> np.ndarray:
    """Least misfit over families and kernels of the claims that each mask keeps, shape (k,).

    With the distance from the prior in it: for claims of one melt, right within their tolerances,
    it scatters about as chi squared with as many degrees of freedom as claims were kept.

    Parameters
    ----------
    models, claims, masks
        As of `expect`.
    shift : ndarray of shape (k, claims), optional
        To add to ln of the claims.
    """
    target, sigma = _target(models[0].claims[:claims])
    target = target + shift
    start: dict[str, np.ndarray] = {}
    costs = []
    for model in models:
        for family in model.families:
            z, cost, _, _ = _fit(model, family, target, sigma, masks, start.get(family))
            start[family] = z
            costs.append(cost)
    return np.min(costs, axis=0)


def _target(claims: Sequence[Claim]) -> tuple[np.ndarray, np.ndarray]:
    target = np.log(np.array([c.value for c in claims]))
    return target, np.hypot(claim_sigma(claims), model_sigma(claims))


def _cost(
    y: np.ndarray, z: np.ndarray, target: np.ndarray, sigma: np.ndarray, mask: np.ndarray
) -> np.ndarray:
    """Misfit of claims kept and distance from the prior, shape (k,)."""
    r = np.nan_to_num((y - target) / sigma, nan=5.0, posinf=50.0, neginf=-50.0)
    r = np.clip(r, -200.0, 200.0) * mask
    return np.sum(r * r, axis=-1) + np.sum(z * z, axis=-1)


def _fit(
    model: SheetModel,
    family: str,
    target: np.ndarray,
    sigma: np.ndarray,
    masks: np.ndarray,
    start: np.ndarray | None = None,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Damped Gauss-Newton of all rows at once, from `start` (rows, d) or the prior's middle.

    Returns
    -------
    z : ndarray of shape (rows, d)
    cost : ndarray of shape (rows,)
    chol : ndarray of shape (rows, d, d)
        Cholesky factor of the Hessian.
    evidence : ndarray of shape (rows,)
        ln of the evidence by Laplace's approximation.
    """
    d = len(FAMILIES[family]) + len(CARD)
    k, n = masks.shape
    target = np.broadcast_to(target, (k, n))
    z = np.zeros((k, d)) if start is None else start.copy()
    damping = np.full(k, 0.3)
    y, slope = model.predict_and_slope(z, family, n)
    cost = _cost(y, z, target, sigma, masks)
    eye = np.eye(d)
    live = np.arange(k)
    for _ in range(STEPS):
        kept, wanted, now = masks[live], target[live], cost[live]
        r = np.clip(np.nan_to_num((y[live] - wanted) / sigma, nan=0.0), -200, 200) * kept
        j = slope[live] / sigma[:, None] * kept[:, :, None]
        gradient = np.einsum("knd,kn->kd", j, r) + z[live]
        hessian = np.einsum("knd,kne->kde", j, j) + eye
        damped = damping[live][:, None, None] * eye * np.einsum("kdd->kd", hessian)[:, None, :]
        step = np.linalg.solve(hessian + damped, -gradient[:, :, None])[:, :, 0]
        step *= np.minimum(1.0, 1.5 / np.maximum(np.abs(step).max(axis=1), 1e-12))[:, None]
        trial = np.clip(z[live] + step, -FARTHEST, FARTHEST)
        new_y, new_slope = model.predict_and_slope(trial, family, n)
        new_cost = _cost(new_y, trial, wanted, sigma, kept)
        better = new_cost <= now + 1e-9
        won = live[better]
        z[won], y[won], slope[won] = trial[better], new_y[better], new_slope[better]
        cost[won] = new_cost[better]
        damping[won] = np.maximum(damping[won] * 0.2, 1e-4)
        lost = live[~better]
        damping[lost] = np.minimum(damping[lost] * 8.0, 1e4)
        # rows that have arrived are not run again
        live = live[~(better & (now - new_cost < 1e-2))]
        if live.size == 0:
            break
    j = slope / sigma[:, None] * masks[:, :, None]
    hessian = np.einsum("knd,kne->kde", j, j) + eye
    chol = np.linalg.cholesky(hessian)
    cost = cost + 2.0 * RARITY.get(family, 0.0)
    evidence = -0.5 * cost - np.sum(np.log(np.einsum("kdd->kd", chol)), axis=1)
    return z, cost, chol, evidence
