"""The ensemble behind every interval: kernels, exponents, smoothing, noise, time law.

One branch a kernel. Within a branch the exponent's posterior is its prior weighed by the evidence;
members draw an exponent, a lambda and perturbations of data and prior, and are solved again
(randomise, then optimise). The time law's scatter moves the molar-mass axis and needs no refit.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from mwdlink.chains.melt import Melt
from mwdlink.errors import Caution, ModelError, MwdlinkError
from mwdlink.inversion.many import Copies, minimise_many
from mwdlink.inversion.objective import (
    LUMP_CENTRE,
    LUMP_SPREAD,
    Forward,
    Problem,
    time_columns,
    weights,
)
from mwdlink.inversion.other_inputs import minimise_copies
from mwdlink.inversion.roughness import relieved
from mwdlink.inversion.smoothing import SCAN, Scan, mean_evidence, scan
from mwdlink.inversion.solve import Fit
from mwdlink.relaxation.kernels import get_kernel
from mwdlink.relaxation.mixing import Model

# a kernel is impossible when its chi2 exceeds the best one's by this much, in units of the best
# one's chi2 per degree of freedom (five standard deviations)
REJECT = 25.0
# among members lambda leans this much (in ln of the evidence per half decade) to the free side:
# smoothing also biases what it chooses, in two-peak melts most; docs/accuracy.md has the covers
LEAN = 0.6
# where the pull of smoothing is asked, a lambda with less than this of the largest share is left
# out, and no weight moves by more than a factor of e (where data are silent a first-order step is
# long and means nothing)
LEAST_SHARE, FARTHEST_BACK = 0.02, 1.0
# a mean of the exponent that moves by less than this share of its spread is not worth another scan
UNMOVED = 0.15
# the fit may narrow the exponent's prior to half its spread at most
MOST_PRECISION = 3.0
# at another exponent only lambdas within this of the best ln evidence are tried, this many
SPOKEN, ASKED = 4.0, 3
# a first scan, which only shows where there is weight, may stop this early
ROUGHLY = 0.3
# and the scans at other exponents, of which only the mean evidence is wanted
SIDEWAYS = 2e-2


@dataclass(frozen=True)
class ExponentPrior:
    """Normal prior of the mixing exponent; spread 0 fixes it."""

    mean: float = 2.0
    spread: float = 0.2


@dataclass(frozen=True, eq=False)
class Branch:
    """One kernel fitted to the data.

    Attributes
    ----------
    kernel : str
    melt : Melt
    model : Model
        With the exponent's posterior mean.
    exponent_spread : float
        Posterior standard deviation of the exponent.
    problem : Problem
    scan : Scan
    plateau_factor : float
        Factor on the card's plateau modulus.
    build, curve, notes : optional
        Of a method that is not the smooth one: what builds its problems at other exponents, its
        own scan as columns, its cautions.
    """

    kernel: str
    melt: Melt
    model: Model
    exponent_spread: float
    problem: Problem
    scan: Scan
    plateau_factor: float = 1.0
    build: BranchBuilder | None = None
    curve: Mapping[str, np.ndarray] | None = None
    notes: tuple[Caution, ...] = ()

    @property
    def fit(self) -> Fit:
        """The fit of highest evidence."""
        return self.scan.fits[self.scan.best]

    @property
    def chi2(self) -> float:
        """Least chi2 over the scan's believable part."""
        held = self.scan.weights > 0.01
        return min(f.chi2 for f, h in zip(self.scan.fits, held, strict=True) if h)

    @property
    def chi2_per_point(self) -> float:
        return self.fit.chi2 / self.problem.data.size


@dataclass(frozen=True, eq=False)
class Members:
    """Members of one branch.

    Attributes
    ----------
    w : ndarray of shape (m, n + 2)
    exponent, ln_time : ndarray of shape (m,)
        Mixing exponent; ln of the factor on the time law.
    smoothing_index : ndarray of int, shape (m,)
    converged : ndarray of bool, shape (m,)
    """

    w: np.ndarray
    exponent: np.ndarray
    ln_time: np.ndarray
    smoothing_index: np.ndarray
    converged: np.ndarray


