"""Shift factors of several sweeps, all at once, against one smooth common curve.

The common curve is a positive relaxation spectrum whose logarithm is smooth (`continuous.py`), so
it ties both moduli together and has no more freedom than the data ask for. Spectrum and shifts are
found in one Gauss-Newton iteration; nothing is matched pair by pair except to find a start.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.linalg import LinAlgError, cho_factor, cho_solve

from mwdlink.errors import InputError, NotConverged
from mwdlink.measurement.continuous import penalties
from mwdlink.measurement.modes import mode_moduli, reach
from mwdlink.quantity import readonly

LN10 = float(np.log(10.0))
PER_DECADE = 8
MARGIN = 1.3
SCAN = np.logspace(3.0, -6.0, 10)
# Standard deviation of the weak prior on ln b_T: melts' vertical shifts stay within about 20 %
# (common practice); it only matters where a power law makes shift and factor exchangeable.
VERTICAL_PRIOR = 0.5
# A start by eye needs this much of both curves over each other [decades].
LEAST_OVERLAP = 0.15


@dataclass(frozen=True)
class Curve:
    """One temperature's readings, as the shift fit sees them.

    Attributes
    ----------
    log_omega : ndarray of shape (n,)
        ln omega, ascending.
    log_storage, log_loss : ndarray of shape (n,)
        ln G', ln G''.
    sigma_storage, sigma_loss : ndarray of shape (n,)
        Relative standard errors [-].
    """

    log_omega: np.ndarray
    log_storage: np.ndarray
    log_loss: np.ndarray
    sigma_storage: np.ndarray
    sigma_loss: np.ndarray


@dataclass(frozen=True)
class ShiftFit:
    """Shifts of all curves onto one, and what they leave over.

    Attributes
    ----------
    log_shift : ndarray of shape (k,)
        ln a_T of each curve; zero at the pivot.
    log_vertical : ndarray of shape (k,)
        ln b_T of each curve; zero at the pivot.
    covariance : ndarray of shape (k, k)
        Of ln a_T; zero rows at the pivot.
    vertical_sigma : ndarray of shape (k,)
        Standard error of ln b_T; zero where not fitted.
    residual : tuple of ndarray of shape (2, n)
        ln data - ln common curve of each curve, both moduli.
    model : tuple of ndarray of shape (2, n)
        ln of the common curve at each reading, in the reading's own moduli (before b_T).
    chi2 : float
    points : int
    effective_parameters : float
    smoothing : float
    tau, log_H : ndarray of shape (n,)
        The common curve as a continuous spectrum: [s], ln of [Pa].
    """

    log_shift: np.ndarray
    log_vertical: np.ndarray
    covariance: np.ndarray
    vertical_sigma: np.ndarray
    residual: tuple[np.ndarray, ...]
    model: tuple[np.ndarray, ...]
    chi2: float
    points: int
    effective_parameters: float
    smoothing: float
    tau: np.ndarray
    log_H: np.ndarray

    @property
    def chi2_per_point(self) -> float:
        """chi2 over the degrees of freedom [-]."""
        return self.chi2 / max(self.points - self.effective_parameters, 1.0)


class _Joint:
    """Unknowns: u = ln H on nodes, ln a_T and (if free) ln b_T of every curve but the pivot."""

    def __init__(
        self,
        curves: Sequence[Curve],
        pivot: int,
        start: np.ndarray,
        vertical: np.ndarray,
        free_vertical: bool,
    ) -> None:
        self.curves, self.pivot, self.fixed_vertical = curves, pivot, vertical
        self.free_vertical = free_vertical
        self.others = np.array([k for k in range(len(curves)) if k != pivot], dtype=int)
        size = [c.log_omega.size for c in curves]
        self.owner = np.repeat(np.arange(len(curves)), size)
        self.x = np.concatenate([c.log_omega for c in curves])
        up = np.concatenate([c.log_storage for c in curves])
        out = np.concatenate([c.log_loss for c in curves])
        self.y = np.concatenate([up, out])
        self.w = 1.0 / np.concatenate(
            [*(c.sigma_storage for c in curves), *(c.sigma_loss for c in curves)]
        )
        self.grid(start)
        m = self.x.size
        self.member = np.zeros((m, self.others.size))
        for j, k in enumerate(self.others):
            self.member[self.owner == k, j] = 1.0

    def grid(self, shift: np.ndarray) -> None:
        """Nodes around the range the shifts give."""
        reduced = self.x + shift[self.owner]
        up, out = np.exp(self.y).reshape(2, -1)
        low, high = (float(np.log10(t)) for t in reach(np.exp(reduced), up, out, MARGIN))
        n = int(np.ceil((high - low) * PER_DECADE)) + 1
        self.tau = np.logspace(low, high, n)
        self.n = n
        self.step = float(np.log(self.tau[1] / self.tau[0]))
        self.D3, self.D2, self.D1 = penalties(self.tau, float(np.exp(reduced.min())))
        self.R3, self.R2 = self.D3.T @ self.D3, self.D2.T @ self.D2

    def unpack(self, p: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """u, ln a_T and ln b_T of all curves."""
        k = self.others.size
        shift = np.zeros(len(self.curves))
        shift[self.others] = p[self.n : self.n + k]
        vertical = self.fixed_vertical.copy()
        if self.free_vertical:
            vertical[self.others] = p[self.n + k :]
        return p[: self.n], shift, vertical

    def evaluate(self, p: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Weighted residuals and Jacobian."""
        u, shift, vertical = self.unpack(p)
        H = np.exp(np.clip(u, -500, 500)) * self.step
        omega = np.exp(self.x + shift[self.owner])
        up, out = mode_moduli(omega, self.tau)
        # d/d ln omega of x^2/(1+x^2) is 2 (1 - up) up; of x/(1+x^2) it is out (1 - 2 up)
        d_up, d_out = 2.0 * up * (1.0 - up), out * (1.0 - 2.0 * up)
        part = np.vstack([up, out]) * H
        model = part.sum(axis=1)
        slope = np.concatenate([d_up @ H, d_out @ H]) / model
        lift = np.tile(vertical[self.owner], 2)
        r = (np.log(model) - lift - self.y) * self.w
        both = np.vstack([self.member, self.member])
        blocks = [part / model[:, None], both * slope[:, None]]
        if self.free_vertical:
            blocks.append(-both)
        return r, np.hstack(blocks) * self.w[:, None]

    def prior(self, lam: float) -> np.ndarray:
        """Quadratic form of all that is not data, shape (q, q)."""
        extra = self.others.size * (2 if self.free_vertical else 1)
        P = np.zeros((self.n + extra, self.n + extra))
        P[: self.n, : self.n] = lam * self.R3 + self.R2
        if self.free_vertical:
            i = np.arange(self.n + self.others.size, self.n + extra)
            P[i, i] = 1.0 / VERTICAL_PRIOR**2
        return P

    def solve(
        self, p: np.ndarray, lam: float, *, hold: bool = False, rounds: int = 100
    ) -> tuple[np.ndarray, float, float]:
        """Damped Gauss-Newton; returns the unknowns, chi2 and the penalised cost.

        With `hold` the shifts stay: far from the spectrum they would run away to mend its misfit.
        """
        P = self.prior(lam)

        def total(r: np.ndarray, p: np.ndarray) -> tuple[float, np.ndarray]:
            rise = np.maximum(self.D1 @ p[: self.n], 0.0)
            return float(r @ r + p @ P @ p + rise @ rise), rise

        r, J = self.evaluate(p)
        cost, rise = total(r, p)
        damping, gain = 1e-4, np.inf
        for _ in range(rounds):
            M = J.T @ J
            diagonal = np.diag(M).copy()
            M += P
            g = J.T @ r + P @ p
            if rise.any():
                active = self.D1[rise > 0]
                M[: self.n, : self.n] += active.T @ active
                g[: self.n] += self.D1.T @ rise
            if hold:
                M, g, diagonal = M[: self.n, : self.n], g[: self.n], diagonal[: self.n]
            moved = False
            while damping < 1e8:
                N = M.copy()
                N[np.diag_indices_from(N)] += damping * (1.0 + diagonal)
                try:
                    step = -cho_solve(cho_factor(N, check_finite=False), g, check_finite=False)
                except LinAlgError:
                    damping = max(10 * damping, 1e-6)
                    continue
                if hold:
                    step = np.concatenate([step, np.zeros(p.size - self.n)])
                # at most a factor 20 up in H and a tenth of a decade in the shifts at a time
                most = max(
                    float(step[: self.n].max()) / 3.0, float(np.abs(step[self.n :]).max()) / 0.25
                )
                q = p + step * min(1.0, 1.0 / max(most, 1e-12))
                r_new, J_new = self.evaluate(q)
                new, rise_new = total(r_new, q)
                if np.isfinite(new) and new <= cost:
                    gain, cost = cost - new, new
                    p, r, J, rise, moved = q, r_new, J_new, rise_new, True
                    damping = max(damping / 8, 1e-9)
                    break
                damping *= 8
            if not moved or gain < 1e-4 * (1.0 + 1e-3 * cost):
                return p, float(r @ r), cost
        if gain < 0.02:
            return p, float(r @ r), cost
        raise NotConverged("The joint fit of the shifts did not converge.", partial=p)

    def log_evidence(self, p: np.ndarray, lam: float, cost: float, hold: bool) -> float:
        """Log evidence of the smoothing weight, Laplace approximation, up to a constant."""
        _, J = self.evaluate(p)
        P = self.prior(lam)
        if hold:
            J, P = J[:, : self.n], P[: self.n, : self.n]
        _, logdet = np.linalg.slogdet(J.T @ J + P)
        _, prior = np.linalg.slogdet(P[: self.n, : self.n] + 1e-9 * np.eye(self.n))
        return -0.5 * (cost + logdet - prior)


