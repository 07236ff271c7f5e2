"""How strong a penalty should be: four ways to choose lambda from one scan.

*evidence*: the most probable lambda (Laplace). *gcv*: generalised cross-validation,
N chi2/(N - f)^2 at its least, with f degrees of freedom. *l-curve*: the corner of ln roughness
against ln chi2, its largest curvature. *discrepancy*: the smoothest answer that fits within the
noise, chi2 <= N (where chance has put the least chi2 above N, N + 2 sqrt(2 N)).

With unknowns held at zero the degrees of freedom are those of the free set: the trace of the hat
matrix restricted to the unknowns above zero. The trace over all unknowns counts parameters nobody
fitted.

References
----------
.. [1] G. Golub, M. Heath, G. Wahba, Technometrics 21 (1979) 215 (recalled): cross-validation.
.. [2] P. C. Hansen, SIAM Review 34 (1992) 561 (recalled): L-curve.
.. [3] V. A. Morozov, Sov. Math. Dokl. 7 (1966) 414 (recalled): discrepancy.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.interpolate import CubicSpline

from mwdlink.errors import Caution, ModelError

RULES = ("evidence", "gcv", "l-curve", "discrepancy")
# where the L-curve hardly moves any more its curvature is noise: such points do not count
LEAST_SPEED = 0.02


@dataclass(frozen=True, eq=False)
class Curve:
    """One scan, from smooth to free.

    Attributes
    ----------
    smoothing : ndarray of shape (k,)
        lambda, descending (or the number of parts, ascending).
    chi2 : ndarray of shape (k,)
    roughness : ndarray of shape (k,)
        The penalised functional of each answer, without lambda.
    freedom : ndarray of shape (k,)
        Degrees of freedom on the free set.
    log_evidence : ndarray of shape (k,)
    points : int
        Number of data N.
    chosen : int
    rule : str
    axis : str
        What `smoothing` counts: `smoothing` or `parts`.
    """

    smoothing: np.ndarray
    chi2: np.ndarray
    roughness: np.ndarray
    freedom: np.ndarray
    log_evidence: np.ndarray
    points: int
    chosen: int = 0
    rule: str = ""
    axis: str = "smoothing"

    def columns(self) -> dict[str, Any]:
        """Columns of the table of the scan."""
        score = gcv(self)
        out = {
            f"{self.axis} [-]": self.smoothing,
            "chi2 per point [-]": self.chi2 / self.points,
            "roughness [-]": self.roughness,
            "freedom [-]": self.freedom,
            "log evidence [-]": self.log_evidence,
            "GCV [-]": np.where(np.isfinite(score), score, np.nan),
            "chosen": np.arange(self.smoothing.size) == self.chosen,
        }
        if self.axis == "parts":
            del out["roughness [-]"], out["GCV [-]"]
        return out


@dataclass(frozen=True)
class Choice:
    """A pick from a scan, with what is to be said of it."""

    index: int
    rule: str
    cautions: tuple[Caution, ...] = ()


def choose(curve: Curve, rule: str = "evidence") -> Choice:
    """Pick from a scan by one of `RULES`.

    Returns
    -------
    Choice
        With a caution `smoothing_at_end` when the pick lies at an end of the scan, and
        `discrepancy_not_reached` when nothing in the scan fits within the noise.

    Raises
    ------
    ModelError
        If the rule is unknown.
    """
    notes: list[Caution] = []
    if rule == "evidence":
        index = int(np.argmax(_finite(curve.log_evidence, -np.inf)))
    elif rule == "gcv":
        index = int(np.argmin(_finite(gcv(curve), np.inf)))
    elif rule == "l-curve":
        index = _corner(curve)
    elif rule == "discrepancy":
        index, said = _within_noise(curve)
        notes += said
    else:
        raise ModelError(f"unknown way to choose lambda {rule!r}; use one of {', '.join(RULES)}")
    if index in (0, curve.smoothing.size - 1) and curve.smoothing.size > 2:
        end = "smoothest" if index == 0 else "freest"
        text = (
            f"The choice of lambda by {rule} is the {end} value of the scan "
            f"({curve.smoothing[index]:.2g}): the scan, not the data, decided. Set it by hand or "
            "choose it another way."
        )
        notes.append(Caution("smoothing_at_end", text))
    return Choice(index, rule, tuple(notes))


def _within_noise(curve: Curve) -> tuple[int, list[Caution]]:
    """The smoothest answer with chi2 <= N, or within what chance lets chi2 exceed N."""
    chance = curve.points + 2.0 * np.sqrt(2.0 * curve.points)
    for limit in (float(curve.points), chance):
        fits = np.flatnonzero(curve.chi2 <= limit)
        if fits.size:
            return int(fits[0]), []
    text = (
        f"No smoothing in the scan fits within the noise (least chi2 per point "
        f"{curve.chi2.min() / curve.points:.2g}): the noise is larger than stated, or the model "
        "does not fit."
    )
    return int(np.argmin(curve.chi2)), [Caution("discrepancy_not_reached", text)]


def gcv(curve: Curve) -> np.ndarray:
    """N chi2/(N - f)^2 of each lambda; infinite where no degree of freedom is left."""
    left = curve.points - curve.freedom
    with np.errstate(divide="ignore", invalid="ignore"):
        value = curve.points * curve.chi2 / left**2
    return np.where(left > 0.5, value, np.inf)


def _finite(x: np.ndarray, otherwise: float) -> np.ndarray:
    return np.where(np.isfinite(x), x, otherwise)


def l_curvature(curve: Curve) -> np.ndarray:
    """Signed curvature of ln roughness against ln chi2 along ln lambda; the corner is positive."""
    order = np.argsort(curve.smoothing)
    s = np.log(curve.smoothing[order])
    # both are monotonic in lambda for an exact minimum; what is left of the iteration is not
    chi2 = np.maximum.accumulate(curve.chi2[order])
    rough = np.minimum.accumulate(curve.roughness[order])
    x = CubicSpline(s, np.log(np.maximum(chi2, 1e-300)))
    y = CubicSpline(s, np.log(np.maximum(rough, 1e-300)))
    dx, dy = x(s, 1), y(s, 1)
    speed = np.hypot(dx, dy)
    with np.errstate(divide="ignore", invalid="ignore"):
        bend = (dx * y(s, 2) - x(s, 2) * dy) / speed**3
    bend = np.where(speed > LEAST_SPEED * speed.max(), bend, -np.inf)
    out = np.empty_like(bend)
    out[order] = bend
    return out


def _corner(curve: Curve) -> int:
    if curve.smoothing.size < 5:
        return int(np.argmin(np.log(curve.chi2) + np.log(np.maximum(curve.roughness, 1e-300))))
    bend = l_curvature(curve)
    # the ends have no neighbours on one side
    bend[[0, -1]] = -np.inf
    return int(np.argmax(bend)) if np.any(np.isfinite(bend)) else curve.smoothing.size - 1


# -- degrees of freedom and evidence of one constrained answer ------------------------------------
def free_set_figures(
    rows: np.ndarray, penalty: np.ndarray, smoothing: float, free: np.ndarray
) -> tuple[float, float]:
    """Degrees of freedom and log-determinant part of the evidence, on the free unknowns.

    Parameters
    ----------
    rows : ndarray of shape (n_r, n)
        Data rows over their noise (already without directions that a constraint takes away).
    penalty : ndarray of shape (n_l, n)
        Rows L of the penalty lambda |L x|^2.
    smoothing : float
        lambda, >= 0.
    free : ndarray of bool of shape (n,)
        Unknowns above zero.

    Returns
    -------
    freedom : float
        trace A_F (A_F'A_F + lambda L_F'L_F)^-1 A_F'.
    log_determinant : float
        (ln det lambda L_F'L_F - ln det(A_F'A_F + lambda L_F'L_F))/2 over the directions the
        penalty sees; the others are common to all lambda.
    """
    a, l = rows[:, free], penalty[:, free]
    k = a.shape[1]
    if k == 0:
        return 0.0, 0.0
    scale = np.sqrt(np.sum(a * a, axis=0)) + 1e-300
    a, l = a / scale, l / scale
    # by QR of the stacked rows, not by the normal matrix: with a tiny lambda that is singular
    stacked = np.vstack([a, np.sqrt(smoothing) * l])
    q, s, _ = np.linalg.svd(stacked, full_matrices=False)
    held = s > 1e-13 * s[0]
    top = q[: a.shape[0], held]
    freedom = float(np.sum(top * top))
    seen = np.linalg.svd(l, compute_uv=False)
    seen = seen[seen > 1e-10 * max(seen.max(initial=0.0), 1e-300)]
    log_prior = float(np.sum(np.log(seen)) + 0.5 * seen.size * np.log(max(smoothing, 1e-300)))
    return freedom, log_prior - float(np.sum(np.log(s[held])))