def local_scan(problem: Problem, u0: np.ndarray | None = None) -> tuple[Problem, Scan]:
    """Scan, relax the prior where there is no weight, scan again."""
    first = scan(problem, u0, SCAN[::3], tolerance=ROUGHLY, give_up=10.0, finish=False)
    mean = np.zeros(problem.size)
    for share, fit in zip(first.weights, first.fits, strict=True):
        mean += share * fit.w
    problem = replace(problem, prior=relieved(problem.prior, mean))
    return problem, scan(problem, first.fits[first.best].u)


def fit_branch(
    build: BranchBuilder, kernel: str, prior: ExponentPrior, fixed_smoothing: float | None = None
) -> Branch:
    """Fit one kernel, with its exponent weighed by the fit.

    Raises
    ------
    MwdlinkError
        If the kernel cannot serve this card or window.
    """
    mean, spread = prior.mean, prior.spread
    values = None if fixed_smoothing is None else np.array([fixed_smoothing])
    melt, model, problem = build.problem(kernel, mean)
    problem, found = _scan(problem, None, values)
    if spread > 0:
        mean, spread = _exponent_posterior(build, kernel, problem, found, mean, prior)
        if mean != prior.mean:
            melt, model, moved = build.problem(kernel, mean)
            problem = replace(moved, prior=problem.prior)
            found = scan(problem, None, found.smoothing, known=found)
    return Branch(kernel, melt, model, spread, problem, found, build.plateau_factor)


def plateau_variants(make: Any, melt: Melt, rouse: bool, branch: Branch) -> list[Branch]:
    """The branch, and where the card gives a range of the plateau modulus the same at its ends.

    The exponent's posterior and the relaxed prior are the branch's own.
    """
    out = [branch]
    if melt.plateau_range is None or branch.build is not None:
        return out
    for end in melt.plateau_range:
        factor = end / melt.plateau_modulus
        if abs(factor - 1.0) < 5e-3:
            continue
        build = BranchBuilder(make, melt, rouse, factor)
        other, model, problem = build.problem(branch.kernel, branch.model.exponent)
        problem = replace(problem, prior=branch.problem.prior, sigma=branch.problem.sigma)
        found = scan(problem, None, branch.scan.smoothing, known=branch.scan)
        out.append(
            Branch(branch.kernel, other, model, branch.exponent_spread, problem, found, factor)
        )
    return out


def _scan(
    problem: Problem, u0: np.ndarray | None, values: np.ndarray | None
) -> tuple[Problem, Scan]:
    if values is not None:
        return problem, scan(problem, u0, values)
    return local_scan(problem, u0)


class BranchBuilder:
    """Builds problems of one data set for any kernel and exponent on fixed nodes a kernel."""

    def __init__(self, make_problem: object, melt: Melt, rouse: bool, plateau_factor: float = 1.0):
        self.make_problem = make_problem
        self.plateau_factor = plateau_factor
        self.melt = (
            melt
            if plateau_factor == 1.0
            else melt.with_(plateau_modulus=melt.plateau_modulus * plateau_factor)
        )
        self.rouse = rouse
        self._window: dict[str, object] = {}

    def problem(self, kernel: str, exponent: float) -> tuple[Melt, Model, Problem]:
        model = Model(kernel, float(max(exponent, 1.0)), self.rouse)
        built = self.make_problem(self.melt, model, self._window.get(kernel))  # type: ignore[operator]
        self._window.setdefault(kernel, built.window)
        return self.melt, model, built


