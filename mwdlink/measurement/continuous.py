"""The continuous relaxation spectrum H(tau): positive, smooth where the data are silent, banded.

The unknown is u = ln H on a uniform grid of ln tau, so positivity is built in, and its roughness is
the integral of the squared third derivative of u: a log-normal spectrum, and with it every power
law, costs nothing. The curve is the average over smoothing weights by their evidence (Laplace
approximation), whose whole course is kept. The band comes from refits with data and prior perturbed
by their own spread, at smoothing weights drawn by their evidence.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import LinAlgError, cho_factor, cho_solve

from mwdlink.errors import NotConverged
from mwdlink.measurement.modes import mode_moduli, reach
from mwdlink.quantity import readonly

PER_DECADE = 10
MARGIN = 1.3
SCAN = np.logspace(3.0, -7.0, 21)
# Standard deviation of the weak proper prior on the curvature d2 ln H/d(log10 tau)2: it only keeps
# the null space of the third difference from running away where no data speak.
BEND = 12.0
# Beyond 1/omega_min a rise of ln H by more than nothing costs (slope per decade / RISE)^2 per
# decade: melts flow in the end, and a second, slower process that no point has seen is not to be
# made up by the smoothing prior.
RISE = 1.0
# What is known of log10 lambda before any data: a normal law with unlike flanks. One lambda has to
# serve the smooth body of a spectrum and its end, where it bends most; chance evidence for a
# curve without any bend (lambda far above) or for wiggles (far below) is common at a few per cent
# of noise, melts that have either are not [chosen on made-up melts for the least sum of spread and
# bias, docs/spectrum.md].
CENTRE, ROUGHER, SMOOTHER = -0.25, 1.0, 0.75
# A smoothing weight at which the noise of the data alone scatters ln H by more than this (standard
# deviation, at the worst node that counts) has no say in the curve; how sharply it loses it. Five
# per cent are wanted from sweep to sweep, and the average over weights varies a little too.
REPEAT, SHARPLY = 0.045, 16
# Where no smoothing weight within BELIEVABLE of the best log evidence repeats as well as that, the
# limit is this factor above the best of them: the data carry no more.
LEAST_ROOM, BELIEVABLE = 1.1, 10.0
# A node counts where H is at least this share of |G*| at omega = 1/tau: below, H falls faster than
# any curve can follow.
COUNTS = 0.05
LEVEL = 0.9


@dataclass(frozen=True)
class Continuous:
    """A continuous spectrum with its band.

    Attributes
    ----------
    tau : ndarray of shape (n,)
        [s], ascending, uniform in ln tau.
    H : ndarray of shape (n,)
        Spectrum per ln tau [Pa].
    low, high : ndarray of shape (n,)
        Ends of the pointwise band at `level` [Pa]; equal to H without members.
    members : ndarray of shape (m, n)
        The perturbed refits [Pa].
    level : float
    storage, loss : ndarray of shape (k,)
        Fitted moduli [Pa].
    chi2 : float
    smoothing : float
        The most likely weight lambda of the squared third derivative [-].
    scan : ndarray of shape (q, 3)
        lambda, log evidence, chi2 of every weight tried.
    effective_parameters : float
        Trace of the resolution, averaged over the weights as the curve is [-].
    scatter : ndarray of shape (n,)
        Standard deviation of ln H to expect from one such sweep to the next [-].
    counted : ndarray of bool, shape (n,)
        Nodes whose scatter counts: inside the supported range, and H not next to nothing there.
    """

    tau: np.ndarray
    H: np.ndarray
    low: np.ndarray
    high: np.ndarray
    members: np.ndarray
    level: float
    storage: np.ndarray
    loss: np.ndarray
    chi2: float
    smoothing: float
    scan: np.ndarray
    effective_parameters: float
    scatter: np.ndarray
    counted: np.ndarray

    @property
    def step(self) -> float:
        """Grid spacing in ln tau [-]."""
        return float(np.log(self.tau[1] / self.tau[0]))

    def integral(self, power: float, members: bool = False) -> np.ndarray | float:
        """Integral of H tau^power over ln tau [Pa s^power], of the curve or of every member."""
        weight = self.step * self.tau**power
        return self.members @ weight if members else float(self.H @ weight)


def penalties(tau: np.ndarray, omega_low: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Rows whose squares are the roughness of u = ln H, the weak curvature prior, and the rises.

    Parameters
    ----------
    tau : ndarray of shape (n,)
        Uniform in ln tau [s].
    omega_low : float
        Lowest frequency of the data [rad/s].

    Returns
    -------
    third : ndarray of shape (n-3, n)
        Sum of squares = integral over decades of the squared third derivative by decades, so that
        lambda does not depend on the grid.
    second : ndarray of shape (n-2, n)
        In units of BEND.
    first : ndarray of shape (k, n)
        Slopes beyond 1/omega_low in units of RISE; only positive ones are to be counted.
    """
    n = tau.size
    d = float(np.log10(tau[-1] / tau[0])) / (n - 1)
    third = np.diff(np.eye(n), 3, axis=0) / d**2.5
    second = np.diff(np.eye(n), 2, axis=0) / (d**1.5 * BEND)
    first = np.diff(np.eye(n), axis=0)[tau[1:] > 1.0 / omega_low] / (np.sqrt(d) * RISE)
    return third, second, first


