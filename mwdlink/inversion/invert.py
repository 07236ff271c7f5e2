"""`invert`: from a measured curve to the molar-mass distribution and what the data can carry."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from mwdlink.chains.melt import Melt
from mwdlink.chains.polymer import Polymer, need_polymer
from mwdlink.errors import Caution, InputError, MwdlinkError, NotConverged, merge_cautions
from mwdlink.inversion.advice import check_wanted
from mwdlink.inversion.assemble import assemble
from mwdlink.inversion.ensemble import (
    Branch,
    BranchBuilder,
    ExponentPrior,
    Members,
    admissible,
    draw_members,
    fit_branch,
    plateau_variants,
)
from mwdlink.inversion.inversion_result import Inversion
from mwdlink.inversion.methods import CHOICES, METHODS, method_branch, method_members
from mwdlink.inversion.objective import Problem, sweep_problem
from mwdlink.inversion.other_inputs import curve_cautions, curve_maker
from mwdlink.inversion.smoothing import scan
from mwdlink.inversion.window import Window
from mwdlink.measurement.checks import slips
from mwdlink.measurement.noise import chi2_in_words, noise_of
from mwdlink.measurement.sweep import FlowCurve, RelaxationCurve, Sweep
from mwdlink.relaxation.kernels import KERNEL_NAMES, available_kernels, get_kernel
from mwdlink.relaxation.mixing import Model, exponent_cautions

DEFAULT_EXPONENT, DEFAULT_SPREAD = 2.0, 0.2
LEAST_POINTS = 5
# more would cost memory and time without end, and say no more than their means do
MOST_POINTS = 2_000


def invert(
    sweep: Sweep | RelaxationCurve | FlowCurve,
    polymer: Polymer,
    *,
    kernels: Sequence[str] | None = None,
    exponent: float | tuple[float, float] | None = None,
    rouse: bool = True,
    members: int = 200,
    above: Sequence[float] = (),
    seed: int = 0,
    executor: Any = None,
    temperature_C: float | None = None,
    noise: float | None = None,
    method: str = "smooth",
    choose: str = "evidence",
    smoothing: float | None = None,
    want: Mapping[str, float] | None = None,
    level: float = 0.9,
) -> Inversion:
    """Molar-mass distribution from linear viscoelastic data.

    Parameters
    ----------
    sweep : Sweep, RelaxationCurve or FlowCurve
        The measured curve at one temperature.
    polymer : Polymer
    kernels : sequence of str, optional
        Kernels to try; default all the card has constants for. Those the data allow share the
        ensemble and so enter every interval.
    exponent : float, (low, high) or None
        Mixing exponent: a number fixes it, a pair is its 90 % range, None takes the card's or the
        prior 2.0 +- 0.2; a range is weighed by the fit.
    rouse : bool
    members : int
        Ensemble members over all kernels; 0 gives no intervals.
    above : sequence of float
        Molar masses [g/mol] above which the weight is wanted.
    seed : int
    executor : concurrent.futures.Executor, optional
        Runs the kernels side by side; results do not depend on it.
    temperature_C : float, optional
        Of the test, where the curve does not carry its own [C].
    noise : float, optional
        Relative noise; default from the curve's columns, else estimated.
    method : str
        `smooth`, `tikhonov`, `mixture` or `generalised-exponential`.
    choose : str
        For `tikhonov`: `evidence`, `gcv`, `l-curve` or `discrepancy`.
    smoothing : float, optional
        A fixed smoothing parameter instead of the choice.
    want : mapping, optional
        Quantity to relative precision, for which a measurement is advised.
    level : float
        Of the intervals.

    Returns
    -------
    Inversion

    Raises
    ------
    InputError
        If the data cannot be used.
    ModelError
        If the card lacks what a kernel asked for needs.
    NotConverged
        If no kernel's fit converged; carries the best Inversion so far as `partial`.
    """
    _check(sweep, members, above, method, choose, level)
    _check_smoothing(method, choose, smoothing)
    need_polymer(polymer)
    if want:
        check_wanted(want)
    temperature, notes = _temperature(sweep, polymer, temperature_C)
    melt = polymer.melt(temperature)
    if kernels is None:
        names = list(available_kernels(melt))
    else:
        names = [k for k in KERNEL_NAMES if k in set(kernels)]
        for k in kernels:
            get_kernel(k, melt)
    prior, fixed = exponent_prior(exponent, melt)
    make, points, weights = _problem_maker(sweep, noise)
    if isinstance(sweep, Sweep):
        notes += slips(sweep, noise=noise, plateau_modulus=melt.plateau_modulus)
    else:
        notes += curve_cautions(sweep)
    tasks = [(make, melt, rouse, k, prior, smoothing, method, choose) for k in names]
    mapper: Callable[..., Any] = map if executor is None else executor.map
    outcome = list(mapper(_run_kernel, tasks))
    branches: list[Branch] = [b for b in outcome if isinstance(b, Branch)]
    if not branches:
        raise outcome[0]
    for name, b in zip(names, outcome, strict=True):
        if not isinstance(b, Branch):
            notes += (Caution("kernel_left_out", f"The kernel {name} could not be used: {b}"),)
    allowed = admissible(branches)
    branches, inflation = _inflate(branches, allowed, weights.source)
    used = [b for b, ok in zip(branches, allowed, strict=True) if ok]
    notes += tuple(n for b in used for n in b.notes)
    if members and method == "smooth":
        used = [v for b in used for v in plateau_variants(make, melt, rouse, b)]
    scatter = melt.scatter_decades * float(np.log(10.0))
    seeds = np.random.SeedSequence(seed).spawn(len(KERNEL_NAMES) + 1)
    children = {k: iter(seeds[KERNEL_NAMES.index(k)].spawn(3)) for k in KERNEL_NAMES}
    jobs = [
        (b, n, next(children[b.kernel]), scatter, method, choose)
        for b, n in zip(used, _split(members, len(used)), strict=True)
    ]
    drawn: list[Members] = list(mapper(_run_members, jobs)) if members else []
    words = chi2_in_words(
        used[0].chi2_per_point * inflation**2,
        max(points - int(used[0].scan.freedom[used[0].scan.best]), 1),
        weights.source,
    )
    if words and not isinstance(sweep, FlowCurve):
        # a flow curve's errors are the rule's, not scatter: its chi2 says nothing of the noise
        notes += (Caution("chi2", words),)
    if inflation > 1.0:
        notes += (
            Caution(
                "noise_inflated",
                f"No kernel fits within the stated noise; it was taken {inflation:.2g} times as "
                "large, so that the intervals hold the misfit as well.",
            ),
        )
    result = assemble(
        sweep,
        polymer,
        melt,
        branches,
        allowed,
        used,
        drawn,
        above=tuple(float(a) for a in above),
        seed=seed,
        prior_seed=seeds[-1],
        fixed_exponent=fixed,
        exponent_prior=prior,
        rouse=rouse,
        noise={"relative": weights.typical, "source": weights.source, "inflated_by": inflation},
        method=method,
        choose=choose,
        want=want,
        level=level,
        notes=merge_cautions(
            sweep.warnings, melt.warnings, notes, exponent_cautions(prior.mean)
        ),
    )
    if not result.fit["converged"]:
        raise NotConverged(
            "the fit did not converge; its result is not shown. Look at the data's ends and noise, "
            "or fix the smoothing",
            result,
        )
    return result


def exponent_prior(
    exponent: float | tuple[float, float] | None, melt: Melt
) -> tuple[ExponentPrior, bool]:
    """Prior of the mixing exponent and whether it is fixed."""
    if exponent is None:
        if melt.mixing_exponent_range is not None:
            exponent = melt.mixing_exponent_range
        elif melt.mixing_exponent is not None:
            return ExponentPrior(melt.mixing_exponent, DEFAULT_SPREAD), False
        else:
            return ExponentPrior(DEFAULT_EXPONENT, DEFAULT_SPREAD), False
    if isinstance(exponent, (int, float)):
        Model(exponent=float(exponent))
        return ExponentPrior(float(exponent), 0.0), True
    low, high = float(exponent[0]), float(exponent[1])
    if not 1.0 <= low < high <= 8.0:
        raise InputError(f"the exponent's range {low:g} to {high:g} must rise within 1 to 8")
    middle = 0.5 * (low + high)
    if melt.mixing_exponent is not None and low <= melt.mixing_exponent <= high:
        middle = melt.mixing_exponent
    # the range is taken as 90 %
    return ExponentPrior(middle, (high - low) / (2 * 1.6449)), False


def _check(
    sweep: Any, members: int, above: Sequence[float], method: str, choose: str, level: float
) -> None:
    if not isinstance(sweep, (Sweep, RelaxationCurve, FlowCurve)):
        raise InputError(
            f"invert needs a sweep, relaxation or flow curve, not {type(sweep).__name__}"
        )
    if len(sweep) < LEAST_POINTS:
        raise InputError(
            f"{len(sweep)} points are too few for a distribution.",
            path=sweep.path,
            remedy=f"Give at least {LEAST_POINTS}, better five per decade over four decades.",
        )
    if len(sweep) > MOST_POINTS:
        raise InputError(
            f"{len(sweep)} points are too many.",
            path=sweep.path,
            remedy=f"Give at most {MOST_POINTS}: twenty per decade are plenty.",
        )
    if members < 0 or (0 < members < 20):
        raise InputError("give 0 members, or at least 20 for an interval")
    if any(not (np.isfinite(a) and a > 0) for a in above):
        raise InputError("molar masses for the weight above must be positive")
    if method not in METHODS:
        raise InputError(
            f"unknown method {method!r}.", remedy="Use one of " + ", ".join(METHODS) + "."
        )
    if choose not in CHOICES:
        raise InputError(
            f"unknown choice {choose!r}.", remedy="Use one of " + ", ".join(CHOICES) + "."
        )
    if not 0 < level < 1:
        raise InputError("the level of the intervals must lie between 0 and 1")


def _check_smoothing(method: str, choose: str, smoothing: float | None) -> None:
    """Refuse what the method would pass over without a word."""
    if choose != "evidence" and method != "tikhonov":
        raise InputError(
            f"the choice {choose!r} is tikhonov's; {method} does not use it.",
            remedy="Give --method tikhonov too, or leave --choose out.",
        )
    if smoothing is not None and method not in ("smooth", "tikhonov"):
        raise InputError(
            f"{method} has no smoothing to fix.",
            remedy="Leave --smoothing out, or use --method smooth or tikhonov.",
        )


def _temperature(
    sweep: Any, polymer: Polymer, asked: float | None
) -> tuple[float, tuple[Caution, ...]]:
    own = sweep.temperature_C
    if own is None and asked is None:
        return polymer.temperature_C, (
            Caution(
                "temperature_assumed",
                f"The data state no temperature; the card's own, {polymer.temperature_C:g} C, was "
                "taken. State it with --temperature.",
            ),
        )
    if own is None:
        return float(asked), ()  # type: ignore[arg-type]
    if asked is not None and abs(own - asked) > 1.0:
        return own, (
            Caution(
                "temperature_of_data",
                f"The data are at {own:g} C and were read at that temperature, not at {asked:g} C: "
                "a distribution does not depend on it.",
            ),
        )
    return own, ()


class _SweepMaker:
    """Builds problems of one sweep; picklable, so that workers can."""

    def __init__(self, sweep: Sweep, sigma: np.ndarray) -> None:
        self.sweep, self.sigma = sweep, sigma

    def __call__(self, melt: Melt, model: Model, window: Window | None) -> Problem:
        s = self.sweep
        return sweep_problem(s.omega, s.storage, s.loss, self.sigma, melt, model, window)


def _problem_maker(sweep: Any, noise: float | None) -> tuple[Any, int, Any]:
    if isinstance(sweep, Sweep):
        weights = noise_of(sweep, noise)
        sigma = np.concatenate([weights.sigma_storage, weights.sigma_loss])
        return _SweepMaker(sweep, np.maximum(sigma, 1e-3)), 2 * len(sweep), weights
    return curve_maker(sweep, noise)


def _run_kernel(task: tuple[Any, ...]) -> Branch | MwdlinkError:
    make, melt, rouse, kernel, prior, smoothing, method, choose = task
    try:
        build = BranchBuilder(make, melt, rouse)
        if method == "smooth":
            return fit_branch(build, kernel, prior, smoothing)
        return method_branch(build, kernel, prior, method, choose, smoothing)
    except MwdlinkError as error:
        return error
    except np.linalg.LinAlgError:
        if smoothing is None:
            raise
        # so strong that the data's part drowns in the rounding of the smoothing's
        return InputError(
            f"with a smoothing of {smoothing:g} the equations cannot be solved.",
            remedy="Give a smaller one; what the evidence chooses is mostly 0.01 to 100.",
        )


def _run_members(job: tuple[Any, ...]) -> Members:
    branch, count, seed, scatter, method, choose = job
    if method == "smooth":
        return draw_members(branch, count, seed, scatter)
    return method_members(branch, count, seed, scatter, method, choose)


def _inflate(
    branches: list[Branch], allowed: list[bool], source: str
) -> tuple[list[Branch], float]:
    """Widen the noise when even the best kernel misses the data by more than it."""
    best = min(branches, key=lambda b: b.chi2)
    dof = max(best.problem.data.size - float(best.scan.freedom[best.scan.best]), 1.0)
    factor = best.fit.chi2 / dof
    if factor <= 1.5:
        return branches, 1.0
    scale = float(np.sqrt(factor))
    out = []
    for branch, ok in zip(branches, allowed, strict=True):
        if ok and branch.build is None:
            problem = replace(branch.problem, sigma=branch.problem.sigma * scale)
            found = scan(problem, branch.fit.u, branch.scan.smoothing)
            branch = replace(branch, problem=problem, scan=found)
        elif ok:
            problem = replace(branch.problem, sigma=branch.problem.sigma * scale)
            branch = replace(branch, problem=problem)
        out.append(branch)
    return out, scale


def _split(members: int, parts: int) -> list[int]:
    base, extra = divmod(members, parts)
    return [base + (1 if i < extra else 0) for i in range(parts)]
