"""Damped Gauss-Newton for many perturbed copies of one problem at once.

The copies of an ensemble are small and alike; stacked, their matrix products and factorisations
run without Python in between. The arithmetic of a copy does not depend on its neighbours.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg.lapack import dposv

from mwdlink.inversion.objective import LUMP_CENTRE, LUMP_SPREAD, Problem
from mwdlink.inversion.solve import (
    FARTHEST,
    FIRST_DAMPING,
    LEAST_DAMPING,
    LONGEST,
    REFUSED_DAMPING,
    SHORTER,
    SHORTEST,
    SLOW,
)

MAX_STEPS = 100
# a copy ends at a step that promised less of the objective than this: Mw is then good to 0.02 of
# its own standard deviation (rms of 60 copies; with 2e-2 it was 0.21)
TOLERANCE = 1e-2
# copies solved together: enough to hide the interpreter (25 took a tenth longer, 200 no less)
STACK = 100


@dataclass(frozen=True, eq=False)
class Copies:
    """Perturbed copies to solve.

    Attributes
    ----------
    u : ndarray of shape (m, n + 2)
        Starts.
    smoothing : ndarray of shape (m,)
    data, third, weak, lumps : ndarray
        Perturbations of the rows, shapes (m, n_r), (m, n - 3), (m, 3), (m, 2).
    survival : ndarray of shape (m, n_t, n + 2), optional
        Own survival matrices (another mixing exponent each); the problem's unless given.
    exponent : ndarray of shape (m,), optional
    """

    u: np.ndarray
    smoothing: np.ndarray
    data: np.ndarray
    third: np.ndarray
    weak: np.ndarray
    lumps: np.ndarray
    survival: np.ndarray | None = None
    exponent: np.ndarray | None = None

    def part(self, index: slice | np.ndarray) -> Copies:
        return Copies(
            self.u[index],
            self.smoothing[index],
            self.data[index],
            self.third[index],
            self.weak[index],
            self.lumps[index],
            None if self.survival is None else self.survival[index],
            None if self.exponent is None else self.exponent[index],
        )


def minimise_many(problem: Problem, copies: Copies) -> tuple[np.ndarray, np.ndarray]:
    """Solve all copies.

    Returns
    -------
    u : ndarray of shape (m, n + 2)
    converged : ndarray of bool, shape (m,)
    """
    m = copies.u.shape[0]
    u = np.empty_like(copies.u)
    ok = np.zeros(m, dtype=bool)
    for a in range(0, m, STACK):
        part = slice(a, min(a + STACK, m))
        u[part], ok[part] = _stack(problem, copies.part(part))
    return u, ok


class _State:
    """One stack of copies and everything their objective needs."""

    def __init__(self, problem: Problem, copies: Copies) -> None:
        self.problem, self.c = problem, copies
        f = problem.forward
        self.survival = f.survival if copies.survival is None else copies.survival
        m = copies.u.shape[0]
        self.power = np.full(m, f.exponent) if copies.exponent is None else copies.exponent
        kinds, self.which = np.unique(copies.smoothing, return_inverse=True)
        self.stiff = kinds[:, None, None] * problem.prior.rough + problem.prior.soft
        self.root = np.sqrt(copies.smoothing)[:, None]
        self.prior = prior = problem.prior
        self.lean_rows, self.lean_linear = f.rows.astype(np.float32), f.linear.astype(np.float32)
        self.lean_survival = self.survival.astype(np.float32)
        self.data = problem.data + problem.sigma * copies.data
        self.inverse = 1.0 / problem.sigma
        self.target = prior.weak_centre + copies.weak

    def rows(self, u: np.ndarray, index: np.ndarray) -> tuple[np.ndarray, ...]:
        """Weights, powers of the survival sum, data rows and all residuals of some copies."""
        e = np.exp(u - u.max(axis=1, keepdims=True))
        w = e / e.sum(axis=1, keepdims=True)
        k = self.survival_of(index)
        s = (w @ k.T) if k.ndim == 2 else np.matmul(k, w[:, :, None])[:, :, 0]
        p = s ** (self.power[index] - 1.0)[:, None]
        f = self.problem.forward
        y = (p * s) @ f.rows.T + w @ f.linear.T
        r = (np.log(y) - self.data[index]) * self.inverse
        prior = self.problem.prior
        t = self.root[index] * (u @ prior.third.T) - self.c.third[index]
        q = u @ prior.weak.T - self.target[index]
        lump = (np.log(np.maximum(w[:, -2:], 1e-300)) - LUMP_CENTRE) / LUMP_SPREAD
        lump = lump - self.c.lumps[index]
        return w, p, y, r, t, q, lump

    def survival_of(self, index: np.ndarray) -> np.ndarray:
        """The survival matrix all copies share, or the copies' own."""
        return self.survival if self.survival.ndim == 2 else self.survival[index]

    def lean(self, index: np.ndarray) -> np.ndarray:
        """The same in single precision."""
        return self.lean_survival if self.survival.ndim == 2 else self.lean_survival[index]

    def normal(
        self, known: tuple[np.ndarray, ...], index: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray]:
        """Matrix of the step and half gradient of each copy, from its `rows`.

        Gauss-Newton's, and where the data push a weight down the curvature it lacks (`solve`).
        """
        w, p, y, r, t, q, lump = known
        f = self.problem.forward
        n = w.shape[1]
        slope = self.power[index][:, None] * p
        k = self.survival_of(index)
        # the gradient by the transposed map, in full precision
        pull = r * (self.inverse / y)
        back = (pull @ f.rows) * slope
        g = (back @ k) if k.ndim == 2 else np.matmul(back[:, None, :], k)[:, 0, :]
        g += pull @ f.linear
        g -= np.sum(g * w, axis=1, keepdims=True)
        g *= w
        # the matrix only steers the step: single precision is plenty, and half the traffic
        j = np.empty((len(w), r.shape[1] + 2, n), dtype=np.float32)
        rows = j[:, :-2]
        np.matmul(self.lean_rows, slope.astype(np.float32)[:, :, None] * self.lean(index), out=rows)
        rows += self.lean_linear
        rows *= (self.inverse / y).astype(np.float32)[:, :, None]
        lean_w = w.astype(np.float32)
        rows -= np.matmul(rows, lean_w[:, :, None])
        rows *= lean_w[:, None, :]
        j[:, -2:] = lean_w[:, None, :] / np.float32(-LUMP_SPREAD)
        j[:, -2, n - 2] += 1.0 / LUMP_SPREAD
        j[:, -1, n - 1] += 1.0 / LUMP_SPREAD
        data = np.matmul(j.transpose(0, 2, 1), j)
        share = np.minimum(1.0, r.shape[1] / np.sum(r * r, axis=1)) ** 2
        push = np.maximum(g, 0.0) * share[:, None]
        side = (push - 0.5 * push.sum(axis=1, keepdims=True) * w).astype(np.float32)
        # -(side w' + w side') as one more product of thin matrices
        pair = np.stack([side, lean_w], axis=1)
        data -= np.matmul(pair.transpose(0, 2, 1), pair[:, ::-1])
        h = self.stiff[self.which[index]]
        h += data
        h.reshape(len(h), -1)[:, :: n + 1] += push
        prior = self.prior
        g += (self.root[index] * t) @ prior.third + q @ prior.weak
        lumps = lump / LUMP_SPREAD
        g -= w * lumps.sum(axis=1, keepdims=True)
        g[:, -2:] += lumps
        return h, g