def _exponent_posterior(
    build: BranchBuilder,
    kernel: str,
    problem: Problem,
    found: Scan,
    centre: float,
    prior: ExponentPrior,
) -> tuple[float, float]:
    """Mean and spread of prior times evidence, the evidence a parabola through three exponents.

    The evidence is averaged over lambda at each exponent: at one fixed lambda, and worst at a
    smooth one, it would measure how log-normal the melt is, not the exponent.
    """
    reach = 1.2 * prior.spread
    offsets = np.array([max(centre - reach, 1.0) - centre, 0.0, reach])
    if offsets[0] > -0.5 * reach:
        return centre, prior.spread
    held = np.flatnonzero(found.log_evidence > found.log_evidence.max() - SPOKEN)
    held = np.unique(held[np.linspace(0, held.size - 1, min(held.size, ASKED)).round().astype(int)])
    values = found.smoothing[held]
    totals = []
    for d in offsets:
        if d == 0.0:
            totals.append(mean_evidence(found.log_evidence[held]))
            continue
        other = build.problem(kernel, centre + d)[2]
        moved = replace(other, prior=problem.prior)
        side = scan(moved, None, values, tolerance=SIDEWAYS, known=found, finish=False)
        totals.append(mean_evidence(side.log_evidence))
    c2, c1, _ = np.polyfit(offsets, totals, 2)
    # the shape prior speaks in this evidence too, so it may not narrow the exponent without limit
    data = float(np.clip(-2.0 * c2, 0.0, MOST_PRECISION / prior.spread**2))
    # log posterior: data/2 (d - peak)^2 + (centre + d - mean)^2/(2 spread^2)
    peak = float(np.clip(c1 / (-2.0 * c2), -reach, reach)) if data > 0 else reach * np.sign(c1)
    pull = 1.0 / prior.spread**2
    precision = data + pull
    shift = (data * peak + pull * (prior.mean - centre)) / precision
    spread = float(1.0 / np.sqrt(precision))
    if abs(shift) < UNMOVED * prior.spread:
        return centre, spread
    return max(centre + float(shift), 1.0), spread


def draw_members(
    branch: Branch, count: int, seed: np.random.SeedSequence, scatter: float
) -> Members:
    """Perturbed refits of a branch.

    Parameters
    ----------
    branch : Branch
    count : int
    seed : SeedSequence
    scatter : float
        Standard deviation of ln of the time-law factor.
    """
    problem, found = branch.problem, branch.scan
    rng = np.random.default_rng(seed)
    index = rng.choice(found.smoothing.size, size=count, p=leaning(found))
    n = problem.size
    z = rng.standard_normal(count)
    exponent = np.maximum(branch.model.exponent + branch.exponent_spread * z, 1.0)
    survival = None
    if branch.exponent_spread > 0:
        survival = _survival_of(branch, exponent)
    copies = Copies(
        np.array([found.fits[k].u for k in index]),
        found.smoothing[index],
        rng.standard_normal((count, problem.data.size)),
        rng.standard_normal((count, n - 5)),
        rng.standard_normal((count, 3)),
        rng.standard_normal((count, 2)),
        survival,
        exponent if branch.exponent_spread > 0 else None,
    )
    ln_time = scatter * rng.standard_normal(count)
    if type(problem.forward) is Forward:
        u, ok = minimise_many(problem, copies)
    else:  # rows that are not linear in G(t) have no stacked form
        u, ok = minimise_copies(problem, copies)
    e = np.exp(u - u.max(axis=1, keepdims=True))
    return Members(e / e.sum(axis=1, keepdims=True), exponent, ln_time, index, ok)


def leaning(found: Scan) -> np.ndarray:
    """Shares of the lambdas among members: the evidence, leaning to the free side."""
    x = found.log_evidence - LEAN * np.log(found.smoothing) / np.log(10.0) * 2.0
    p = np.exp(x - x.max())
    return p / p.sum()