class _Problem:
    """The penalised fit for given data; perturbed refits share its matrices."""

    def __init__(
        self,
        omega: np.ndarray,
        storage: np.ndarray,
        loss: np.ndarray,
        sigma_storage: np.ndarray,
        sigma_loss: np.ndarray,
        per_decade: int,
    ) -> None:
        low, high = (float(np.log10(t)) for t in reach(omega, storage, loss, MARGIN))
        n = int(np.ceil((high - low) * per_decade)) + 1
        self.tau = np.logspace(low, high, n)
        d = (high - low) / (n - 1)
        up, out = mode_moduli(omega, self.tau)
        self.A = np.vstack([up, out]) * (d * np.log(10))
        self.y = np.log(np.concatenate([storage, loss]))
        self.w = 1.0 / np.concatenate([sigma_storage, sigma_loss])
        self.D3, self.D2, self.D1 = penalties(self.tau, omega[0])
        self.R3, self.R2 = self.D3.T @ self.D3, self.D2.T @ self.D2

    def start(self) -> np.ndarray:
        """A flat spectrum of the size of the data."""
        return np.full(self.tau.size, float(np.median(self.y)) - np.log(2.0))

    def solve(
        self,
        u: np.ndarray,
        lam: float,
        y: np.ndarray | None = None,
        pull3: np.ndarray | None = None,
        pull2: np.ndarray | None = None,
        rounds: int = 80,
    ) -> tuple[np.ndarray, float, float, np.ndarray]:
        """Damped Gauss-Newton; returns u, chi2, penalised cost, Hessian factor input J'J."""
        y = self.y if y is None else y
        P = lam * self.R3 + self.R2
        shift = np.zeros_like(u)
        if pull3 is not None:
            shift = lam * (self.D3.T @ pull3)
        if pull2 is not None:
            shift = shift + self.D2.T @ pull2
        state = self._cost(u, y, P, shift)
        damping, gain = 1e-4, np.inf
        for _ in range(rounds):
            chi2, cost, r, J, N, rise = state
            g = J.T @ r + P @ u - shift + self.D1.T @ rise
            moved = False
            while damping < 1e8:
                M = N + P
                if rise.any():
                    active = self.D1[rise > 0]
                    M += active.T @ active
                M[np.diag_indices_from(M)] += damping * (1.0 + np.diag(N))
                try:
                    step = -cho_solve(cho_factor(M, check_finite=False), g, check_finite=False)
                except LinAlgError:
                    damping = max(damping * 10, 1e-6)
                    continue
                # only growth can overflow the exponential; a vanishing spectrum may fall freely
                step *= min(1.0, 3.0 / max(float(np.max(step)), 1e-12))
                trial = self._cost(u + step, y, P, shift)
                if np.isfinite(trial[1]) and trial[1] <= cost:
                    u = u + step
                    gain, state, moved = cost - trial[1], trial, True
                    damping = max(damping / 8, 1e-9)
                    break
                damping *= 8
            if not moved or gain < 1e-4 * (1.0 + 1e-3 * abs(state[1])):
                return u, state[0], state[1], state[4]
        # a spectrum that sinks towards zero somewhere does so for ever, at no gain worth the name
        if gain < 0.02:
            return u, state[0], state[1], state[4]
        raise NotConverged("The continuous spectrum did not converge.", partial=u)

    def _cost(
        self, u: np.ndarray, y: np.ndarray, P: np.ndarray, shift: np.ndarray
    ) -> tuple[float, float, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        part = self.A * np.exp(np.clip(u, -600, 600))
        model = part.sum(axis=1)
        # a spectrum that vanished altogether costs beyond measure, but stays a number
        model = np.maximum(model, 1e-300)
        r = (np.log(model) - y) * self.w
        J = part * (self.w / model)[:, None]
        chi2 = float(r @ r)
        rise = np.maximum(self.D1 @ u, 0.0)
        cost = chi2 + float(u @ (P @ u) - 2 * shift @ u + rise @ rise)
        return chi2, cost, r, J, J.T @ J, rise

    def evidence(self, lam: float, cost: float, N: np.ndarray) -> tuple[float, float, np.ndarray]:
        """Log evidence times prior of lambda up to a constant, effective parameters, and what the
        noise of the data alone scatters u by at every node."""
        P = lam * self.R3 + self.R2
        M = N + P
        _, logdet = np.linalg.slogdet(M)
        _, prior = np.linalg.slogdet(P + 1e-9 * np.eye(P.shape[0]))
        inverse = np.linalg.inv(M)
        resolution = inverse @ N
        trace = float(np.trace(resolution))
        # diagonal of M^-1 N M^-1, the linear answer to noise of unit size
        scatter = np.sqrt(np.maximum(np.sum(resolution * inverse, axis=1), 0.0))
        off = np.log10(lam) - CENTRE
        off /= ROUGHER if off < 0 else SMOOTHER
        return -0.5 * (cost + logdet - prior + off * off), trace, scatter

    def counted(self, omega: np.ndarray, u: np.ndarray) -> np.ndarray:
        """The nodes that count: supported, and not next to nothing."""
        low, high = supported_range(omega)
        up, out = np.split(self.A @ np.exp(np.clip(u, -600, 600)), 2)
        size = np.log(np.maximum(np.hypot(up, out), 1e-300))
        floor = np.interp(-np.log(self.tau), np.log(omega), size) + np.log(COUNTS)
        return np.asarray((self.tau >= low) & (self.tau <= high) & (u > floor))


def supported_range(omega: np.ndarray) -> tuple[float, float]:
    """Relaxation times a sweep supports: exp(pi/2)/omega_max to exp(-pi/2)/omega_min.

    Parameters
    ----------
    omega : ndarray of shape (n,)
        [rad/s]

    Returns
    -------
    (float, float)
        [s]; the first is the larger one when the window is under 1.4 decades wide.

    References
    ----------
    .. [1] Davies & Anderssen, J. Non-Newt. Fluid Mech. 73 (1997) 163 (recalled).
    """
    return float(np.exp(np.pi / 2) / omega[-1]), float(np.exp(-np.pi / 2) / omega[0])


def shares_that_repeat(log_evidence: np.ndarray, worst: np.ndarray) -> np.ndarray:
    """Shares of the smoothing weights in the curve: by evidence, as far as the curve repeats.

    Parameters
    ----------
    log_evidence : ndarray of shape (q,)
    worst : ndarray of shape (q,)
        Largest scatter of ln H that the noise alone brings at each weight [-].

    Returns
    -------
    ndarray of shape (q,)
        Sum 1.
    """
    believable = log_evidence > log_evidence.max() - BELIEVABLE
    limit = max(REPEAT, LEAST_ROOM * float(worst[believable].min()))
    x = log_evidence - np.minimum(worst / limit, 1e3) ** SHARPLY
    share = np.exp(x - x.max())
    return np.asarray(share / share.sum())


def fit_continuous(
    omega: np.ndarray,
    storage: np.ndarray,
    loss: np.ndarray,
    sigma_storage: np.ndarray,
    sigma_loss: np.ndarray,
    *,
    members: int = 200,
    seed: int = 0,
    per_decade: int = PER_DECADE,
    smoothing: float | None = None,
    level: float = LEVEL,
    noise_freedom: int | None = None,
) -> Continuous:
    """Continuous positive spectrum with a band from perturbed refits.

    Parameters
    ----------
    omega, storage, loss : ndarray of shape (k,)
        [rad/s], [Pa], [Pa]; omega ascending.
    sigma_storage, sigma_loss : ndarray of shape (k,)
        Relative standard errors [-].
    members : int
        Perturbed refits; 0 gives no band.
    seed : int
        One child seed for each member.
    per_decade : int
        Nodes per decade of tau.
    smoothing : float, optional
        A fixed lambda instead of the evidence's choice.
    level : float
        Probability of the pointwise band.
    noise_freedom : int, optional
        Degrees of freedom the errors were estimated with: every member then takes a noise of its
        own from what is known of it. None where the errors are given.

    Returns
    -------
    Continuous

    Raises
    ------
    NotConverged

    References
    ----------
    .. [1] Honerkamp & Weese, Rheol. Acta 32 (1993) 65 (recalled): fitting ln H rather than H.
    .. [2] Silverman, Ann. Stat. 10 (1982) 795 (recalled): third differences of the logarithm.
    """
    problem = _Problem(omega, storage, loss, sigma_storage, sigma_loss, per_decade)
    u = problem.start()
    fits: list[tuple[float, float, float, float, np.ndarray, np.ndarray]] = []
    worst: list[float] = []
    for lam in SCAN if smoothing is None else np.array([smoothing]):
        try:
            u, chi2, cost, N = problem.solve(u, lam)
        except NotConverged as error:
            # a weight far too smooth for the data may not get there: start the next from here
            u = error.partial
            continue
        log_evidence, trace, scatter = problem.evidence(lam, cost, N)
        fits.append((float(lam), log_evidence, chi2, trace, u, scatter))
        worst.append(float(np.max(scatter, where=problem.counted(omega, u), initial=0.0)))
    if not fits:
        raise NotConverged("The continuous spectrum did not converge at any smoothing weight.")
    scan = np.array([f[:3] for f in fits])
    best = int(np.argmax(scan[:, 1]))
    lam = fits[best][0]
    weight = np.exp(scan[:, 1] - scan[:, 1].max())
    weight /= weight.sum()
    # averaged over the weights: the single best one jumps from sweep to sweep
    share = shares_that_repeat(scan[:, 1], np.array(worst))
    u = np.asarray(sum(w * f[4] for w, f in zip(share, fits, strict=True)))
    trace = float(sum(w * f[3] for w, f in zip(share, fits, strict=True)))
    # noise at each weight, and the weights' own differences, as their shares change with the noise
    spread = sum(w * (f[5] ** 2 + (f[4] - u) ** 2) for w, f in zip(share, fits, strict=True))
    scatter = np.sqrt(np.asarray(spread))
    r = (np.log(problem.A @ np.exp(u)) - problem.y) * problem.w
    chi2 = float(r @ r)
    rows = []
    for child in np.random.SeedSequence(seed).spawn(members):
        rng = np.random.default_rng(child)
        k = int(rng.choice(weight.size, p=weight))
        member_lam = fits[k][0]
        noise = 1.0
        if noise_freedom is not None:
            noise = float(np.sqrt(noise_freedom / rng.chisquare(noise_freedom)))
        y = problem.y + noise * rng.standard_normal(problem.y.size) / problem.w
        pull3 = rng.standard_normal(problem.D3.shape[0]) / np.sqrt(member_lam)
        pull2 = np.asarray(rng.standard_normal(problem.D2.shape[0]))
        try:
            row = problem.solve(fits[k][4], member_lam, y, pull3, pull2)[0]
        except NotConverged:
            continue
        if np.all(problem.A @ np.exp(row) > 1e-6 * np.exp(problem.y)):
            rows.append(row)
    if members and len(rows) < 0.9 * members:
        raise NotConverged(
            f"Only {len(rows)} of {members} perturbed refits of the continuous spectrum converged."
        )
    H = np.exp(u)
    ensemble = np.exp(np.array(rows)) if rows else np.empty((0, u.size))
    if rows:
        low, high = np.quantile(ensemble, [(1 - level) / 2, (1 + level) / 2], axis=0)
        low, high = np.minimum(low, H), np.maximum(high, H)
    else:
        low = high = H
    model = problem.A @ H
    half = omega.size
    return Continuous(
        readonly(problem.tau),
        readonly(H),
        readonly(low),
        readonly(high),
        readonly(ensemble),
        level,
        readonly(model[:half]),
        readonly(model[half:]),
        chi2,
        float(lam),
        readonly(scan),
        trace,
        readonly(scatter),
        problem.counted(omega, u),
    )
