"""One-kernel inversion against general-purpose solvers, side by side in one run.

    python tests/benchmarks/peers.py [MELTS] [FAMILIES]

MELTS seeded melts a family (default 8; families two-peak,tail), power-law kernel of both data and
fit, exponent 2, 3 % noise, six decades at five points a decade. Prints Markdown. All sides get the
same forward map on the same nodes, so only what is done with it is compared:

* `invert` with 200 members, as it is called;
* `scipy.optimize.least_squares` (300 steps at most), numeric and analytic Jacobian, on the same
  objective, lambda by the same evidence over the same 17 values, intervals by 200 draws from
  (J'J)^-1 (and, two made and scaled, the time of 200 refits to perturbed rows, as `invert` does);
* non-negative Tikhonov by `scipy.optimize.nnls` on the linearised problem, lambda by the
  discrepancy principle, intervals by 40 refits to perturbed data;
* a random-walk Metropolis sampler in numpy on the same posterior at the chosen lambda.
"""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("OMP_NUM_THREADS", "1")

import sys
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from scipy.optimize import least_squares, nnls

sys.path.insert(0, str(Path(__file__).parents[1]))
from melts import FAMILIES, exact_card, mean_within, measured, melt_of  # noqa: E402

from mwdlink.chains.distribution import Distribution  # noqa: E402
from mwdlink.chains.polymer import Polymer  # noqa: E402
from mwdlink.inversion.ensemble import local_scan  # noqa: E402
from mwdlink.inversion.invert import invert  # noqa: E402
from mwdlink.inversion.objective import Problem, lump_rows, sweep_problem, weights  # noqa: E402
from mwdlink.inversion.quantities import Cells  # noqa: E402
from mwdlink.inversion.smoothing import SCAN, good_start  # noqa: E402
from mwdlink.measurement.sweep import Sweep  # noqa: E402
from mwdlink.relaxation.mixing import Model  # noqa: E402

KERNEL, EXPONENT, NOISE, LEVEL = "power-law", 2.0, 0.03, 0.9
MULTIPLE = 2.5
DRAWS, REFITS, SOLVED = 200, 40, 2
TAILS = ((1 - LEVEL) / 2, (1 + LEVEL) / 2)
# steps the general solver may take; its own limit (100 an unknown) lets a perturbed refit that
# creeps along a flat valley go on for minutes
MOST = 300
# chains side by side, steps of each, steps thrown away, one state kept in so many
CHAINS, STEPS, BURN, THIN = 16, 6000, 1500, 10


@dataclass(frozen=True)
class Case:
    """One melt: the measured sweep, its truth, and the problem all sides solve."""

    chains: Distribution
    sweep: Sweep
    card: Polymer
    problem: Problem
    mark: float

    @property
    def truth(self) -> np.ndarray:
        """Mw within the window [g/mol] and weight above 2.5 Mw."""
        window = self.problem.window
        above = self.chains.weight_above(self.mark)
        return np.array([mean_within(self.chains, window.low, window.high), above])

    def quantities(self, w: np.ndarray) -> np.ndarray:
        """The same of weights w (m, n + 2); shape (m, 2)."""
        window = self.problem.window
        cells = Cells.make(window.edges, w)
        inside = cells.mean_within(window.low, window.high)
        return np.column_stack([inside, cells.above(self.mark)])


@dataclass(frozen=True)
class Answer:
    """What one side says of one melt.

    Attributes
    ----------
    fit, whole : float
        Processor time of the fit, and of fit and intervals [s].
    chi2 : float
        Per data point.
    value, low, high : ndarray of shape (2,)
    objective : float
        At the end, where the objective is the tool's own.
    notes : dict
        Further figures by name.
    """

    fit: float
    whole: float
    chi2: float
    value: np.ndarray
    low: np.ndarray
    high: np.ndarray
    objective: float = np.nan
    notes: dict[str, float] = field(default_factory=dict)


@dataclass(frozen=True)
class Mode:
    """A minimum by the general solver: u, lambda, J'J, objective, times."""

    u: np.ndarray
    smoothing: float
    normal: np.ndarray
    objective: float
    seconds: float


def make_case(family: str, seed: int) -> Case:
    """A seeded melt of a family."""
    card, model = exact_card(), Model(KERNEL, EXPONENT, True)
    rng = np.random.default_rng([23, seed, FAMILIES.index(family)])
    chains = melt_of(family, rng)
    sweep = measured(chains, card, model, rng, NOISE)
    sigma = np.full(2 * len(sweep), NOISE)
    problem = sweep_problem(sweep.omega, sweep.storage, sweep.loss, sigma, card.melt(), model)
    return Case(chains, sweep, card, problem, MULTIPLE * float(chains.Mw))