def pair_shift(a: Curve, b: Curve) -> float | None:
    """ln factor on the frequencies of `b` that lays it on `a`: a start for the joint fit.

    Scans all factors and counts how many readings of either curve lie on the other one, a reading
    far off counting nothing: long true overlaps beat short accidental ones.

    Returns
    -------
    float or None
        None where the curves nowhere lie on each other over at least 0.15 decades.
    """
    span = (a.log_omega[0] - b.log_omega[-1], a.log_omega[-1] - b.log_omega[0])
    # a reading counts within three of these; interpolation between sparse points adds a little
    size = 2.0 * float(np.median(np.concatenate([a.sigma_storage, b.sigma_loss]))) + 0.02
    coarse, fine = 0.05 * LN10, 0.01 * LN10
    best = _best_shift(a, b, np.arange(*span, coarse), 2.0 * size)
    if best is None:
        return None
    near = best + np.arange(-coarse, coarse + fine, fine)
    return _best_shift(a, b, near, size) or best


def _best_shift(a: Curve, b: Curve, shifts: np.ndarray, size: float) -> float | None:
    """The shift under which most readings lie on the other curve; None where hardly any do."""
    best: tuple[float, float] | None = None
    for shift in shifts:
        score, count = 0.0, 0
        overlap = min(a.log_omega[-1], b.log_omega[-1] + shift) - max(
            a.log_omega[0], b.log_omega[0] + shift
        )
        if overlap < LEAST_OVERLAP * LN10:
            continue
        for near, far, move in ((a, b, shift), (b, a, -shift)):
            x = far.log_omega + move
            first, last = np.searchsorted(x, [near.log_omega[0], near.log_omega[-1]])
            count += int(last - first)
            for y, z in ((near.log_storage, far.log_storage), (near.log_loss, far.log_loss)):
                d = (np.interp(x[first:last], near.log_omega, y) - z[first:last]) / size
                score += float(np.minimum(d * d, 9.0).sum()) - 9.0 * d.size
        if count >= 3 and (best is None or score < best[0]):
            best = (score, float(shift))
    return None if best is None or best[0] > -9.0 else best[1]


