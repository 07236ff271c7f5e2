"""Arrhenius and WLF through measured shift factors, with intervals, and which one to take."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from mwdlink.chains.shift import GAS_CONSTANT, ZERO_CELSIUS, rereference_wlf
from mwdlink.errors import ModelError
from mwdlink.quantity import Uncertain, readonly

LN10 = float(np.log(10.0))
# Set points are kept to about this between steps [K] (common practice): it enters the fit of the
# laws, not the shifts themselves.
TEMPERATURE_ERROR = 0.1
# What a second constant must take off chi2. Arrhenius is the WLF law of c2 = the reference in
# kelvin, so chance alone takes off this much in one melt of a hundred (chi2 of one degree of
# freedom). An information criterion asks for ln n only, which is nothing for the two or three
# shifts of a usual test.
SECOND_CONSTANT = 6.63
LEVEL = 0.9


@dataclass(frozen=True)
class LawFit:
    """One law through the shift factors.

    Attributes
    ----------
    kind : str
        "arrhenius" or "wlf".
    reference_C : float
        Temperature where a_T = 1 [C].
    constants : mapping of str to Uncertain
        `energy_kJ_per_mol`, or `c1` [-] and `c2_K` [K] at the reference.
    residual_decades : float
        Root mean square distance of log10 a_T from the law [decades].
    chi2_per_point : float or None
        Over the degrees of freedom; None when there are none.
    score : float
        chi2 + constants x 6.63 (or ln(shifts), if that is more): lower is better.
    members : ndarray of shape (m, q)
        Constants of the perturbed fits.
    """

    kind: str
    reference_C: float
    constants: dict[str, Uncertain]
    residual_decades: float
    chi2_per_point: float | None
    score: float
    members: np.ndarray

    def log10_factor(self, T_C: Any, constants: np.ndarray | None = None) -> np.ndarray:
        """log10 a_T at temperatures [C], of the fit or of given constants."""
        values = (
            np.array([q.value for q in self.constants.values()], dtype=float)
            if constants is None
            else np.asarray(constants, dtype=float)
        )
        T = np.asarray(T_C, dtype=float)
        if self.kind == "arrhenius":
            return _arrhenius(T, self.reference_C) * values[0]
        return -values[0] * (T - self.reference_C) / (values[1] + T - self.reference_C)

    def activation_energy(self, T_C: float) -> float:
        """Apparent activation energy R d ln a_T/d(1/T) [kJ/mol] at a temperature [C]."""
        if self.kind == "arrhenius":
            return float(self.constants["energy_kJ_per_mol"].value or 0.0)
        c1, c2 = (float(q.value or 0.0) for q in self.constants.values())
        return _wlf_energy(c1, c2, self.reference_C, T_C)

    def activation_energy_interval(self, T_C: float) -> Uncertain:
        """The same with its interval."""
        value = self.activation_energy(T_C)
        if not self.members.size:
            return Uncertain(value)
        if self.kind == "arrhenius":
            return self.constants["energy_kJ_per_mol"]
        samples = [_wlf_energy(c1, c2, self.reference_C, T_C) for c1, c2 in self.members]
        return Uncertain.from_samples(samples, value, level=LEVEL)

    def to_dict(self) -> dict[str, Any]:
        return {
            "kind": self.kind,
            **self.constants,
            "reference_C": self.reference_C,
            "residual_decades": self.residual_decades,
            "chi2_per_point": self.chi2_per_point,
        }


def _wlf_energy(c1: float, c2: float, reference_C: float, T_C: float) -> float:
    reach = c2 + T_C - reference_C
    return LN10 * GAS_CONSTANT * c1 * c2 / reach**2 * (T_C + ZERO_CELSIUS) ** 2 / 1000.0


def _arrhenius(T: np.ndarray, reference: float) -> np.ndarray:
    """log10 a_T per kJ/mol of activation energy."""
    inverse = 1.0 / (T + ZERO_CELSIUS) - 1.0 / (reference + ZERO_CELSIUS)
    return 1000.0 / (LN10 * GAS_CONSTANT) * inverse


def fit_arrhenius(T: np.ndarray, y: np.ndarray, weight: np.ndarray, pivot: float) -> np.ndarray:
    """Activation energy [kJ/mol] by generalised least squares, as an array of one.

    Parameters
    ----------
    T : ndarray of shape (k,)
        [C], without the pivot.
    y : ndarray of shape (k,)
        log10 a_T relative to the pivot.
    weight : ndarray of shape (k, k)
        Inverse covariance of y.
    pivot : float
        [C]
    """
    x = _arrhenius(T, pivot)
    return np.array([float(x @ weight @ y) / float(x @ weight @ x)])


def fit_wlf(
    T: np.ndarray, y: np.ndarray, weight: np.ndarray, pivot: float, start: np.ndarray | None = None
) -> np.ndarray:
    """c1 [-] and c2 [K] at the pivot by generalised least squares.

    In a = c1/c2 and b = 1/c2, log10 a_T = -a dT/(1 + b dT) is well behaved even where the data show
    no curvature (b = 0).
    """
    dT = T - pivot
    # 1 + b dT must stay above zero at every temperature: c2 above the largest step down
    most = 0.98 / max(float(-dT.min()), 1e-3) if dT.min() < 0 else np.inf
    a, b = (0.05, 0.005) if start is None else (start[0] / start[1], 1.0 / start[1])
    b = min(b, 0.5 * most)
    damping, cost = 1e-3, np.inf
    for _ in range(60):
        d = 1.0 + b * dT
        r = y + a * dT / d
        J = np.column_stack([dT / d, -a * dT * dT / (d * d)])
        cost = float(r @ weight @ r)
        N, g = J.T @ weight @ J, J.T @ weight @ r
        while damping < 1e9:
            step = np.linalg.solve(N + damping * np.diag(np.diag(N) + 1e-300), -g)
            a_new, b_new = a + step[0], float(np.clip(b + step[1], 1e-5, most))
            r_new = y + a_new * dT / (1.0 + b_new * dT)
            new = float(r_new @ weight @ r_new)
            if new <= cost:
                break
            damping *= 5
        else:
            break
        done = cost - new < 1e-9 * (1.0 + cost) and abs(b_new - b) < 1e-8
        a, b, damping = a_new, b_new, max(damping / 5, 1e-12)
        if done:
            break
    return np.array([a / b, 1.0 / b])


def fit_laws(
    T: np.ndarray,
    y: np.ndarray,
    covariance: np.ndarray,
    pivot: int,
    reference_C: float,
    *,
    members: int = 200,
    rng: np.random.Generator | None = None,
    level: float = LEVEL,
) -> tuple[dict[str, LawFit], np.ndarray]:
    """Both laws through the shifts of all temperatures.

    Parameters
    ----------
    T : ndarray of shape (k,)
        [C]
    y : ndarray of shape (k,)
        log10 a_T, zero at the pivot.
    covariance : ndarray of shape (k, k)
        Of y, zero at the pivot.
    pivot : int
    reference_C : float
        Where the constants are to be stated [C].
    members : int
    rng : numpy Generator
    level : float

    Returns
    -------
    laws : dict
        "arrhenius" always, "wlf" with three temperatures or more.
    shifts : ndarray of shape (members, k)
        Perturbed log10 a_T relative to the pivot.
    """
    rng = np.random.default_rng(0) if rng is None else rng
    others = np.array([j for j in range(T.size) if j != pivot])
    x = T[others]
    # what an error of the set points does to log10 a_T, by the slope of a first Arrhenius fit; the
    # pivot's own error moves all others together
    rough = fit_arrhenius(x, y[others], np.eye(others.size), T[pivot])[0]
    slope = rough * 1000.0 / (LN10 * GAS_CONSTANT) / (T + ZERO_CELSIUS) ** 2 * TEMPERATURE_ERROR
    C = covariance[np.ix_(others, others)]
    # 1e-12: exact shifts (a test's) still need an invertible covariance
    full = C + np.diag(slope[others] ** 2) + slope[pivot] ** 2 + 1e-12 * np.eye(others.size)
    W = np.linalg.inv(full)
    root, wide = _root(C), _root(full)
    draws = rng.standard_normal((members, others.size))
    shifts = np.zeros((members, T.size))
    shifts[:, others] = y[others] + draws @ root.T
    law_draws = y[others] + draws @ wide.T
    laws = {}
    kinds = {"arrhenius": fit_arrhenius}
    if T.size >= 3:
        kinds["wlf"] = fit_wlf
    for kind, fit in kinds.items():
        best = fit(x, y[others], W, T[pivot])
        if kind == "wlf":
            rows = [fit_wlf(x, row, W, T[pivot], best) for row in law_draws]
        else:
            rows = [fit_arrhenius(x, row, W, T[pivot]) for row in law_draws]
        samples = np.array(rows).reshape(members, best.size)
        laws[kind] = _law(kind, best, samples, T, y, others, W, T[pivot], reference_C, level)
    return laws, shifts


def _root(covariance: np.ndarray) -> np.ndarray:
    """A matrix R with R R' = covariance, rounding errors below zero set to zero."""
    values, vectors = np.linalg.eigh(0.5 * (covariance + covariance.T))
    return vectors * np.sqrt(np.maximum(values, 0.0))