def _solve(lhs: np.ndarray, rhs: np.ndarray) -> np.ndarray:
    """Solutions of symmetric systems; NaN where one is not positive definite. Spoils both.

    By Cholesky one by one: half the work of the stacked solver of numpy, which takes any matrix.
    """
    for a, b in zip(lhs, rhs, strict=True):
        # symmetric: its transpose is it, in the order LAPACK wants
        if dposv(a.T, b, overwrite_a=True, overwrite_b=True)[2]:
            b[:] = np.nan
    return rhs


def _cost(known: tuple[np.ndarray, ...]) -> np.ndarray:
    return sum((part * part).sum(axis=1) for part in known[3:])  # type: ignore[return-value]


def _stack(problem: Problem, copies: Copies) -> tuple[np.ndarray, np.ndarray]:
    state = _State(problem, copies)
    m, n = copies.u.shape
    u = copies.u.copy()
    active = np.arange(m)
    # what is known at each copy's u: a step that is taken has it already
    known = state.rows(u, active)
    value = _cost(known)
    damping = np.full(m, FIRST_DAMPING)
    stretch = np.ones(m)
    done = np.zeros(m, dtype=bool)
    diag = np.arange(n)
    for _ in range(MAX_STEPS):
        if active.size == 0:
            break
        everyone = active.size == m
        h, g = state.normal(known if everyone else tuple(part[active] for part in known), active)
        stiff = h[:, diag, diag]
        pending = np.arange(active.size)
        refused = np.zeros(active.size, dtype=bool)
        for _retry in range(12):
            who = active[pending]
            lhs = h.copy() if pending.size == active.size else h[pending]
            lhs[:, diag, diag] = stiff[pending] * (1.0 + damping[who][:, None]) + 1e-12
            step = _solve(lhs, -g[pending])
            longest = np.abs(step).max(axis=1, keepdims=True)
            step *= LONGEST / np.maximum(longest, LONGEST)
            trial = u[who] + stretch[who][:, None] * step
            with np.errstate(all="ignore"):
                found = state.rows(trial, who)
                new = _cost(found)
            promised = -(g[pending] * step).sum(axis=1)
            good = np.isfinite(new) & (new <= value[who] * (1 + 1e-12))
            short = ~good
            if short.any():
                short[short] = _shorten(
                    state, np.flatnonzero(short), who, u, value, trial, found, new,
                    stretch[who] * promised,
                )  # fmt: skip
                good |= short
            # along a valley steps promise little and there is far to go
            valley = good & (value[who] - new > SLOW * promised)
            end = np.where(valley, 0.3 * TOLERANCE, TOLERANCE)
            small = (promised < end) & (good | (stretch[who] == 1.0))
            taken = who[good]
            gain = value[taken] - new[good]
            u[taken] = trial[good]
            value[taken] = new[good]
            for part, fresh in zip(known, found, strict=True):
                part[taken] = fresh[good]
            better = (gain > 0.25 * promised[good]) & ~short[good]
            longer = (gain > SLOW * promised[good]) & ~short[good]
            stretch[taken] = np.where(longer, np.minimum(2.0 * stretch[taken], FARTHEST), 1.0)
            eased = np.where(refused[pending[good]], 1.0, 0.15)
            eased = damping[taken] * np.where(better, eased, 2.0)
            damping[taken] = np.maximum(eased, LEAST_DAMPING)
            done[who[small]] = True
            left = ~(good | small)
            if not left.any():
                break
            # a stretched step that fails is tried again as it was
            plain = left & (stretch[who] == 1.0)
            stretch[who[left]] = 1.0
            refused[pending[plain]] = True
            damping[who[plain]] = np.maximum(damping[who[plain]] * 6.0, REFUSED_DAMPING)
            pending = pending[left]
        active = np.flatnonzero(~done & (damping < 1e8))
    return u, done


def _shorten(
    state: _State,
    tried: np.ndarray,
    who: np.ndarray,
    u: np.ndarray,
    value: np.ndarray,
    trial: np.ndarray,
    found: tuple[np.ndarray, ...],
    new: np.ndarray,
    promised: np.ndarray,
) -> np.ndarray:
    """Try a part of some steps that led uphill; what is found replaces theirs where it is lower.

    The part is that of the parabola through both values and the slope at the start. Which of those
    tried are lower now, shape of `tried`.
    """
    copies, hope = who[tried], promised[tried]
    with np.errstate(all="ignore"):
        share = hope / (new[tried] - value[copies] + 2.0 * hope)
        share = np.where(share > SHORTEST, np.minimum(share, SHORTER), SHORTEST)
        u_short = u[copies] + share[:, None] * (trial[tried] - u[copies])
        known = state.rows(u_short, copies)
        cost = _cost(known)
    lower = cost <= value[copies]
    at = tried[lower]
    trial[at], new[at] = u_short[lower], cost[lower]
    for old, fresh in zip(found, known, strict=True):
        old[at] = fresh[lower]
    return lower
