"""Positive Maxwell modes fitted to both moduli at once.

One set of positive modes is the weakest thing every linear, causal, passive material must obey, so
the same fit serves three purposes: a discrete spectrum, the noise of the data, and the test of
their consistency. What positive modes on a dense grid cannot fit, no relaxation spectrum can.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.optimize import nnls

from mwdlink.errors import InputError, NotConverged
from mwdlink.quantity import readonly

PER_DECADE = 8
# Decades of tau beyond 1/omega_max and 1/omega_min: a mode that far outside acts as a pure
# viscosity (below) or a pure elastic modulus (above) to within 1 %.
MARGIN = 2.0
# A short list of modes is to be read: times the window cannot tell from longer or shorter ones
# have no place in it.
CLOSE_MARGIN = 0.5


@dataclass(frozen=True)
class ModeFit:
    """Positive modes and what they leave over.

    Attributes
    ----------
    tau : ndarray of shape (k,)
        Relaxation times of the modes in use [s], ascending.
    strength : ndarray of shape (k,)
        [Pa], > 0.
    storage, loss : ndarray of shape (n,)
        Fitted moduli [Pa].
    residual_storage, residual_loss : ndarray of shape (n,)
        (data - fit)/(sigma fit) [-].
    chi2 : float
        Sum of the squared residuals over both moduli.
    free : int
        Parameters counted as free: the modes in use (and their times where these were fitted).
    """

    tau: np.ndarray
    strength: np.ndarray
    storage: np.ndarray
    loss: np.ndarray
    residual_storage: np.ndarray
    residual_loss: np.ndarray
    chi2: float
    free: int

    @property
    def points(self) -> int:
        """Number of data, two for each frequency."""
        return 2 * self.storage.size

    @property
    def chi2_per_point(self) -> float:
        """chi2 over the degrees of freedom left [-]."""
        return self.chi2 / max(self.points - self.free, 1)


def mode_grid(
    omega: np.ndarray,
    storage: np.ndarray,
    loss: np.ndarray,
    per_decade: float = PER_DECADE,
    margin: float = MARGIN,
) -> np.ndarray:
    """Relaxation times on a logarithmic grid around the window.

    Parameters
    ----------
    omega, storage, loss : ndarray of shape (n,)
        [rad/s], [Pa], [Pa]
    per_decade : float
        Modes per decade of tau.
    margin : float
        Decades beyond the reach of the data (`reach`).

    Returns
    -------
    ndarray of shape (k,)
        [s], ascending.
    """
    low, high = (np.log10(t) for t in reach(omega, storage, loss, margin))
    return np.logspace(low, high, int(np.ceil((high - low) * per_decade)) + 1)


def reach(
    omega: np.ndarray, storage: np.ndarray, loss: np.ndarray, margin: float
) -> tuple[float, float]:
    """Shortest and longest relaxation time [s] the two moduli may need.

    `margin` decades beyond 1/omega_max and 1/omega_min; further out where G'/(G'' omega), the
    relaxation time a single mode would have, lies beyond: a melt deep in terminal flow is faster
    than its window, a plateau slower. No more than four decades, for readings that are noise.
    """
    single = storage / (loss * omega)
    low, high = 1.0 / omega.max(), 1.0 / omega.min()
    tau_low = min(low * 10.0**-margin, max(0.3 * single.min(), low * 1e-4))
    tau_high = max(high * 10.0**margin, min(3.0 * single.max(), high * 1e4))
    return float(tau_low), float(tau_high)


def mode_moduli(omega: np.ndarray, tau: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Storage and loss modulus of modes of unit strength.

    Parameters
    ----------
    omega : ndarray of shape (n,)
        [rad/s]
    tau : ndarray of shape (k,)
        [s]

    Returns
    -------
    storage, loss : ndarray of shape (n, k)
        [-]
    """
    x = np.multiply.outer(omega, tau)
    with np.errstate(over="ignore"):
        denominator = 1.0 + x * x
    return x * x / denominator, x / denominator


def weighted_rows(
    omega: np.ndarray,
    storage: np.ndarray,
    loss: np.ndarray,
    sigma_storage: np.ndarray,
    sigma_loss: np.ndarray,
    tau: np.ndarray,
) -> np.ndarray:
    """Rows of relative residuals, both moduli stacked: A g = 1/sigma would be a perfect fit.

    Returns
    -------
    ndarray of shape (2 n, k)
        [1/Pa]
    """
    up, out = mode_moduli(omega, tau)
    return np.vstack([up / (storage * sigma_storage)[:, None], out / (loss * sigma_loss)[:, None]])


def non_negative(A: np.ndarray, b: np.ndarray) -> np.ndarray:
    """Non-negative least squares with scaled columns.

    Columns of modes far outside the window are tiny; unscaled they would be dropped as zero.

    Raises
    ------
    NotConverged
        If the active-set iteration did not end.
    """
    scale = np.sqrt(np.einsum("ij,ij->j", A, A))
    scale[scale == 0] = 1.0
    try:
        x, _ = nnls(A / scale, b, maxiter=30 * A.shape[1])
    except RuntimeError as error:
        raise NotConverged("The fit of positive modes did not converge.") from error
    return x / scale