def fit_shifts(
    curves: Sequence[Curve],
    pivot: int,
    *,
    vertical: np.ndarray | None = None,
    free_vertical: bool = False,
    start: ShiftFit | None = None,
    names: Sequence[str] = (),
) -> ShiftFit:
    """Shift factors of all curves at once onto one smooth common curve.

    Parameters
    ----------
    curves : sequence of Curve
        Neighbours (in temperature) next to each other.
    pivot : int
        The curve that stays where it is.
    vertical : ndarray of shape (k,), optional
        Fixed ln b_T; default zero.
    free_vertical : bool
        Fit ln b_T too.
    start : ShiftFit, optional
        A fit to start from, whose smoothing is kept; default neighbour by neighbour, with the
        smoothing the evidence chooses.
    names : sequence of str
        What to call the curves in messages.

    Returns
    -------
    ShiftFit

    Raises
    ------
    InputError
        If two neighbours nowhere lie on each other.
    NotConverged
    """
    count = len(curves)
    vertical = np.zeros(count) if vertical is None else np.asarray(vertical, dtype=float)
    names = list(names) or [f"curve {k + 1}" for k in range(count)]
    shift = _start(curves, pivot, names) if start is None else start.log_shift
    joint = _Joint(curves, pivot, shift, vertical, free_vertical)
    extra = joint.others.size if free_vertical else 0
    if start is None:
        u = np.full(joint.n, float(np.median(joint.y)) - np.log(2.0))
    else:
        u = np.interp(np.log(joint.tau), np.log(start.tau), start.log_H)
    p = np.concatenate([u, shift[joint.others], np.zeros(extra)])
    if start is not None:
        p, chi2, _ = joint.solve(p, start.smoothing)
        return _describe(joint, p, start.smoothing, chi2)
    scan = SCAN
    held = _scan(joint, p, scan, hold=True)
    top = max(held, key=lambda k: held[k][0])
    fits = _scan(joint, held[top][1], scan[[top]], first=top)
    # the shifts now fit better than their start: the best weight may have moved, either way
    for way in (-1, 1):
        k = top + way
        while top in fits and 0 <= k < scan.size:
            more = _scan(joint, fits[k - way][1], scan[[k]], first=k)
            if k not in more or more[k][0] < fits[k - way][0]:
                break
            fits |= more
            k += way
    if not fits:
        raise NotConverged("The joint fit of the shifts did not converge.")
    k = max(fits, key=lambda k: fits[k][0])
    return _describe(joint, fits[k][1], float(scan[k]), fits[k][2])


