"""Few-parameter distributions fitted to the moduli: mixtures of log-normals, and the generalised
exponential.

A family turns parameters theta into weights: the share of its cumulative curve in every cell, what
lies beyond the cells in the two lumps. The lump below also has a weight of its own (an error of
the plateau modulus looks like short chains). Every parameter has a weak normal prior wide enough
for any melt, so that the evidence of families with different numbers of parameters can be
compared (Laplace; the k! ways to name k parts are not counted, as parts the data do not need
coincide with one another), and members are refits to perturbed data and priors.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import log, pi
from typing import Protocol

import numpy as np
from scipy.special import gammainc, ndtr

from mwdlink.errors import Caution
from mwdlink.inversion.choose import Curve
from mwdlink.inversion.method import MethodFit
from mwdlink.inversion.objective import LUMP_CENTRE, LUMP_SPREAD, Problem
from mwdlink.inversion.tikhonov import draw_members, members_note
from mwdlink.inversion.window import Window

MAX_PARTS = 4
# mixtures lie in long bent valleys: many cheap steps
MAX_STEPS = 400
# a step that promises, or two running that bring, less than this of the objective are the end
TOLERANCE = 1e-3
# ln of the standard deviation of ln M in a part: 0.45 is a dispersity of 1.2, 1.5 one of 9.5
WIDTH_CENTRE, WIDTH_SPREAD = log(0.7), 0.6
# ln of a part's share relative to the first
SHARE_SPREAD = 1.5
LEAST_WIDTH = 0.05


class Family(Protocol):
    """A few-parameter distribution on the cells of a window."""

    name: str
    prior_mean: np.ndarray
    prior_spread: np.ndarray

    def weights_and_slope(self, theta: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Weights (n + 2,) and their derivatives (n + 2, k)."""

    def starts(self, problem: Problem) -> list[np.ndarray]:
        """Starting points to try."""


def _gather(above: np.ndarray) -> np.ndarray:
    """Shares of cells and lumps from the weight above every edge (n + 1 edges), shape (n + 2,).

    Works on columns too.
    """
    first, last = 1.0 - above[:1], above[-1:]
    return np.concatenate([above[:-1] - above[1:], first, last])


def _gather_slope(above: np.ndarray) -> np.ndarray:
    return np.concatenate([above[:-1] - above[1:], -above[:1], above[-1:]])


def _with_lump(
    w: np.ndarray, slope: np.ndarray, logit: float
) -> tuple[np.ndarray, np.ndarray]:
    """Put a share exp(logit) into the lump below, the rest stays as it is."""
    share = min(np.exp(logit), 0.9)
    out = (1.0 - share) * w
    unit = np.zeros_like(w)
    unit[-2] = 1.0
    column = share * (unit - w)
    return out + share * unit, np.column_stack([(1.0 - share) * slope, column])


