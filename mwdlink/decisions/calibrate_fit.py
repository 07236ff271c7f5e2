"""Constants of a polymer from samples with both GPC and rheology: the fit.

Unknown are the level and the exponent of the viscosity law, the plateau modulus, the mixing
exponent, and for each sample a shift of its times: its GPC's error of calibration, which the law
must not be blamed for. All have priors, so that what the data do not say stays where it was.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.linalg import solve_triangular

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.gpc_error import GpcError
from mwdlink.chains.melt import Melt
from mwdlink.decisions.gpc_band import GpcBand
from mwdlink.decisions.response import Bank, lean
from mwdlink.relaxation.mixing import Model

# priors: standard deviations of ln(level), exponent, ln(plateau modulus), mixing exponent
PRIOR = np.array([1.2, 0.25, 0.3, 0.2])
NAMES = ("level", "exponent", "plateau_modulus", "mixing_exponent")
# times of a sample: three per cent in M is a tenth in time
SAMPLE_SHIFT = 0.12
# what kernels differ by on one melt; below this a misfit says nothing about the constants
MODEL_ERROR = 0.04
# a sweep's residuals hang together: about this many of them are independent in each modulus
INDEPENDENT = 8
ETA0_ERROR = 0.05
NODES = 60
# of Student's law of the samples' shifts
FREEDOM = 3.0
STEPS = (0.0, 0.01, 0.02, 0.02)
MAX_ROUNDS = 20
# members of the GPC's curve behind its covariance
GPC_DRAWS = 80


@dataclass(frozen=True, eq=False)
class Sample:
    """One sample of the calibration.

    Attributes
    ----------
    name : str
    distribution : Distribution
    omega : ndarray of shape (n,)
        [rad/s]; empty without a sweep.
    log_moduli : ndarray of shape (2 n,)
    sigma : ndarray of shape (2 n,)
        Relative, inflated for what residuals have in common.
    eta0 : float or None
        Zero-shear viscosity where no sweep is given [Pa s].
    gpc : ndarray of shape (2 n, r) or (1, r), or None
        What errors of the GPC's curve do to ln of the moduli (or of eta0): columns whose products
        sum to a covariance. None for a distribution that is exact.
    """

    name: str
    distribution: Distribution
    omega: np.ndarray
    log_moduli: np.ndarray
    sigma: np.ndarray
    eta0: float | None = None
    gpc: np.ndarray | None = None

    def factor(self) -> np.ndarray:
        """Lower triangle L with L L^T the covariance of the residuals, shape (k, k)."""
        own = self.sigma if self.omega.size else np.array([ETA0_ERROR])
        if self.gpc is None:
            return np.diag(own)
        return np.linalg.cholesky(np.diag(own**2) + self.gpc @ self.gpc.T)


@dataclass(frozen=True, eq=False)
class Fitted:
    """A fit with one kernel.

    Attributes
    ----------
    kernel : str
    values : ndarray of shape (4,)
        ln(level/card's), law exponent, ln(G_N/card's), mixing exponent.
    spread : ndarray of shape (4,)
        Standard errors; the prior's for what was held fixed.
    covariance : ndarray of shape (4, 4)
    free : tuple of bool
        What was fitted.
    shifts : ndarray of shape (n,)
        ln of each sample's time shift.
    chi2_per_point : float
        Of sigma that hold the model's own error; an odd sample counts by its logarithm.
    residuals : tuple of ndarray
        ln(predicted/measured) of each sample at its own shift.
    eta0 : ndarray of shape (n,)
        Predicted zero-shear viscosity of each sample, without its shift [Pa s].
    converged : bool
    """

    kernel: str
    values: np.ndarray
    spread: np.ndarray
    covariance: np.ndarray
    free: tuple[bool, ...]
    shifts: np.ndarray
    chi2_per_point: float
    residuals: tuple[np.ndarray, ...]
    eta0: np.ndarray
    converged: bool


def changed(melt: Melt, values: np.ndarray, pivot: float) -> Melt:
    """The melt with the constants of a fit."""
    return melt.with_(
        time_factor=float(np.exp(values[0])),
        law_exponent=float(values[1]),
        plateau_modulus=float(melt.plateau_modulus * np.exp(values[2])),
        pivot=pivot,
    )


def fit(
    samples: Sequence[Sample],
    melt: Melt,
    kernel: str,
    rouse: bool,
    start: np.ndarray,
    free: Sequence[bool],
    pivot: float,
    sample_shift: float = SAMPLE_SHIFT,
) -> Fitted:
    """Least squares with priors, by damped Gauss-Newton with differences.

    Parameters
    ----------
    samples : sequence of Sample
    melt : Melt
        The card's.
    kernel : str
    rouse : bool
    start : ndarray of shape (4,)
        Centre of the priors and start.
    free : sequence of bool, length 4
    pivot : float
        Molar mass about which the law turns [g/mol].
    sample_shift : float
        Standard deviation of ln of a sample's time shift [-].
    """
    parts = [lean(s.distribution, NODES) for s in samples]
    factors = [s.factor() for s in samples]
    top = [float(s.omega[-1]) if s.omega.size else 1.0 for s in samples]
    index = np.flatnonzero(free)

    def response(k: int, p: np.ndarray) -> object:
        # the level moves all times together, so the card's own level serves and is scaled
        base = changed(melt, np.array([0.0, p[1], p[2], p[3]]), pivot)
        bank = Bank([parts[k]], base, rouse, 30.0 * top[k])
        return bank.response(np.ones((1, 1)), kernel, float(np.clip(p[3], 1.0, 8.0)))

    def rows(k: int, r: object, shift: float) -> np.ndarray:
        s = samples[k]
        if s.omega.size == 0:
            eta0 = float(r.terminal[0][0]) * np.exp(shift)  # type: ignore[attr-defined]
            miss = np.array([np.log(eta0 / float(s.eta0 or np.nan))])
        else:
            up, out = r.moduli(s.omega * np.exp(shift))  # type: ignore[attr-defined]
            miss = np.log(np.concatenate([up[0], out[0]])) - s.log_moduli
        return np.asarray(solve_triangular(factors[k], miss, lower=True))

    n = len(samples)
    p, d = np.array(start, dtype=float), np.zeros(n)
    damping, cost, converged = 1e-3, np.inf, False
    state: tuple[list[object], list[np.ndarray]] | None = None

    def total(p: np.ndarray, d: np.ndarray, parts_rows: Sequence[np.ndarray]) -> float:
        prior = ((p - start) / PRIOR)[index]
        # a sample with a wrong label must not drag the others along, neither by its times
        # (Student's t) nor by the shape of its curves (a misfit counts by its logarithm)
        odd = (FREEDOM + 1.0) * np.log1p((d / sample_shift) ** 2 / FREEDOM)
        shape = sum(x.size * np.log1p(x @ x / x.size) for x in parts_rows)
        return float(shape + prior @ prior + np.sum(odd))

    normal = np.eye(index.size + n)
    for _ in range(MAX_ROUNDS):
        if state is None:
            rs = [response(k, p) for k in range(n)]
            state = rs, [rows(k, rs[k], p[0] + d[k]) for k in range(n)]
            cost = total(p, d, state[1])
        rs, r0 = state
        size = index.size + n
        normal, gradient = np.zeros((size, size)), np.zeros(size)
        for k in range(n):
            j = np.zeros((r0[k].size, size))
            by_shift = (rows(k, rs[k], p[0] + d[k] + 0.02) - r0[k]) / 0.02
            j[:, index.size + k] = by_shift
            for c, i in enumerate(index):
                if i == 0:
                    j[:, c] = by_shift
                    continue
                q = p.copy()
                q[i] += STEPS[i]
                j[:, c] = (rows(k, response(k, q), q[0] + d[k]) - r0[k]) / STEPS[i]
            trusted = 1.0 / (1.0 + r0[k] @ r0[k] / r0[k].size)
            normal += trusted * (j.T @ j)
            gradient += trusted * (j.T @ r0[k])
        tied = (FREEDOM + 1.0) / (FREEDOM + (d / sample_shift) ** 2) / sample_shift**2
        weight = np.concatenate([PRIOR[index] ** -2, tied])
        normal += np.diag(weight)
        gradient += weight * np.concatenate([(p - start)[index], d])
        for _ in range(8):
            step = -np.linalg.solve(normal + damping * np.diag(np.diag(normal)), gradient)
            q, e = p.copy(), d + step[index.size :]
            q[index] += np.clip(step[: index.size], -0.5, 0.5)
            q[3] = np.clip(q[3], 1.0, 8.0)
            rs = [response(k, q) for k in range(n)]
            trial = [rows(k, rs[k], q[0] + e[k]) for k in range(n)]
            new = total(q, e, trial)
            if new <= cost * (1 + 1e-9):
                break
            damping = max(damping * 10.0, 1e-3)
        else:
            break
        gain, p, d, state, cost = cost - new, q, e, (rs, trial), new
        damping *= 0.2
        if gain < 0.02 + 5e-4 * cost:
            converged = True
            break
    assert state is not None  # the loop ran
    covariance = np.linalg.inv(normal)[: index.size, : index.size]
    count = sum(x.size for x in state[1])
    chi2 = sum(x.size * float(np.log1p(x @ x / x.size)) for x in state[1]) / max(count, 1)
    full = np.zeros((4, 4))
    full[np.ix_(index, index)] = covariance * max(1.0, chi2)
    spread = np.where(free, np.sqrt(np.diag(full)), PRIOR)
    residuals = tuple(factor @ x for x, factor in zip(state[1], factors, strict=True))
    eta0 = np.array([float(r.terminal[0][0]) for r in state[0]]) * np.exp(p[0])  # type: ignore[attr-defined]
    return Fitted(
        kernel, p, spread, full, tuple(bool(f) for f in free), d, chi2, residuals, eta0, converged
    )


def with_gpc_errors(
    samples: Sequence[Sample],
    melt: Melt,
    model: Model,
    shifts: np.ndarray,
    seed: int = 0,
) -> list[Sample]:
    """The samples with what their GPCs' errors do to the curves, by a melt's constants.

    A few wrong rows far out in a GPC table move the low-frequency end of a prediction by more than
    any rheometer's noise; constants must not make up for it. Only measured tables have such errors,
    as `GpcError` says; the error of the molar masses is each sample's own shift of times.

    Parameters
    ----------
    samples : sequence of Sample
    melt : Melt
        With the constants to judge by.
    model : Model
    shifts : ndarray of shape (n,)
        ln of each sample's time shift.
    seed : int
    """
    out = []
    for k, s in enumerate(samples):
        if not s.distribution.measured:
            out.append(s)
            continue
        d = lean(s.distribution, NODES)
        drawn = GpcBand.of([d], GpcError(molar_mass=0.0), GPC_DRAWS, seed + k)
        assert drawn is not None  # an error was asked for
        top = float(s.omega[-1]) if s.omega.size else 1.0
        bank = Bank([d], melt, model.rouse, 30.0 * top)
        one, rows = np.ones((1, 1)), []
        for i in range(GPC_DRAWS):
            r = bank.response(one, model.kernel, model.exponent, version=drawn.version(i))
            if s.omega.size == 0:
                rows.append(np.log(r.terminal[0]))
                continue
            up, loss = r.moduli(s.omega * np.exp(shifts[k]))
            rows.append(np.log(np.concatenate([up[0], loss[0]])))
        off = np.array(rows)
        out.append(replace(s, gpc=(off - off.mean(axis=0)).T / np.sqrt(GPC_DRAWS - 1)))
    return out
