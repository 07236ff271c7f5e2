"""The GPC on its own: the smooth curve through its rows and how that curve goes on beyond them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg.lapack import dposv

from mwdlink.inversion.joint_data import GpcRows
from mwdlink.inversion.roughness import roughness

# from almost log-normal to as free as a continuation may be
SCAN = np.geomspace(3.0, 3e-3, 4)
# beyond the last row the curve has no data: it must not open upwards there. One row of the prior
# per node asks for a fall of its slope of at least this much a decade (a log-normal of dispersity
# 20 falls by 1.8)
LEAST_CURVATURE, CURVATURE_SPREAD = -3.0, 2.0


@dataclass(frozen=True, eq=False)
class AloneFit:
    """A smooth curve through the GPC's rows.

    Attributes
    ----------
    u : ndarray of shape (n,)
        ln density on the nodes, up to a constant.
    smoothing : float
    objective, chi2, log_evidence : float
    """

    u: np.ndarray
    smoothing: float
    objective: float
    chi2: float
    log_evidence: float

    @property
    def w(self) -> np.ndarray:
        """Weights on the nodes, sum 1."""
        e = np.exp(self.u - self.u.max())
        return e / e.sum()


def fit_alone(
    x: np.ndarray,
    gpc: GpcRows,
    smoothing: float,
    u0: np.ndarray | None = None,
    rng: np.random.Generator | None = None,
    data: np.ndarray | None = None,
) -> AloneFit:
    """Fit the GPC's rows alone on the joint nodes.

    Parameters
    ----------
    x : ndarray of shape (n,)
        log10 M of the nodes.
    gpc : GpcRows
    smoothing : float
    u0 : ndarray of shape (n,), optional
        Start; default the GPC's own moments.
    rng : Generator, optional
        Perturbs the prior.
    data : ndarray of shape (m,), optional
        Perturbed rows in place of the measured ones.
    """
    n = x.size
    h = float(x[1] - x[0])
    base = roughness(n, h)
    beyond = np.flatnonzero(x[1:-1] > gpc.position[-1] - 2 * h) + 1
    bend = np.zeros((beyond.size, n))
    k = np.arange(beyond.size)
    bend[k, beyond - 1], bend[k, beyond], bend[k, beyond + 1] = 1.0, -2.0, 1.0
    bend /= h * h * CURVATURE_SPREAD * np.sqrt(max(beyond.size, 1))
    rows = np.vstack([np.sqrt(smoothing) * base.third[:, :n], base.weak[:, :n]])
    target = np.concatenate([np.zeros(n - 3), base.weak_centre])
    if rng is not None:
        target = target + rng.standard_normal(target.size)
    precision = rows.T @ rows
    y = gpc.density if data is None else data
    u = first_guess(x, gpc) if u0 is None else np.array(u0)

    def cost(v: np.ndarray) -> tuple[float, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        d, slope, _, _ = gpc.model(x, v, 0.0, 0.0)
        r = (d - y) / gpc.sigma
        q = rows @ v - target
        # one-sided: only a curve that bends upwards is pulled
        limit = LEAST_CURVATURE / (CURVATURE_SPREAD * np.sqrt(max(beyond.size, 1)))
        b = np.maximum(bend @ v - limit, 0.0)
        return float(r @ r + q @ q + b @ b), r, slope / gpc.sigma[:, None], q, b

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
    return AloneFit(u, smoothing, value, float(r @ r), float(evidence))


def first_guess(x: np.ndarray, gpc: GpcRows) -> np.ndarray:
    """A log-normal of the GPC's own mean and width on the nodes."""
    share = gpc.density * gpc.step
    share = share / share.sum()
    mean = float(share @ gpc.position)
    width = float(np.sqrt(max(share @ (gpc.position - mean) ** 2, 1e-4)))
    return -0.5 * ((x - mean) / width) ** 2 - np.log(np.sum(np.exp(-0.5 * ((x - mean) / width) ** 2)))


def smooth_curve(x: np.ndarray, gpc: GpcRows) -> AloneFit:
    """The GPC's curve at the smoothing of highest evidence."""
    best = None
    u = None
    for smoothing in SCAN:
        fit = fit_alone(x, gpc, float(smoothing), u)
        u = fit.u
        if best is None or fit.log_evidence > best.log_evidence:
            best = fit
    return best  # type: ignore[return-value]
