"""Problems from a relaxation curve and from a flow curve, on the same unknowns as a sweep.

*Relaxation curve.* The rows are G(t) itself: no transform is needed, G(t) = G_N S(t)^beta + Rouse.
The window is that of a sweep from 1/t_max to 1/t_min.

*Flow curve.* Steady shear is not linear viscoelasticity; the Cox-Merz rule
eta(rate) = |eta*|(omega = rate) stands in for it. It holds for linear melts with a broad spectrum,
to some per cent at best, and moments read from flow curves have been found wrong by up to half
their value; a flow curve also lacks the phase. Both are said with every result.

References
----------
.. [1] W. P. Cox, E. H. Merz, J. Polym. Sci. 28 (1958) 619 (recalled).
.. [2] C. Lavallee, A. Berker, J. Rheol. 41 (1997) 851 (published): up to 50 % on moments.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from mwdlink.chains.melt import Melt
from mwdlink.errors import Caution, InputError
from mwdlink.inversion.many import Copies
from mwdlink.inversion.objective import Forward, Problem, rouse_columns, time_columns
from mwdlink.inversion.roughness import roughness
from mwdlink.inversion.solve import Shift, minimise
from mwdlink.inversion.window import Window, find_window
from mwdlink.measurement.noise import Weights
from mwdlink.measurement.sweep import FlowCurve, RelaxationCurve
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.operator import LEAN_MARGIN, LEAN_TIMES, time_operator
from mwdlink.relaxation.rouse import rouse_relaxation

LEAST_POINTS = 6
# noise below this is not believed of any curve
LEAST_NOISE = 0.01
# what the Cox-Merz rule itself is good to, added to the noise of each point in quadrature
COX_MERZ_ERROR = 0.05
# published: moments read from flow curves wrong by up to this
MOMENT_ERROR = 0.50


@dataclass(frozen=True, eq=False)
class ViscosityForward(Forward):
    """Rows |eta*|(omega) from the moduli: `rows` and `linear` hold G' over G'', as for a sweep.

    Attributes
    ----------
    omega : ndarray of shape (n_w,)
        [rad/s]
    """

    omega: np.ndarray = field(default_factory=lambda: np.ones(1))

    def evaluate(self, w: np.ndarray) -> tuple[np.ndarray, Any]:
        """|eta*| [Pa s], shape (n_w,), and what `slope` needs."""
        moduli, known = super().evaluate(w)
        n = self.omega.size
        return np.hypot(moduli[:n], moduli[n:]) / self.omega, (moduli, known)

    def values_of_many(self, w: np.ndarray) -> np.ndarray:
        """|eta*| [Pa s] of many weights, shapes (m, n + 2) and (m, n_w)."""
        moduli = super().values_of_many(w)
        n = self.omega.size
        return np.hypot(moduli[:, :n], moduli[:, n:]) / self.omega

    def slope(self, known: Any) -> np.ndarray:
        """Derivatives of |eta*| [Pa s] with respect to w, shape (n_w, n + 2)."""
        moduli, inner = known
        rows = super().slope(inner)
        n = self.omega.size
        size = np.hypot(moduli[:n], moduli[n:])
        up, out = moduli[:n] / size, moduli[n:] / size
        both = up[:, None] * rows[:n] + out[:, None] * rows[n:]
        return both / self.omega[:, None]


def relaxation_problem(
    curve: RelaxationCurve,
    melt: Melt,
    model: Model,
    *,
    noise: float | None = None,
    window: Window | None = None,
) -> Problem:
    """The problem of a relaxation curve.

    Parameters
    ----------
    curve : RelaxationCurve
    melt : Melt
    model : Model
    noise : float, optional
        Relative noise [-]; default the curve's own column, else estimated from its scatter.
    window : Window, optional

    Returns
    -------
    Problem

    Raises
    ------
    InputError
        With fewer than six points.
    """
    _enough(len(curve))
    window = window or find_window(1.0 / curve.time, melt, model)
    nodes = window.nodes
    survival = time_columns(curve.time, melt, model, window)
    linear = np.zeros_like(survival)
    if model.rouse:
        # the same stand-ins for the masses of the lumps as for a sweep
        masses = np.concatenate([nodes, [0.5 * nodes[0], 2.0 * nodes[-1]]])
        linear = rouse_relaxation(curve.time, masses, melt)
    rows = melt.plateau_modulus * np.eye(curve.time.size)
    forward = Forward(survival, rows, linear, model.exponent, curve.time)
    sigma = _sigma(curve.sigma, noise, curve.time, curve.modulus)
    return Problem(
        np.log(curve.modulus), sigma, forward, roughness(nodes.size, window.spacing), window
    )


def flow_problem(
    curve: FlowCurve,
    melt: Melt,
    model: Model,
    *,
    noise: float | None = None,
    window: Window | None = None,
) -> Problem:
    """The problem of a flow curve, read through the Cox-Merz rule.

    Parameters
    ----------
    curve : FlowCurve
    melt : Melt
    model : Model
    noise : float, optional
        Relative noise [-], as for `relaxation_problem`; the error of the rule itself is added.
    window : Window, optional

    Returns
    -------
    Problem

    Raises
    ------
    InputError
        With fewer than six points.
    """
    _enough(len(curve))
    window = window or find_window(curve.rate, melt, model)
    operator = time_operator(curve.rate, LEAN_MARGIN, LEAN_TIMES)
    survival = time_columns(operator.times, melt, model, window)
    rouse = rouse_columns(curve.rate, melt, model, window)
    forward = ViscosityForward(
        survival,
        operator.matrix * melt.plateau_modulus,
        np.vstack([rouse.real, rouse.imag]),
        model.exponent,
        operator.times,
        curve.rate,
    )
    sigma = _sigma(curve.sigma, noise, curve.rate, curve.viscosity)
    sigma = np.hypot(sigma, COX_MERZ_ERROR)
    prior = roughness(window.nodes.size, window.spacing)
    return Problem(np.log(curve.viscosity), sigma, forward, prior, window)


class _Maker:
    """Builds problems of one curve for any melt and model; picklable, so that workers can."""

    def __init__(self, curve: RelaxationCurve | FlowCurve, noise: float | None) -> None:
        self.curve, self.noise = curve, noise

    def __call__(self, melt: Melt, model: Model, window: Window | None) -> Problem:
        if isinstance(self.curve, FlowCurve):
            return flow_problem(self.curve, melt, model, noise=self.noise, window=window)
        return relaxation_problem(self.curve, melt, model, noise=self.noise, window=window)


def curve_maker(
    curve: RelaxationCurve | FlowCurve, noise: float | None = None
) -> tuple[Callable[[Melt, Model, Window | None], Problem], int, Weights]:
    """What builds the problems of a curve, its number of data, and its errors.

    Parameters
    ----------
    curve : RelaxationCurve or FlowCurve
    noise : float, optional
        Relative noise [-].

    Raises
    ------
    InputError
        Too few points, or a noise that makes no sense.
    """
    _enough(len(curve))
    if noise is not None and not 0 < noise < 1:
        raise InputError(
            f"a relative noise of {noise:g} makes no sense.",
            remedy="Give a fraction: 0.02 for 2 %.",
        )
    if isinstance(curve, FlowCurve):
        sigma = np.hypot(_sigma(curve.sigma, noise, curve.rate, curve.viscosity), COX_MERZ_ERROR)
    else:
        sigma = _sigma(curve.sigma, noise, curve.time, curve.modulus)
    source = "given" if noise is not None else "estimated" if curve.sigma is None else "columns"
    return _Maker(curve, noise), len(curve), Weights(sigma, sigma[:0], source)


def curve_cautions(curve: RelaxationCurve | FlowCurve) -> tuple[Caution, ...]:
    """What must be said with a distribution read from such a curve."""
    return flow_cautions(curve) if isinstance(curve, FlowCurve) else relaxation_cautions(curve)


def minimise_copies(problem: Problem, copies: Copies) -> tuple[np.ndarray, np.ndarray]:
    """Perturbed copies of a problem whose rows are not linear in G(t), one after the other.

    Parameters
    ----------
    problem : Problem
    copies : Copies
        As for the stacked solver of linear rows, which this stands in for.

    Returns
    -------
    u : ndarray of shape (m, n + 2)
    converged : ndarray of bool, shape (m,)
    """
    u, good = np.empty_like(copies.u), np.zeros(len(copies.u), dtype=bool)
    for i in range(len(copies.u)):
        forward = problem.forward
        if copies.survival is not None:
            forward = replace(forward, survival=copies.survival[i])
        if copies.exponent is not None:
            forward = replace(forward, exponent=float(copies.exponent[i]))
        shift = Shift(copies.data[i], copies.third[i], copies.weak[i], copies.lumps[i])
        own = replace(problem, forward=forward)
        fit = minimise(own, copies.u[i], float(copies.smoothing[i]), shift)
        u[i], good[i] = fit.u, fit.converged
    return u, good


def flow_cautions(curve: FlowCurve) -> tuple[Caution, ...]:
    """What must be said with every distribution read from a flow curve."""
    out = [
        Caution(
            "flow_curve_input",
            "The flow curve was read through the Cox-Merz rule, which is for linear melts with a "
            "broad spectrum. Moments read from flow curves have been found wrong by up to "
            f"{100 * MOMENT_ERROR:.0f} % (Lavallee and Berker 1997, published); the intervals here "
            "do not hold that. An oscillatory sweep of the same melt settles it.",
        )
    ]
    low = curve.viscosity[0]
    if len(curve) > 2:
        slope = np.polyfit(np.log(curve.rate[:3]), np.log(curve.viscosity[:3]), 1)[0]
        if slope < -0.15:
            out.append(
                Caution(
                    "flow_curve_no_plateau",
                    f"The viscosity still rises towards low rates at {curve.rate[0]:.3g} 1/s "
                    f"({low:.3g} Pa s): the longest chains have not been seen.",
                )
            )
    return tuple(out)


def relaxation_cautions(curve: RelaxationCurve) -> tuple[Caution, ...]:
    """What must be said with a distribution read from a relaxation curve."""
    if len(curve) > 2:
        slope = np.polyfit(np.log(curve.time[-3:]), np.log(curve.modulus[-3:]), 1)[0]
        if slope > -1.0:
            return (
                Caution(
                    "relaxation_not_terminal",
                    f"G(t) still falls slowly at {curve.time[-1]:.3g} s (slope {slope:.2g}): the "
                    "longest chains have not been seen to relax.",
                ),
            )
    return ()


def scatter(x: np.ndarray, y: np.ndarray) -> float:
    """Relative scatter of a smooth curve, from what a local cubic in log-log leaves over [-].

    Every run of six points is fitted by a cubic; the residuals over their degrees of freedom,
    as a median over the runs, so that a bend or an outlier does not count as noise.
    """
    u, v = np.log(x), np.log(y)
    if u.size < LEAST_POINTS:
        return LEAST_NOISE
    found = []
    for i in range(u.size - 5):
        basis = np.vander((u[i : i + 6] - u[i : i + 6].mean()) / np.ptp(u[i : i + 6]), 4)
        rest = v[i : i + 6] - basis @ np.linalg.lstsq(basis, v[i : i + 6], rcond=None)[0]
        found.append(float(rest @ rest) / 2.0)
    # the median of a chi2 of two degrees of freedom over its mean is ln 2
    return float(np.sqrt(np.median(found) / np.log(2.0)))


def _sigma(
    column: np.ndarray | None, noise: float | None, x: np.ndarray, y: np.ndarray
) -> np.ndarray:
    if noise is not None:
        return np.full(x.size, float(noise))
    if column is not None:
        return np.asarray(column, dtype=float)
    return np.full(x.size, max(scatter(x, y), LEAST_NOISE))


def _enough(points: int) -> None:
    if points < LEAST_POINTS:
        raise InputError(
            f"{points} points are too few for a distribution.",
            remedy=f"Give at least {LEAST_POINTS}, better five per decade.",
        )