def fit_on_grid(
    omega: np.ndarray,
    storage: np.ndarray,
    loss: np.ndarray,
    sigma_storage: np.ndarray | float,
    sigma_loss: np.ndarray | float,
    tau: np.ndarray | None = None,
) -> ModeFit:
    """Best positive modes on a fixed dense grid of relaxation times.

    Parameters
    ----------
    omega, storage, loss : ndarray of shape (n,)
        [rad/s], [Pa], [Pa], > 0.
    sigma_storage, sigma_loss : ndarray of shape (n,) or float
        Relative standard errors [-], > 0.
    tau : ndarray of shape (k,), optional
        Grid [s]; default `mode_grid`.

    Returns
    -------
    ModeFit

    Raises
    ------
    InputError
        With fewer than three frequencies.
    NotConverged

    References
    ----------
    .. [1] Poudel & Shanbhag, Korea-Aust. Rheol. J. 34 (2022) 369 (published): positive modes as a
       test of the Kramers-Kronig relations.
    """
    omega = np.asarray(omega, dtype=float)
    if omega.size < 3:
        raise InputError(
            f"{omega.size} frequencies are too few for a relaxation spectrum.",
            remedy="Give at least three, better five per decade.",
        )
    up = np.broadcast_to(np.asarray(sigma_storage, dtype=float), omega.shape)
    out = np.broadcast_to(np.asarray(sigma_loss, dtype=float), omega.shape)
    if tau is None:
        tau = mode_grid(omega, storage, loss)
    A = weighted_rows(omega, storage, loss, up, out, tau)
    g = non_negative(A, np.concatenate([1.0 / up, 1.0 / out]))
    used = g > 0
    return describe(omega, storage, loss, up, out, tau[used], g[used], int(used.sum()))


def describe(
    omega: np.ndarray,
    storage: np.ndarray,
    loss: np.ndarray,
    sigma_storage: np.ndarray,
    sigma_loss: np.ndarray,
    tau: np.ndarray,
    strength: np.ndarray,
    free: int,
) -> ModeFit:
    """The fit's curves and residuals for given modes."""
    up, out = mode_moduli(omega, tau)
    up, out = up @ strength, out @ strength
    # relative to the data: the weights the fit was made with
    r_up = (storage - up) / (storage * sigma_storage)
    r_out = (loss - out) / (loss * sigma_loss)
    return ModeFit(
        readonly(tau),
        readonly(strength),
        readonly(up),
        readonly(out),
        readonly(r_up),
        readonly(r_out),
        float(r_up @ r_up + r_out @ r_out),
        free,
    )


def parsimonious(
    omega: np.ndarray,
    storage: np.ndarray,
    loss: np.ndarray,
    sigma_storage: np.ndarray | float,
    sigma_loss: np.ndarray | float,
    modes: int | None = None,
) -> ModeFit:
    """As few positive modes as the data need, with their times fitted too.

    Starts from the dense grid, merges neighbouring modes pair by pair where it costs least, fits
    times and strengths again after each merger, and keeps the number of modes with the lowest
    chi2 + 2 k ln(2 n) (two parameters a mode; Bayesian information criterion).

    Parameters
    ----------
    omega, storage, loss, sigma_storage, sigma_loss
        As for `fit_on_grid`.
    modes : int, optional
        Wanted number of modes; None lets the data choose.

    Returns
    -------
    ModeFit

    Raises
    ------
    InputError
        If `modes` is below one or above what the data can carry.

    References
    ----------
    .. [1] Baumgaertel & Winter, Rheol. Acta 28 (1989) 511 (recalled): parsimonious spectra.
    """
    omega = np.asarray(omega, dtype=float)
    up = np.broadcast_to(np.asarray(sigma_storage, dtype=float), omega.shape)
    out = np.broadcast_to(np.asarray(sigma_loss, dtype=float), omega.shape)
    if modes is not None and not 1 <= modes <= omega.size:
        raise InputError(
            f"{modes} modes cannot be had from {omega.size} frequencies.",
            remedy=f"Ask for 1 to {omega.size}.",
        )
    span = mode_grid(omega, storage, loss, margin=CLOSE_MARGIN)
    dense = fit_on_grid(omega, storage, loss, up, out, span)
    fit_at = _fitter(omega, storage, loss, up, out, (np.log(span[0]), np.log(span[-1])))
    tau, g = _merge_touching(dense.tau, dense.strength, PER_DECADE)
    while tau.size > omega.size:
        tau, g = _merge_closest(tau, g)
    tau, g, chi2 = fit_at(tau, g)
    price = 2.0 * np.log(2.0 * omega.size)
    best = (chi2 + price * tau.size, tau, g)
    while tau.size > max(modes or 1, 1):
        trials = [_merge_pair(tau, g, j) for j in range(tau.size - 1)]
        trials += [(tau[1:], g[1:]), (tau[:-1], g[:-1])]
        A = [weighted_rows(omega, storage, loss, up, out, t) for t, _ in trials]
        b = np.concatenate([1.0 / up, 1.0 / out])
        costs = [float(np.sum((a @ x - b) ** 2)) for a, (_, x) in zip(A, trials, strict=True)]
        # the cheapest few before their refit are nearly always the cheapest after it
        order = np.argsort(costs)[:3]
        tau, g, chi2 = min((fit_at(*trials[j]) for j in order), key=lambda fit: fit[2])
        score = chi2 + price * tau.size
        if modes is not None or score <= best[0]:
            best = (score, tau, g)
        elif score > best[0] + 4 * price:
            break
    if modes is not None and best[1].size != modes:
        best = (0.0, *_split_to(best[1], best[2], modes, fit_at))
    tau, g = best[1], best[2]
    order = np.argsort(tau)
    return describe(omega, storage, loss, up, out, tau[order], g[order], 2 * tau.size)