def unpulled(branch: Branch) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """The fits of a branch as they are and with the pull of smoothing undone, and their shares.

    At a minimum the data's gradient balances the roughness's, lambda T'T u; without the latter the
    first step would be H^-1 lambda T'T u. Nothing for a log-normal melt; for sharp peaks the part
    of the bias that the fit itself betrays.

    Parameters
    ----------
    branch : Branch
        Of the smooth method.

    Returns
    -------
    before, after : ndarray of shape (k, n + 2)
        Weights at every lambda that has a say among members.
    shares : ndarray of shape (k,)
        Of those lambdas; sum 1.
    """
    shares = leaning(branch.scan)
    held = np.flatnonzero(shares > LEAST_SHARE * shares.max())
    rough = branch.problem.prior.rough
    before, after = [], []
    for i in held:
        fit = branch.scan.fits[i]
        lhs = fit.hessian + 1e-9 * np.eye(fit.u.size)
        step = np.linalg.solve(lhs, fit.smoothing * (rough @ fit.u))
        before.append(fit.w)
        after.append(weights(fit.u + np.clip(step, -FARTHEST_BACK, FARTHEST_BACK)))
    return np.array(before), np.array(after), shares[held] / shares[held].sum()


def _survival_of(branch: Branch, exponent: np.ndarray) -> np.ndarray:
    """Survival matrices at many exponents: ln K is a parabola in 1/beta through three of them.

    Exact for kernels whose F does not depend on beta, 1e-4 for those whose time constant does.
    """
    centre, reach = branch.model.exponent, 2.0 * branch.exponent_spread
    at = np.array([max(centre - reach, 1.0), centre, centre + reach])
    problem = branch.problem
    forward = problem.forward
    times = forward.times
    if times is None:
        raise ModelError("these data rows have no list of times to mix on")
    columns = []
    for value in at:
        k = time_columns(
            times, branch.melt, replace(branch.model, exponent=float(value)), problem.window
        )
        columns.append(np.log(np.maximum(k, 1e-300)))
    x, y = 1.0 / at, 1.0 / exponent
    out = np.zeros((exponent.size, *columns[0].shape))
    for i in range(3):
        a, b = (i + 1) % 3, (i + 2) % 3
        lagrange = (y - x[a]) * (y - x[b]) / ((x[i] - x[a]) * (x[i] - x[b]))
        out += lagrange[:, None, None] * columns[i]
    np.exp(out, out=out)
    dead = columns[1] < -600.0
    out[:, dead] = 0.0
    return out


def admissible(branches: Sequence[Branch]) -> list[bool]:
    """Which kernels the data allow: chi2 within REJECT of the best, scaled by the best's own."""
    chi2 = np.array([b.chi2 for b in branches])
    n = branches[0].problem.data.size
    best = float(chi2.min())
    winner = branches[int(np.argmin(chi2))].scan
    dof = max(n - float(winner.freedom[winner.best]), 1.0)
    unit = max(best / dof, 1.0)
    return [bool((c - best) / unit <= REJECT) for c in chi2]


def prior_weights(branch: Branch, count: int, seed: np.random.SeedSequence) -> np.ndarray:
    """Weights drawn from the prior alone, shape (count, n + 2): what no data would say."""
    rng = np.random.default_rng(seed)
    problem, found = branch.problem, branch.scan
    precision = problem.prior.precision(float(found.smoothing[found.best]))
    n = problem.size
    lumps = slice(n - 2, n)
    core = precision[: n - 2, : n - 2]
    mean = np.linalg.solve(
        core + 1e-9 * np.eye(n - 2), (problem.prior.weak.T @ problem.prior.weak_centre)[: n - 2]
    )
    root = np.linalg.cholesky(core + 1e-9 * np.eye(n - 2))
    z = rng.standard_normal((n - 2, count))
    u = mean[:, None] + np.linalg.solve(root.T, z)
    w = np.zeros((count, n))
    for i in range(count):
        lump = np.exp(np.minimum(LUMP_CENTRE + LUMP_SPREAD * rng.standard_normal(2), 1.0))
        body = weights(u[:, i])
        w[i, : n - 2] = body
        w[i, lumps] = lump
        w[i] /= w[i].sum()
    return w


def usable(kernel: str, melt: Melt) -> bool:
    """Whether a kernel can serve a melt's card."""
    try:
        get_kernel(kernel, melt)
    except MwdlinkError:
        return False
    return True
