"""The methods `invert` offers beside the smooth one, brought to the same branches and members."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from scipy.stats import norm

from mwdlink.errors import ModelError
from mwdlink.inversion.choose import RULES
from mwdlink.inversion.ensemble import Branch, BranchBuilder, ExponentPrior, Members
from mwdlink.inversion.method import MethodFit
from mwdlink.inversion.objective import Problem
from mwdlink.inversion.parametric import fit_generalised_exponential, fit_mixture
from mwdlink.inversion.smoothing import Scan
from mwdlink.inversion.solve import Fit
from mwdlink.inversion.tikhonov import fit_tikhonov

METHODS = ("smooth", "tikhonov", "mixture", "generalised-exponential")
CHOICES = tuple(RULES)
# these methods take an uncertain exponent at this many equally likely values
EXPONENTS = 5


def run_method(
    problem: Problem, method: str, choose: str, smoothing: float | None, members: int, seed: int
) -> MethodFit:
    """One of the other methods on one problem.

    Raises
    ------
    ModelError
        If the method is unknown.
    """
    if method == "tikhonov":
        return fit_tikhonov(
            problem, choose_by=choose, smoothing=smoothing, members=members, seed=seed
        )
    if method == "mixture":
        return fit_mixture(problem, members=members, seed=seed)
    if method == "generalised-exponential":
        return fit_generalised_exponential(problem, members=members, seed=seed)
    raise ModelError(f"unknown method {method!r}; use one of {', '.join(METHODS)}")


def method_branch(
    build: BranchBuilder,
    kernel: str,
    prior: ExponentPrior,
    method: str,
    choose: str,
    smoothing: float | None,
) -> Branch:
    """One kernel fitted by another method, at the prior's mean exponent."""
    melt, model, problem = build.problem(kernel, prior.mean)
    found = run_method(problem, method, choose, smoothing, 0, 0)
    return Branch(
        kernel,
        melt,
        model,
        prior.spread,
        problem,
        _as_scan(problem, found),
        build.plateau_factor,
        build,
        None if found.curve is None else found.curve.columns(),
        found.notes,
    )


def method_members(
    branch: Branch,
    count: int,
    seed: np.random.SeedSequence,
    scatter: float,
    method: str,
    choose: str,
) -> Members:
    """Perturbed refits by another method; an uncertain exponent is taken at a few values."""
    spread = branch.exponent_spread
    parts = EXPONENTS if spread > 0 else 1
    z = norm.ppf((np.arange(parts) + 0.5) / parts)
    own = branch.scan.fits[0].smoothing if method == "tikhonov" else None
    children = seed.spawn(parts + 1)
    weights, exponents, labels = [], [], []
    for i in range(parts):
        share = count // parts + (1 if i < count % parts else 0)
        exponent = max(branch.model.exponent + spread * float(z[i]), 1.0)
        problem = branch.problem
        if spread > 0 and branch.build is not None:
            problem = branch.build.problem(branch.kernel, exponent)[2]
            problem = replace(problem, sigma=branch.problem.sigma)
        number = int(children[i].generate_state(1)[0])
        found = run_method(problem, method, choose, own, share, number)
        weights.append(found.members)
        exponents.append(np.full(len(found.members), exponent))
        labels.append(np.zeros(len(found.members), dtype=int))
    w = np.concatenate(weights)
    rng = np.random.default_rng(children[-1])
    return Members(
        w,
        np.concatenate(exponents),
        scatter * rng.standard_normal(len(w)),
        np.concatenate(labels),
        np.ones(len(w), dtype=bool),
    )


def _as_scan(problem: Problem, found: MethodFit) -> Scan:
    u = np.log(np.maximum(found.w, 1e-300))
    value = float(found.smoothing) if found.smoothing is not None else 0.0
    curve: Any = found.curve
    freedom = float(curve.freedom[curve.chosen]) if curve is not None else 4.0
    if not np.isfinite(freedom):
        freedom = 4.0
    fit = Fit(u, value, found.chi2, found.chi2, found.converged, 0, np.eye(problem.size))
    t = problem.prior.third @ u
    return Scan(
        np.array([value]), (fit,), np.array([0.0]), np.array([float(t @ t)]), np.array([freedom])
    )