Fitter = Callable[[np.ndarray, np.ndarray], tuple[np.ndarray, np.ndarray, float]]


def _split_to(
    tau: np.ndarray, g: np.ndarray, wanted: int, fit_at: Fitter
) -> tuple[np.ndarray, np.ndarray]:
    """More modes than the data ask for, because the user did: halve the strongest, refit."""
    while tau.size < wanted:
        k = int(np.argmax(g))
        tau = np.sort(np.concatenate([np.delete(tau, k), tau[k] * np.array([0.6, 1.7])]))
        g = np.concatenate([g[:k], [g[k] / 2, g[k] / 2], g[k + 1 :]])
        tau, g, _ = fit_at(tau, g)
    return tau, g


def _merge_touching(tau: np.ndarray, g: np.ndarray, per_decade: float) -> tuple[np.ndarray, ...]:
    """A mode between two grid points comes back as both of them: put such pairs together."""
    groups = np.concatenate([[0], np.cumsum(np.diff(np.log10(tau)) > 1.5 / per_decade)])
    g_sum = np.bincount(groups, g)
    return np.exp(np.bincount(groups, g * np.log(tau)) / g_sum), g_sum


def _merge_pair(tau: np.ndarray, g: np.ndarray, j: int) -> tuple[np.ndarray, np.ndarray]:
    """Modes j and j+1 as one, at the same sum of g and of g ln tau."""
    total = g[j] + g[j + 1]
    middle = np.exp((g[j] * np.log(tau[j]) + g[j + 1] * np.log(tau[j + 1])) / total)
    return (
        np.concatenate([tau[:j], [middle], tau[j + 2 :]]),
        np.concatenate([g[:j], [total], g[j + 2 :]]),
    )


def _merge_closest(tau: np.ndarray, g: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    return _merge_pair(tau, g, int(np.argmin(np.diff(np.log(tau)))))


def _fitter(
    omega: np.ndarray,
    storage: np.ndarray,
    loss: np.ndarray,
    sigma_storage: np.ndarray,
    sigma_loss: np.ndarray,
    span: tuple[float, float],
) -> Fitter:
    """Damped Gauss-Newton in ln tau and ln g: positive by construction, times kept in the span."""
    scale = np.concatenate([1.0 / (storage * sigma_storage), 1.0 / (loss * sigma_loss)])
    b = np.concatenate([1.0 / sigma_storage, 1.0 / sigma_loss])

    def rows(p: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        k = p.size // 2
        x = np.multiply.outer(omega, np.exp(p[:k]))
        g = np.exp(p[k:])
        d = 1.0 / (1.0 + x * x)
        up, out = g * x * x * d, g * x * d
        # d up/d ln tau = 2 up d, d out/d ln tau = out (1 - x^2) d
        J = np.vstack([np.hstack([2 * up * d, up]), np.hstack([out * (1 - x * x) * d, out])])
        value = np.concatenate([up.sum(axis=1), out.sum(axis=1)])
        return value * scale - b, J * scale[:, None]

    def fit(tau: np.ndarray, g: np.ndarray) -> tuple[np.ndarray, np.ndarray, float]:
        k = tau.size
        p = np.concatenate([np.log(tau), np.log(np.maximum(g, 1e-300))])
        r, J = rows(p)
        cost, damping = float(r @ r), 1e-3
        for _ in range(40):
            N = J.T @ J
            N[np.diag_indices_from(N)] += damping * (np.diag(N) + 1e-12) + 1e-12
            step = np.clip(np.linalg.solve(N, -(J.T @ r)), -1.0, 1.0)
            q = p + step
            q[:k] = np.clip(q[:k], *span)
            r_new, J_new = rows(q)
            new = float(r_new @ r_new)
            if new < cost:
                gain = cost - new
                p, r, J, cost = q, r_new, J_new, new
                damping = max(damping / 5, 1e-9)
                if gain < 1e-4 * max(1.0, 1e-3 * cost):
                    break
            else:
                damping *= 6
                if damping > 1e6:
                    break
        # modes that came to lie on each other are one; vanished ones leave
        tau, g = np.exp(p[:k]), np.exp(p[k:])
        weight = np.abs(J[:, k:]).max(axis=0)
        keep = weight > 1e-3
        if keep.any():
            tau, g = tau[keep], g[keep]
        order = np.argsort(tau)
        return tau[order], g[order], cost

    return fit