class Mixture:
    """k log-normals: ln M_i, ln width_i (standard deviation of ln M), ln share_i, lump below."""

    def __init__(self, window: Window, parts: int) -> None:
        self.name = f"{parts} log-normal" + ("s" if parts > 1 else "")
        self.parts = parts
        self.x = np.log(window.edges)
        middle, reach = 0.5 * (self.x[0] + self.x[-1]), 0.4 * (self.x[-1] - self.x[0])
        k = parts
        self.prior_mean = np.concatenate(
            [np.full(k, middle), np.full(k, WIDTH_CENTRE), np.zeros(k - 1), [LUMP_CENTRE]]
        )
        self.prior_spread = np.concatenate(
            [
                np.full(k, reach),
                np.full(k, WIDTH_SPREAD),
                np.full(k - 1, SHARE_SPREAD),
                [LUMP_SPREAD],
            ]
        )

    def weights_and_slope(self, theta: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        k = self.parts
        centre, log_width = theta[:k], theta[k : 2 * k]
        width = LEAST_WIDTH + np.exp(log_width)
        logits = np.concatenate([[0.0], theta[2 * k : 3 * k - 1]])
        share = np.exp(logits - logits.max())
        share /= share.sum()
        z = (centre - self.x[:, None]) / width
        above = ndtr(z)
        bell = np.exp(-0.5 * z * z) / np.sqrt(2 * pi) / width
        cells = _gather(above)
        by_centre = _gather_slope(bell) * share
        by_width = _gather_slope(-bell * z) * share * np.exp(log_width)
        w = cells @ share
        by_share = (cells - w[:, None]) * share
        slope = np.column_stack([by_centre, by_width, by_share[:, 1:]])
        return _with_lump(w, slope, float(theta[-1]))

    def starts(self, problem: Problem) -> list[np.ndarray]:
        low, high = self.x[3], self.x[-4]
        out = []
        for centre in np.linspace(low, high, 7):
            for width in (0.4, 1.0):
                theta = self.prior_mean.copy()
                theta[: self.parts] = centre
                theta[self.parts : 2 * self.parts] = np.log(width)
                out.append(theta)
        return out

    def split(self, smaller: np.ndarray) -> list[np.ndarray]:
        """Starts made from the best mixture of one part less: each part in turn is split."""
        k = self.parts - 1
        centre, width = smaller[:k], smaller[k : 2 * k]
        logits = np.concatenate([[0.0], smaller[2 * k : 3 * k - 1]])
        out = []
        for i in range(k):
            step = 0.8 * np.exp(width[i])
            for shares in ((0.5, 0.5), (0.95, 0.05)):
                c = np.concatenate([np.delete(centre, i), centre[i] + np.array([-0.5, 1.0]) * step])
                s = np.concatenate([np.delete(width, i), width[i] + np.array([-0.2, -0.5])])
                more = logits[i] + np.log(shares)
                g = np.concatenate([np.delete(logits, i), more])
                out.append(np.concatenate([c, s, (g - g[0])[1:], smaller[-1:]]))
        # a small part far from all others: a tail the smaller mixture could not follow
        for away in (2.0, -2.0):
            c = np.append(centre, (centre.max() if away > 0 else centre.min()) + away)
            g = np.append(logits, logits.max() - 3.5)
            s = np.append(width, WIDTH_CENTRE)
            out.append(np.concatenate([c, s, (g - g[0])[1:], smaller[-1:]]))
        return out


class GeneralisedExponential:
    """dW/dM ~ M^a exp(-(M/M0)^b): ln M0', ln(a + 1), ln b, lump below.

    M0' = M0 ((a + 1)/b)^(1/b) is the maximum of dW/dlog M: it hardly moves when a and b trade
    against each other, which M0 itself does over decades.
    """

    name = "generalised exponential"

    def __init__(self, window: Window) -> None:
        self.x = np.log(window.edges)
        middle, reach = 0.5 * (self.x[0] + self.x[-1]), 0.4 * (self.x[-1] - self.x[0])
        self.prior_mean = np.array([middle, log(1.5), log(0.8), LUMP_CENTRE])
        self.prior_spread = np.array([reach, 1.5, 0.7, LUMP_SPREAD])

    def _cells(self, theta: np.ndarray) -> np.ndarray:
        top, p, b = theta[0], np.exp(np.clip(theta[1], -6, 8)), np.exp(np.clip(theta[2], -4, 4))
        order = p / b
        argument = order * np.exp(np.clip(b * (self.x - top), -600, 600))
        return _gather(1.0 - gammainc(order, argument))

    def weights_and_slope(self, theta: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        w = self._cells(theta)
        slope = np.empty((w.size, 3))
        h = 1e-5
        for i in range(3):
            step = np.zeros_like(theta)
            step[i] = h
            slope[:, i] = (self._cells(theta + step) - self._cells(theta - step)) / (2 * h)
        return _with_lump(w, slope, float(theta[-1]))

    def starts(self, problem: Problem) -> list[np.ndarray]:
        out = []
        for centre in np.linspace(self.x[3], self.x[-4], 7):
            for p, b in ((1.0, 1.0), (5.0, 1.0), (3.0, 0.5)):
                theta = self.prior_mean.copy()
                theta[:3] = centre, log(p), log(b)
                out.append(theta)
        return out


@dataclass(frozen=True, eq=False)
class _Found:
    theta: np.ndarray
    w: np.ndarray
    objective: float
    chi2: float
    converged: bool
    log_evidence: float


def _minimise(
    problem: Problem,
    family: Family,
    theta: np.ndarray,
    noise: np.ndarray | None = None,
    pull: np.ndarray | None = None,
) -> _Found:
    """Levenberg-Marquardt on misfits and prior."""
    data = problem.data if noise is None else problem.data + problem.sigma * noise
    centre = family.prior_mean if pull is None else family.prior_mean + family.prior_spread * pull
    inverse, spread = 1.0 / problem.sigma, family.prior_spread

    def rows(t: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray, float]:
        w, dw = family.weights_and_slope(t)
        y, slope = problem.forward.values_and_slope(w)
        if not (np.all(y > 0) and np.all(np.isfinite(y))):
            return w, dw, y, np.inf
        r = (np.log(y) - data) * inverse
        q = (t - centre) / spread
        j = np.vstack([(slope @ dw) * (inverse / y)[:, None], np.diag(1.0 / spread)])
        return w, j, np.concatenate([r, q]), float(r @ r + q @ q)

    theta = np.array(theta, dtype=float)
    w, j, r, value = rows(theta)
    damping, converged, idle = 1e-2, False, 0
    for _ in range(MAX_STEPS):
        if not np.isfinite(value):
            break
        normal, gradient = j.T @ j, j.T @ r
        lhs = normal + damping * np.diag(np.diag(normal))
        step = np.linalg.solve(lhs, -gradient)
        step = step / max(1.0, float(np.max(np.abs(step) / (0.7 * spread))))
        promised = -float(gradient @ step)
        trial = rows(theta + step)
        if trial[3] <= value + 1e-12 * value:
            idle = idle + 1 if value - trial[3] < TOLERANCE else 0
            theta = theta + step
            w, j, r, value = trial
            damping = max(damping * 0.2, 1e-9)
            if promised < 0.1 * TOLERANCE or idle > 1:
                converged = True
                break
        else:
            if promised < TOLERANCE:
                converged = True
                break
            damping *= 5.0
            if damping > 1e10:
                break
    chi2 = float(np.sum(r[: data.size] ** 2)) if np.isfinite(value) else np.inf
    evidence = -np.inf
    if np.isfinite(value):
        log_det = float(np.linalg.slogdet(j.T @ j)[1])
        evidence = -0.5 * value - float(np.sum(np.log(spread))) - 0.5 * log_det
    return _Found(theta, w, value, chi2, converged, evidence)


def _best(problem: Problem, family: Family, starts: list[np.ndarray], tried: int) -> _Found:
    """The best end of the most promising starts."""

    def first(theta: np.ndarray) -> float:
        w, _ = family.weights_and_slope(theta)
        value = problem.chi2(np.maximum(w, 0.0))
        return value if np.isfinite(value) else np.inf

    with np.errstate(invalid="ignore", divide="ignore"):
        order = sorted(range(len(starts)), key=lambda i: first(starts[i]))
    ends = [_minimise(problem, family, starts[i]) for i in order[:tried]]
    return min(ends, key=lambda f: f.objective)


def fit_mixture(
    problem: Problem,
    *,
    parts: int | None = None,
    members: int = 0,
    seed: int = 0,
) -> MethodFit:
    """Mixture of one to four log-normals; the number of parts weighed by evidence.

    Parameters
    ----------
    problem : Problem
    parts : int, optional
        Fixes the number of parts.
    members : int
        Perturbed refits; the number of parts of each is drawn from its posterior.
    seed : int

    Returns
    -------
    MethodFit
        `curve` has one row a number of parts.
    """
    families = [Mixture(problem.window, k) for k in range(1, (parts or MAX_PARTS) + 1)]
    found: list[_Found] = []
    for family in families:
        if not found:
            found.append(_best(problem, family, family.starts(problem), 4))
            continue
        found.append(_best(problem, family, family.split(found[-1].theta), 6))
    evidence = np.array([f.log_evidence for f in found])
    if parts is not None:
        evidence[:-1] = -np.inf
    share = np.exp(evidence - evidence.max())
    share /= share.sum()
    index = int(np.argmax(share))
    best = found[index]
    notes: tuple[Caution, ...] = ()
    if parts is None and index == MAX_PARTS - 1:
        text = (
            f"{MAX_PARTS} log-normals, the most that are tried, fit best: the distribution may be "
            "richer than this method can say."
        )
        notes += (Caution("mixture_at_limit", text),)

    def draw(rng: np.random.Generator) -> tuple[np.ndarray, bool]:
        k = int(rng.choice(share.size, p=share))
        noise = rng.standard_normal(problem.data.size)
        pull = rng.standard_normal(families[k].prior_mean.size)
        end = _minimise(problem, families[k], found[k].theta, noise, pull)
        return end.w, end.converged

    ensemble, lost = draw_members(draw, members, seed, problem.size)
    if lost:
        notes += (members_note(lost, members),)
    curve = Curve(
        np.arange(1.0, len(found) + 1),
        np.array([f.chi2 for f in found]),
        np.zeros(len(found)),
        np.array([float(f.prior_mean.size) for f in families]),
        np.array([f.log_evidence for f in found]),
        problem.data.size,
        index,
        "evidence",
        "parts",
    )
    return MethodFit(
        "mixture",
        problem.window.nodes,
        best.w,
        best.chi2,
        None,
        best.converged,
        curve,
        ensemble,
        notes,
    )


def fit_generalised_exponential(
    problem: Problem, *, members: int = 0, seed: int = 0
) -> MethodFit:
    """One generalised exponential, dW/dM ~ M^a exp(-(M/M0)^b).

    Parameters
    ----------
    problem : Problem
    members : int
        Perturbed refits.
    seed : int

    Returns
    -------
    MethodFit
    """
    family = GeneralisedExponential(problem.window)
    best = _best(problem, family, family.starts(problem), 5)

    def draw(rng: np.random.Generator) -> tuple[np.ndarray, bool]:
        noise = rng.standard_normal(problem.data.size)
        pull = rng.standard_normal(family.prior_mean.size)
        end = _minimise(problem, family, best.theta, noise, pull)
        return end.w, end.converged

    ensemble, lost = draw_members(draw, members, seed, problem.size)
    fit = MethodFit(
        "generalised-exponential",
        problem.window.nodes,
        best.w,
        best.chi2,
        None,
        best.converged,
        None,
        ensemble,
    )
    return replace(fit, notes=(members_note(lost, members),)) if lost else fit
