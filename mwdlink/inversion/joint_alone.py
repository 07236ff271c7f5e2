"""The GPC on its own: the smooth curve through its rows and how that curve goes on beyond them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.linalg import cho_factor, cho_solve
from scipy.linalg.lapack import dposv

from mwdlink.inversion.joint_data import GpcRows
from mwdlink.inversion.joint_response import lagrange_rows
from mwdlink.inversion.roughness import roughness

# from almost log-normal to as free as a continuation may be
SCAN = np.geomspace(3.0, 3e-3, 4)
# beyond the last row the curve has no data and must not open upwards: its slope has to fall by at
# least this much a decade (a log-normal of dispersity 20 falls by 1.8)
LEAST_FALL = 1.5
FALL_SPREAD = 1.0


@dataclass(frozen=True, eq=False)
class AloneFit:
    """A smooth curve through the GPC's rows.

    Attributes
    ----------
    u : ndarray of shape (n,)
        ln weight of the nodes, sum of exp(u) 1.
    smoothing : float
    chi2, log_evidence : float
    slope : ndarray of shape (m, n)
        Derivatives of the scaled residuals.
    rows : ndarray of shape (n_p, n)
        Rows of the prior.
    hessian : ndarray of shape (n, n)
    """

    u: np.ndarray
    smoothing: float
    chi2: float
    log_evidence: float
    slope: np.ndarray
    rows: np.ndarray
    hessian: np.ndarray

    @property
    def w(self) -> np.ndarray:
        """Weights on the nodes, sum 1."""
        return np.exp(self.u)

    @property
    def prior_rows(self) -> int:
        """Number of rows of the prior."""
        return int(self.rows.shape[0])

    def drawn(self, pushes: Sequence[tuple[np.ndarray, np.ndarray]]) -> np.ndarray:
        """Weights of the curve when data and prior err by given numbers of standard deviations.

        To first order in u, which is all the continuation needs: it is linear in u.

        Parameters
        ----------
        pushes : sequence of (ndarray of shape (m,), ndarray of shape (n_p,))

        Returns
        -------
        ndarray of shape (len(pushes), n)
        """
        n = self.u.size
        if not pushes:
            return np.zeros((0, n))
        data = np.array([p[0] for p in pushes])
        prior = np.array([p[1] for p in pushes])
        factor = cho_factor(self.hessian + 1e-9 * np.eye(n))
        u = self.u + cho_solve(factor, (data @ self.slope + prior @ self.rows).T).T
        e = np.exp(u - u.max(axis=1, keepdims=True))
        return e / e.sum(axis=1, keepdims=True)


def fit_alone(
    x: np.ndarray, gpc: GpcRows, smoothing: float, u0: np.ndarray | None = None
) -> AloneFit:
    """Fit the GPC's rows alone on the joint nodes.

    Parameters
    ----------
    x : ndarray of shape (n,)
        log10 M of the nodes.
    gpc : GpcRows
    smoothing : float
    u0 : ndarray of shape (n,), optional
        Start; default a log-normal of the GPC's own moments.
    """
    n = x.size
    h = float(x[1] - x[0])
    base = roughness(n, h)
    beyond = np.flatnonzero(x[1:-1] > gpc.position[-1] - 2 * h) + 1
    bend = np.zeros((beyond.size, n))
    k = np.arange(beyond.size)
    scale = FALL_SPREAD * np.sqrt(max(beyond.size, 1))
    for shift, number in ((-1, 1.0), (0, -2.0), (1, 1.0)):
        bend[k, beyond + shift] = number / (h * h * scale)
    limit = -LEAST_FALL / scale
    rows = np.vstack([np.sqrt(smoothing) * base.third[:, :n], base.weak[:, :n]])
    target = np.concatenate([np.zeros(n - 3), base.weak_centre])
    precision = rows.T @ rows
    reader = lagrange_rows(x, gpc.position)[0]

    def cost(v: np.ndarray) -> tuple[float, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        value = reader @ v
        d = np.exp(value - value.max())
        d /= d @ gpc.step
        r = (d - gpc.density) / gpc.sigma
        slope = (d / gpc.sigma)[:, None] * (reader - (d * gpc.step) @ reader)
        q = rows @ v - target
        # one-sided: only a curve that bends upwards is pulled
        b = np.maximum(bend @ v - limit, 0.0)
        return float(r @ r + q @ q + b @ b), r, slope, q, b

    u = first_guess(x, gpc) if u0 is None else np.array(u0)
    value, r, slope, q, b = cost(u)
    damping = 1e-3
    for _ in range(60):
        active = bend[b > 0]
        gradient = slope.T @ r + rows.T @ q + active.T @ b[b > 0]
        hessian = slope.T @ slope + precision + active.T @ active
        diagonal = np.diag(hessian).copy()
        done = False
        while damping < 1e8:
            lhs = hessian.copy()
            lhs[np.diag_indices_from(lhs)] += damping * diagonal + 1e-12
            _, step, info = dposv(lhs, -gradient)
            promised = -float(gradient @ step) if info == 0 else np.inf
            if info == 0:
                step = step * min(1.0, 6.0 / max(np.abs(step).max(), 1e-300))
                new = cost(u + step)
                if new[0] <= value + 1e-12 * abs(value):
                    break
                if promised < 1e-3:
                    done = True
                    break
            damping = max(damping * 6.0, 1e-6)
        if done or damping >= 1e8:
            break
        u = u + step
        value, r, slope, q, b = new
        damping = max(damping * 0.15, 1e-9)
        if promised < 1e-3 * (1.0 + 1e-3 * value):
            break
    active = bend[b > 0]
    hessian = slope.T @ slope + precision + active.T @ active
    floor = 1e-9 * np.eye(n)
    evidence = -0.5 * value + 0.5 * (
        np.linalg.slogdet(precision + floor)[1] - np.linalg.slogdet(hessian + floor)[1]
    )
    u = u - (u.max() + np.log(np.sum(np.exp(u - u.max()))))
    return AloneFit(u, smoothing, float(r @ r), float(evidence), slope, rows, hessian)


def first_guess(x: np.ndarray, gpc: GpcRows) -> np.ndarray:
    """A log-normal of the GPC's own mean and width on the nodes."""
    share = gpc.density * gpc.step
    share = share / share.sum()
    mean = float(share @ gpc.position)
    width = float(np.sqrt(max(share @ (gpc.position - mean) ** 2, 1e-4)))
    u = -0.5 * ((x - mean) / width) ** 2
    return np.asarray(u - np.log(np.sum(np.exp(u))))


def smooth_curve(x: np.ndarray, gpc: GpcRows) -> AloneFit:
    """The GPC's curve at the smoothing of highest evidence."""
    fit = best = fit_alone(x, gpc, float(SCAN[0]))
    for smoothing in SCAN[1:]:
        fit = fit_alone(x, gpc, float(smoothing), fit.u)
        if fit.log_evidence > best.log_evidence:
            best = fit
    return best