def tool(case: Case) -> tuple[Answer, Problem]:
    """`invert` as it is called, and the problem with its relaxed prior, for the others' use."""
    began = time.process_time()
    problem, found = local_scan(case.problem)
    fit = time.process_time() - began
    began = time.process_time()
    r = invert(
        case.sweep,
        case.card,
        kernels=[KERNEL],
        exponent=EXPONENT,
        noise=NOISE,
        members=DRAWS,
        above=(case.mark,),
    )
    whole = time.process_time() - began
    both = (r.averages["Mw_within_window_g_per_mol"], r.above[0][1])
    value, low, high = (np.array([getattr(u, k) for u in both]) for k in ("value", "low", "high"))
    best = found.fits[found.best]
    answer = Answer(
        fit, whole, r.fit["chi2_per_point"], value, low, high, best.objective,
        {"lambda": best.smoothing},
    )  # fmt: skip
    return answer, problem


def residual_rows(
    problem: Problem, smoothing: float, noise: np.ndarray | float = 0.0
) -> tuple[Callable[[np.ndarray], np.ndarray], Callable[[np.ndarray], np.ndarray]]:
    """Rows whose squares sum to the objective, and their exact Jacobian, as functions of u.

    `noise` is taken off the rows: a perturbed copy.
    """
    prior, forward, root = problem.prior, problem.forward, np.sqrt(smoothing)

    def rows(u: np.ndarray) -> np.ndarray:
        w = weights(u)
        data = (np.log(np.maximum(forward.values(w), 1e-300)) - problem.data) / problem.sigma
        linear = (root * (prior.third @ u), prior.weak @ u - prior.weak_centre)
        return np.concatenate([data, *linear, lump_rows(w)[0]]) - noise

    def slopes(u: np.ndarray) -> np.ndarray:
        w = weights(u)
        y, j = forward.values_and_slope(w)
        j = j / (y * problem.sigma)[:, None]
        j = (j - (j @ w)[:, None]) * w
        return np.vstack([j, root * prior.third, prior.weak, lump_rows(w)[1]])

    return rows, slopes


def general_mode(problem: Problem, analytic: bool) -> Mode:
    """Scan of lambda by `least_squares`, each from its neighbour; the highest evidence."""
    began = time.process_time()
    # from the middle both ways, as the tool's own scan goes: the easy order
    first = int(np.argmin(np.abs(np.log(SCAN / 1e-4))))
    start = good_start(problem)
    best, top = None, -np.inf
    middle = start
    for path in (range(first, len(SCAN)), range(first - 1, -1, -1)):
        u = middle
        for i in path:
            lam = float(SCAN[i])
            rows, slopes = residual_rows(problem, lam)
            end = least_squares(rows, u, jac=slopes if analytic else "2-point", max_nfev=MOST)
            u = end.x
            if i == first:
                middle = u
            normal = end.jac.T @ end.jac
            third = problem.prior.third.shape[0]
            evidence = -end.cost + 0.5 * third * np.log(lam) - 0.5 * np.linalg.slogdet(normal)[1]
            if evidence > top:
                top, best = evidence, Mode(u, lam, normal, 2 * float(end.cost), 0.0)
    if best is None:
        raise RuntimeError("no lambda gave a finite evidence")
    seconds = time.process_time() - began
    return Mode(best.u, best.smoothing, best.normal, best.objective, seconds)


def laplace_draws(mode: Mode, count: int, rng: np.random.Generator) -> np.ndarray:
    """Draws of u from the normal distribution at the mode, shape (count, n + 2)."""
    root = np.linalg.cholesky(mode.normal)
    z = rng.standard_normal((mode.u.size, count))
    return mode.u + np.linalg.solve(root.T, z).T


def softmax_rows(u: np.ndarray) -> np.ndarray:
    """Weights of each row of u."""
    e = np.exp(u - u.max(axis=1, keepdims=True))
    return e / e.sum(axis=1, keepdims=True)


