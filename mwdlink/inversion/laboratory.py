"""Precisions of measurements that have not been made, with the fit taken for the truth."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from mwdlink.chains.melt import Melt
from mwdlink.inversion.many import Copies, minimise_many
from mwdlink.inversion.objective import Problem, lump_rows, sweep_problem
from mwdlink.inversion.roughness import relieved
from mwdlink.inversion.solve import Fit
from mwdlink.inversion.statuses import BOUND_SHARE
from mwdlink.relaxation.mixing import Model

# half the width of a normal distribution's 90 % interval over its standard deviation
HALF_WIDTH = 1.6449
# chains beyond the last node: how far beyond its edge, on average, in decades of M
BEYOND_DECADES = 0.28
TAIL = np.linspace(0.0, 4.0, 401)
CHECK_MEMBERS = 60


class Laboratory:
    """Problems and precisions of measurements not made yet."""

    def __init__(
        self,
        problem: Problem,
        fit: Fit,
        melt: Melt,
        model: Model,
        omega: np.ndarray,
        sigma: np.ndarray,
    ) -> None:
        self.window = problem.window
        self.w, self.smoothing = fit.w, fit.smoothing
        self.melt, self.model = melt, model
        self.omega, self.sigma = omega, sigma
        self._made: dict[tuple[bytes, bytes], tuple[Problem, np.ndarray]] = {}
        n = omega.size
        self.noise = float(np.median(sigma))
        self.per_decade = max((n - 1) / max(float(np.log10(omega.max() / omega.min())), 0.1), 2.0)

    def continued(self, problem: Problem) -> np.ndarray:
        """The fitted weights on the nodes of another window.

        Beyond the last node ln of the density goes on as the parabola it ends with; what the lump
        above holds beyond that is a narrow bump a little further up. The weight below the first
        node stays in the lump below or becomes the first cells.
        """
        old, new = np.log10(self.window.edges), np.log10(problem.window.edges)
        total = np.concatenate([[0.0], np.cumsum(self.w[:-2])]) + self.w[-2]
        below = self.w[-2] * np.clip(1.0 - (old[0] - new) / 0.5, 0.0, 1.0)
        beyond = np.interp(new - old[-1], TAIL, self._tail())
        cumulative = np.where(new < old[0], below, np.interp(new, old, total)) + beyond
        cells = np.maximum(np.diff(cumulative), 1e-14)
        w = np.concatenate([cells, [max(cumulative[0], 1e-6)], [max(1.0 - cumulative[-1], 1e-14)]])
        return w / w.sum()

    def _tail(self) -> np.ndarray:
        """Weight within each distance `TAIL` beyond the last edge [-]."""
        count = min(15, self.w.size - 3)
        x = (np.arange(-count, 0) + 0.5) * self.window.spacing
        ln_density = np.log(np.maximum(self.w[-2 - count : -2] / self.window.spacing, 1e-300))
        bend, slope, level = np.polyfit(x, ln_density, 2)
        shape = np.exp(level + min(slope, -0.5) * TAIL + min(bend, -1.5) * TAIL**2)
        step = TAIL[1] - TAIL[0]
        smooth = np.concatenate([[0.0], np.cumsum(0.5 * (shape[1:] + shape[:-1])) * step])
        above = float(self.w[-1])
        if smooth[-1] >= above:
            return smooth * above / smooth[-1]
        bump = np.exp(-0.5 * ((TAIL - BEYOND_DECADES) / 0.12) ** 2)
        bump = np.concatenate([[0.0], np.cumsum(0.5 * (bump[1:] + bump[:-1]))])
        return smooth + (above - smooth[-1]) * bump / bump[-1]

    def problem(self, omega: np.ndarray, sigma: np.ndarray) -> tuple[Problem, np.ndarray]:
        """The problem of a set of frequencies with exact data, and the weights behind it."""
        key = (omega.tobytes(), sigma.tobytes())
        if key not in self._made:
            self._made[key] = self._make(omega, sigma)
        return self._made[key]

    def _make(self, omega: np.ndarray, sigma: np.ndarray) -> tuple[Problem, np.ndarray]:
        ones = np.ones(omega.size)
        built = sweep_problem(omega, ones, ones, sigma, self.melt, self.model)
        w = self.continued(built)
        prior = relieved(built.prior, w)
        return replace(built, data=np.log(built.forward.values(w)), prior=prior), w

    def expected(self, omega: np.ndarray, sigma: np.ndarray, name: str) -> float:
        """Precision by Fisher information and the delta method; infinite for a mere bound."""
        problem, w = self.problem(omega, sigma)
        y, slope = problem.forward.values_and_slope(w)
        scaled = slope / (y * problem.sigma)[:, None]
        j = scaled * w - np.outer(scaled @ w, w)
        lump = lump_rows(w)[1]
        hessian = j.T @ j + problem.prior.precision(self.smoothing) + lump.T @ lump
        top, bottom = self._parts(problem, name)
        if not (w @ top > 0 and w @ bottom > 0) or self._share(w, top, bottom, name) > BOUND_SHARE:
            return np.inf
        gradient = w * top / (w @ top) - w * bottom / (w @ bottom)
        ridge = 1e-10 * np.trace(hessian) / len(w) * np.eye(len(w))
        variance = float(gradient @ np.linalg.solve(hessian + ridge, gradient))
        return HALF_WIDTH * float(np.sqrt(max(variance, 0.0)))

    def checked(
        self, omega: np.ndarray, sigma: np.ndarray, name: str, spare: float = 1.0
    ) -> float:
        """Precision of a small ensemble of perturbed refits; infinite for a mere bound.

        `spare` tightens the share that chains too long to be sized may have: the tail that the
        present data do not show may be heavier than the parabola it is continued by.
        """
        problem, w = self.problem(omega, sigma)
        rng = np.random.default_rng(0)
        m, n = CHECK_MEMBERS, problem.size
        copies = Copies(
            np.tile(np.log(w), (m, 1)),
            np.full(m, self.smoothing),
            rng.standard_normal((m, problem.data.size)),
            rng.standard_normal((m, n - 5)),
            rng.standard_normal((m, 3)),
            rng.standard_normal((m, 2)),
        )
        u, good = minimise_many(problem, copies)
        e = np.exp(u - u.max(axis=1, keepdims=True))
        members = (e / e.sum(axis=1, keepdims=True))[good]
        if len(members) < m // 2:
            return np.inf
        top, bottom = self._parts(problem, name)
        values = (members @ top) / np.maximum(members @ bottom, 1e-300)
        shares = [self._share(x, top, bottom, name) for x in members]
        low, middle, high = np.quantile(values, [0.05, 0.5, 0.95])
        if not middle > 0 or np.quantile(shares, 0.9) > spare * BOUND_SHARE:
            return np.inf
        return float(0.5 * (high - low) / middle)

    def _parts(self, problem: Problem, name: str) -> tuple[np.ndarray, np.ndarray]:
        """The quantity as a ratio (w . top)/(w . bottom), the lumps standing at the outer edges."""
        nodes, edges = problem.window.nodes, problem.window.edges
        mass = np.concatenate([nodes, edges[:1], edges[-1:]])
        one = np.ones(mass.size)
        if name == "Mw":
            return mass, one
        if name == "Mz":
            return mass**2, mass
        if name == "Mw_within_window":
            inside = (mass >= self.window.low) & (mass <= self.window.high)
            inside[-2:] = False
            return mass * inside, 1.0 * inside
        limit = float(name[6:])
        x = np.log(edges)
        share = np.clip((x[1:] - np.log(limit)) / np.diff(x), 0.0, 1.0)
        return np.concatenate([share, [0.0, 1.0]]), one

    def _share(self, w: np.ndarray, top: np.ndarray, bottom: np.ndarray, name: str) -> float:
        """Share of an average that the chains of unknown length make; it is a bound beyond 2 %."""
        if name not in ("Mw", "Mz"):
            # a limit beyond the last edge splits the lump, which nothing here can
            return 1.0 if name.startswith("above:") and not np.any(top[:-2] > 0) else 0.0
        return float(w[-1] * top[-1] / (w @ top))