def _law(
    kind: str,
    best: np.ndarray,
    samples: np.ndarray,
    T: np.ndarray,
    y: np.ndarray,
    others: np.ndarray,
    W: np.ndarray,
    pivot_C: float,
    reference_C: float,
    level: float,
) -> LawFit:
    names: tuple[str, ...]
    if kind == "arrhenius":
        predicted = _arrhenius(T[others], pivot_C) * best[0]
        names = ("energy_kJ_per_mol",)
    else:
        dT = T[others] - pivot_C
        predicted = -best[0] * dT / (best[1] + dT)
        names = ("c1", "c2_K")
        best = np.array(_moved(best, pivot_C, reference_C))
        samples = np.array([_moved(s, pivot_C, reference_C) for s in samples]).reshape(-1, 2)
    r = y[others] - predicted
    chi2 = float(r @ W @ r)
    freedom = others.size - best.size
    constants = {
        name: (
            Uncertain.from_samples(samples[:, j], best[j], level=level)
            if samples.shape[0]
            else Uncertain(float(best[j]), level=level)
        )
        for j, name in enumerate(names)
    }
    return LawFit(
        kind,
        reference_C,
        constants,
        float(np.sqrt(np.mean(r**2))),
        chi2 / freedom if freedom > 0 else None,
        chi2 + best.size * max(SECOND_CONSTANT, float(np.log(others.size))),
        readonly(samples),
    )


def _moved(constants: np.ndarray, pivot_C: float, reference_C: float) -> tuple[float, float]:
    """WLF constants at the reference; a member whose law ends above it is NaN and not used."""
    try:
        return rereference_wlf(float(constants[0]), float(constants[1]), pivot_C, reference_C)
    except ModelError:
        return float("nan"), float("nan")


def preferred(laws: dict[str, LawFit]) -> LawFit:
    """The law with the lower score; Arrhenius, with its one constant, on a tie."""
    if "wlf" in laws and laws["wlf"].score < laws["arrhenius"].score:
        return laws["wlf"]
    return laws["arrhenius"]