def general_solver(
    case: Case, problem: Problem, analytic: bool, solved: int = SOLVED
) -> tuple[Answer, Mode]:
    """`least_squares` and the Laplace intervals of its end."""
    mode = general_mode(problem, analytic)
    began = time.process_time()
    w = softmax_rows(laplace_draws(mode, DRAWS, np.random.default_rng(1)))
    low, high = np.quantile(case.quantities(w), TAILS, axis=0)
    whole = mode.seconds + time.process_time() - began
    w0 = weights(mode.u)
    began = time.process_time()
    rng, open_ends = np.random.default_rng(4), 0
    for _ in range(solved):
        noise = rng.standard_normal(problem.data.size + mode.u.size)
        rows, slopes = residual_rows(problem, mode.smoothing, noise)
        end = least_squares(rows, mode.u, jac=slopes if analytic else "2-point", max_nfev=MOST)
        open_ends += int(end.status == 0)
    refits = mode.seconds if solved else np.nan
    refits += (time.process_time() - began) * DRAWS / max(solved, 1)
    answer = Answer(
        mode.seconds, whole, problem.chi2(w0) / problem.data.size,
        case.quantities(w0[None])[0], low, high, mode.objective,
        {"lambda": mode.smoothing, "same": refits, "open": open_ends},
    )  # fmt: skip
    return answer, mode


def plain_nnls(
    problem: Problem, data: np.ndarray, w: np.ndarray, smoothing: float, most: int = 20
) -> tuple[np.ndarray, float]:
    """Non-negative weights by repeated linearisation; weights and their chi2 against `data`."""
    n, h = problem.window.nodes.size, problem.window.spacing
    bend = np.zeros((n - 2, n + 2))
    bend[:, :n] = np.sqrt(smoothing) * np.diff(np.eye(n), 2, axis=0) / h**2.5

    def parts(w: np.ndarray) -> tuple[float, float]:
        y = problem.forward.values(w)
        if np.any(y <= 0):
            return np.inf, np.inf
        chi2 = float(np.sum(((np.log(y) - data) / problem.sigma) ** 2))
        return chi2, chi2 + float(np.sum((bend @ w) ** 2))

    chi2, cost = parts(w)
    for _ in range(most):
        y, slope = problem.forward.values_and_slope(w)
        a = slope / (y * problem.sigma)[:, None]
        b = a @ w - (np.log(y) - data) / problem.sigma
        heavy = 1e3 * float(np.abs(a).max())
        matrix = np.vstack([a, bend, np.full(n + 2, heavy)])
        try:
            goal = nnls(matrix, np.concatenate([b, np.zeros(n - 2), [heavy]]))[0]
        except RuntimeError:  # its active set went round in circles: keep what there is
            break
        goal /= goal.sum()
        length, old = 1.0, cost
        while length > 1e-3:
            trial = (1 - length) * w + length * goal
            new_chi2, new = parts(trial)
            if new < cost:
                w, chi2, cost = trial, new_chi2, new
                break
            length *= 0.5
        if old - cost < 1e-3:
            break
    return w, chi2


def tikhonov(case: Case, problem: Problem) -> Answer:
    """The smoothest non-negative fit within the noise, and refits to perturbed data."""
    began = time.process_time()
    w, size = weights(good_start(problem)), problem.data.size
    best, least, chosen = w, np.inf, np.nan
    for lam in np.geomspace(1e2, 1e-6, len(SCAN)):
        w, chi2 = plain_nnls(problem, problem.data, w, float(lam))
        if chi2 < least:
            best, least, chosen = w, chi2, float(lam)
        if chi2 <= size:
            break
    fit = time.process_time() - began
    rng = np.random.default_rng(2)
    refits = []
    for _ in range(REFITS):
        data = problem.data + problem.sigma * rng.standard_normal(size)
        refits.append(plain_nnls(problem, data, best, chosen)[0])
    low, high = np.quantile(case.quantities(np.array(refits)), TAILS, axis=0)
    whole = time.process_time() - began
    value = case.quantities(best[None])[0]
    return Answer(fit, whole, least / size, value, low, high, notes={"lambda": chosen})