def _scan(
    joint: _Joint, p: np.ndarray, weights: np.ndarray, hold: bool = False, first: int = 0
) -> dict[int, tuple[float, np.ndarray, float]]:
    """Position of each weight that converged -> log evidence, unknowns, chi2; warm-started."""
    out: dict[int, tuple[float, np.ndarray, float]] = {}
    for k, lam in enumerate(weights, start=first):
        try:
            p, chi2, cost = joint.solve(p, float(lam), hold=hold)
        except NotConverged as error:
            p = error.partial
            continue
        out[k] = (joint.log_evidence(p, float(lam), cost, hold), p, chi2)
    if not out and hold:
        raise NotConverged("No smooth common curve could be laid through the sweeps.")
    return out


def _start(curves: Sequence[Curve], pivot: int, names: Sequence[str]) -> np.ndarray:
    """Chain of neighbours outwards from the pivot."""
    start = np.zeros(len(curves))
    chain = [(k, k + 1) for k in range(pivot - 1, -1, -1)]
    chain += [(k, k - 1) for k in range(pivot + 1, len(curves))]
    for k, anchor in chain:
        shift = pair_shift(curves[anchor], curves[k])
        if shift is None:
            raise InputError(
                f"the sweeps at {names[k]} and {names[anchor]} nowhere lie on each other.",
                remedy="Measure a temperature in between or a wider frequency range, so that "
                "neighbours overlap by half a decade or more, or leave one of them out.",
            )
        start[k] = start[anchor] + shift
    return start


def _describe(joint: _Joint, p: np.ndarray, lam: float, chi2: float) -> ShiftFit:
    r, J = joint.evaluate(p)
    P = joint.prior(lam)
    N = J.T @ J
    # scaled to a unit diagonal first: nodes far outside the window hang on a weak prior alone
    d = np.sqrt(np.diag(N + P) + 1e-12)
    C = np.linalg.inv((N + P) / np.outer(d, d) + 1e-13 * np.eye(d.size)) / np.outer(d, d)
    effective = float(np.trace(C @ N))
    _, shift, vertical = joint.unpack(p)
    k, n = joint.others.size, joint.n
    covariance = np.zeros((len(joint.curves),) * 2)
    covariance[np.ix_(joint.others, joint.others)] = C[n : n + k, n : n + k]
    sigma = np.zeros(len(joint.curves))
    if joint.free_vertical:
        sigma[joint.others] = np.sqrt(np.diag(C)[n + k :])
    misfit = -(r / joint.w).reshape(2, -1)
    model = joint.y.reshape(2, -1) - misfit
    mine = [joint.owner == j for j in range(len(joint.curves))]
    return ShiftFit(
        readonly(shift),
        readonly(vertical),
        readonly(covariance),
        readonly(sigma),
        tuple(readonly(misfit[:, m]) for m in mine),
        tuple(readonly(model[:, m]) for m in mine),
        chi2,
        joint.y.size,
        effective,
        lam,
        readonly(joint.tau),
        readonly(p[:n]),
    )