def metropolis(case: Case, problem: Problem, mode: Mode, steps: int = STEPS) -> Answer:
    """Random-walk Metropolis of some chains side by side, from the mode and its covariance."""
    began = time.process_time()
    rng = np.random.default_rng(3)
    prior, f = problem.prior, problem.forward
    third = np.sqrt(mode.smoothing) * prior.third

    def half_objective(u: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        e = np.exp(u - u.max(axis=0))
        w = e / e.sum(axis=0)
        y = f.rows @ (f.survival @ w) ** f.exponent + f.linear @ w
        with np.errstate(invalid="ignore", divide="ignore"):
            r = (np.log(y) - problem.data[:, None]) / problem.sigma[:, None]
            lumps = lump_rows_of(w)
        t, k = third @ u, prior.weak @ u - prior.weak_centre[:, None]
        total = sum(np.einsum("ij,ij->j", x, x) for x in (r, t, k, lumps))
        return np.where(np.isfinite(total), 0.5 * total, np.inf), w

    size = mode.u.size
    # the usual scale of a random walk, from the Laplace covariance
    root = np.linalg.solve(np.linalg.cholesky(mode.normal).T, np.eye(size)) * 2.38 / np.sqrt(size)
    u = mode.u[:, None] + 0.2 * np.sqrt(size) * (root @ rng.standard_normal((size, CHAINS)))
    value, w = half_objective(u)
    kept, taken = [], 0.0
    burn = BURN * steps // STEPS
    for i in range(steps):
        trial = u + root @ rng.standard_normal((size, CHAINS))
        new, new_w = half_objective(trial)
        go = rng.exponential(size=CHAINS) > new - value
        u, w = np.where(go, trial, u), np.where(go, new_w, w)
        value = np.where(go, new, value)
        taken += float(go.mean())
        if i >= burn and i % THIN == 0:
            kept.append(w.T)
    states = np.array(kept)  # (draws, chains, n + 2)
    q = case.quantities(states.reshape(-1, size)).reshape(*states.shape[:2], 2)
    flat = q.reshape(-1, 2)
    low, middle, high = np.quantile(flat, (TAILS[0], 0.5, TAILS[1]), axis=0)
    sampling = time.process_time() - began
    worth = min(effective_draws(q[:, :, k]) for k in range(2))
    mean = states.reshape(-1, size).mean(axis=0)
    return Answer(
        mode.seconds, mode.seconds + sampling, problem.chi2(mean) / problem.data.size,
        middle, low, high,
        notes={
            "effective": worth,
            "taken": taken / steps,
            "same": mode.seconds + sampling * DRAWS / worth,
            "lambda": mode.smoothing,
        },
    )  # fmt: skip


def lump_rows_of(w: np.ndarray) -> np.ndarray:
    """Prior rows of the two lumps of many states, w of shape (n + 2, m)."""
    centre, unit = (lump_rows(np.full(3, x))[0][0] for x in (1.0, np.e))
    return centre + (unit - centre) * np.log(np.maximum(w[-2:], 1e-300))


def effective_draws(x: np.ndarray) -> float:
    """Independent draws some correlated chains are worth; x of shape (draws, chains).

    Between and within chains together, correlations summed while pairs of them are positive
    (C. J. Geyer, Stat. Sci. 7 (1992) 473, recalled).
    """
    n, m = x.shape
    centred = x - x.mean(axis=0)
    spectrum = np.abs(np.fft.rfft(centred, 2 * n, axis=0)) ** 2
    own = np.fft.irfft(spectrum, axis=0)[:n].mean(axis=1) / n
    within = own[0] * n / (n - 1)
    total = own[0] + x.mean(axis=0).var(ddof=1)
    rho = 1.0 - (within - own) / total
    rho[0] = 1.0
    time_ = -1.0
    for k in range(0, n - 1, 2):
        pair = rho[k] + rho[k + 1]
        if pair <= 0:
            break
        time_ += 2.0 * pair
    return float(n * m / max(time_, 1.0))


NAMES = {
    "tool": "`invert`",
    "numeric": "`least_squares`, numeric Jacobian",
    "analytic": "`least_squares`, analytic Jacobian",
    "nnls": "Tikhonov by `nnls`",
    "metropolis": "Metropolis in numpy",
}


def compare(case: Case, steps: int = STEPS, solved: int = SOLVED) -> dict[str, Answer]:
    """All sides on one melt."""
    ours, problem = tool(case)
    numeric, _ = general_solver(case, problem, False, solved)
    analytic, mode = general_solver(case, problem, True, solved)
    return {
        "tool": ours,
        "numeric": numeric,
        "analytic": analytic,
        "nnls": tikhonov(case, problem),
        "metropolis": metropolis(case, problem, mode, steps),
    }


QUANTITIES = ("value", "low", "high")
Run = tuple[str, Case, dict[str, Answer]]


def ratio(runs: Sequence[Run], name: str, part: str) -> float:
    """Median over melts of a side's time over the tool's; `same` is 200 equal draws or refits."""
    out = []
    for _, _, answers in runs:
        ours, theirs = answers["tool"], answers[name]
        if part == "same":
            out.append(theirs.notes.get("same", np.nan) / ours.whole)
        else:
            out.append(getattr(theirs, part) / getattr(ours, part))
    return float(np.median(out))


def times_table(runs: Sequence[Run]) -> str:
    """Ratios of processor time, and what the samplers and solvers came to."""
    text = "| side | fit | fit and its intervals | fit and 200 refits or independent draws |\n"
    text += "|---|---|---|---|\n"
    for name, label in NAMES.items():
        fit, whole, same = (ratio(runs, name, k) for k in ("fit", "whole", "same"))
        last = "1" if name == "tool" else "" if np.isnan(same) else f"{float(f'{same:.2g}'):g}"
        text += f"| {label} | {fit:.2g} | {whole:.2g} | {last} |\n"
    ours = [a["tool"] for _, _, a in runs]
    walks = [a["metropolis"].notes for _, _, a in runs]
    worth = [w["effective"] for w in walks]
    text += (
        f"\nThe tool: fit {np.median([o.fit for o in ours]):.2f} s, all of it "
        f"{np.median([o.whole for o in ours]):.2f} s of processor time. Metropolis, {CHAINS} "
        f"chains of {STEPS} steps: {100 * np.mean([w['taken'] for w in walks]):.0f} % taken, worth "
        f"{np.median(worth):.0f} independent draws in the median and {min(worth):.0f} at least.\n"
    )
    for name in ("numeric", "analytic"):
        gap = [
            a[name].objective - a["tool"].objective
            for _, _, a in runs
            if np.isclose(a[name].notes["lambda"], a["tool"].notes["lambda"])
        ]
        ends = sum(a[name].notes["open"] for _, _, a in runs)
        text += (
            f"\n{NAMES[name]}: {ends:.0f} of {SOLVED * len(runs)} refits not done after {MOST} "
            f"steps; the tool's lambda in {len(gap)} of {len(runs)} melts, its objective "
            f"there {min(gap, default=np.nan):+.1g} to {max(gap, default=np.nan):+.1g} off.\n"
        )
    return text


def error_table(runs: Sequence[Run]) -> str:
    """Misfit, error, cover and width of each family and side."""
    text = "| family | side | chi2 a point | Mw error, % | Mw cover | width, % "
    text += "| error above, wt% | cover above | width, wt% |\n" + "|---" * 9 + "|\n"
    for family in dict.fromkeys(f for f, _, _ in runs):
        mine = [r for r in runs if r[0] == family]
        truth = np.array([c.truth for _, c, _ in mine])
        for name, label in NAMES.items():
            a = [answers[name] for _, _, answers in mine]
            value, low, high = (np.array([getattr(x, k) for x in a]) for k in QUANTITIES)
            mw = 100 * np.abs(value[:, 0] / truth[:, 0] - 1)
            top = 100 * np.abs(value[:, 1] - truth[:, 1])
            held = np.sum((low <= truth) & (truth <= high), axis=0)
            unit = np.column_stack([truth[:, 0], np.ones(len(a))])
            width = 100 * np.median((high - low) / unit, axis=0)
            text += (
                f"| {family} | {label} | {np.median([x.chi2 for x in a]):.2f} "
                f"| {np.median(mw):.2g} ({mw.max():.2g}) | {held[0]} of {len(a)} | {width[0]:.2g} "
                f"| {np.median(top):.2g} ({top.max():.2g}) | {held[1]} of {len(a)} "
                f"| {width[1]:.2g} |\n"
            )
    return text


def study(families: Sequence[str], melts: Sequence[int]) -> list[Run]:
    """All sides on seeded melts; those whose mark lies beyond the window are left out."""
    runs = []
    for i in melts:
        for family in families:
            case = make_case(family, i)
            if case.mark <= case.problem.window.high:
                runs.append((family, case, compare(case)))
    return runs


def main() -> None:
    melts = int(sys.argv[1]) if len(sys.argv) > 1 else 8
    chosen = sys.argv[2].split(",") if len(sys.argv) > 2 else ["two-peak", "tail"]
    began = time.process_time()
    runs = study(chosen, range(melts))
    spent = time.process_time() - began
    sys.stdout.write(f"{times_table(runs)}\n{error_table(runs)}\n{spent:.0f} s in all\n")


if __name__ == "__main__":
    main()
