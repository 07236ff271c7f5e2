"""The joint inference from start to finish: kernels, smoothing, and members that carry it all."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.gpc_error import CALIBRATION_SPREAD
from mwdlink.chains.melt import Melt
from mwdlink.inversion import joint, joint_fit
from mwdlink.inversion.joint import JointProblem, Priors
from mwdlink.inversion.joint_alone import AloneFit, fit_alone, smooth_curve
from mwdlink.inversion.joint_data import GpcRows, gpc_rows, supported_range
from mwdlink.inversion.joint_fit import JointFit, JointScan
from mwdlink.inversion.joint_response import sweep_response
from mwdlink.inversion.window import Window, find_window
from mwdlink.relaxation.mixing import Model, relaxation_times

SMOOTHING = np.geomspace(3.0, 1e-5, 9)
FREE = 1e-5
SPACING = 0.065
# exponent unless card or user says otherwise: centre and spread of the prior
EXPONENT_PRIOR = (2.0, 0.2)
LEAST_TIME_SPREAD = 0.1
# level of the moduli: gap and geometry of the rheometer, and the plateau modulus of the card
MODULUS_SPREAD = 0.03
BASELINE_SPREAD = 0.002
# kernels whose evidence is this many e-folds below the best are impossible; the others share the
# members by evidence to the power 1/TEMPER, as none of them is the truth
ADMISSIBLE = 10.0
TEMPER = 2.0
# kernels that were not asked for are only asked whether they would do: every other lambda
BESIDE = SMOOTHING[::2]
# they are heard from this share of the evidence on
HEARD = 0.01


@dataclass(frozen=True, eq=False)
class Setting:
    """Everything of the pair of data sets that does not depend on the kernel.

    Attributes
    ----------
    omega, storage, loss : ndarray of shape (n_w,)
        [rad/s], [Pa], [Pa]
    sigma : ndarray of shape (2 n_w,)
        Relative errors of G' over G''.
    melt : Melt
    gpc : GpcRows
    x : ndarray of shape (n,)
        log10 M of the nodes.
    priors : Priors
    rouse : bool
    windows : dict of str to Window
        What the sweep sees, by kernel.
    gpc_scale : float
        Factor the GPC's assumed errors were raised by, because its curve is rougher.
    """

    omega: np.ndarray
    storage: np.ndarray
    loss: np.ndarray
    sigma: np.ndarray
    melt: Melt
    gpc: GpcRows
    x: np.ndarray
    priors: Priors
    rouse: bool
    windows: dict[str, Window]
    gpc_scale: float = 1.0

    @property
    def nodes(self) -> np.ndarray:
        """Molar masses of the nodes [g/mol]."""
        return 10.0**self.x

    @property
    def exponents(self) -> np.ndarray:
        """Exponents the tables are made at."""
        centre, spread = (
            float(a[joint.EXPONENT]) for a in (self.priors.centre, self.priors.spread)
        )
        if spread <= joint.PINNED:
            return np.array([centre])
        return np.maximum(centre + spread * np.linspace(-2.5, 2.5, 5), 1.0 + 0.05 * np.arange(5))

    def problem(self, kernel: str) -> tuple[JointProblem, Window]:
        """The joint problem of one kernel."""
        model = Model(kernel, float(self.priors.centre[joint.EXPONENT]), self.rouse)
        window = self.windows[kernel]
        last = float(relaxation_times(self.nodes[-1:], self.melt, model)[0])
        window = replace(window, top_time=10.0 * last)
        response = sweep_response(
            self.omega, self.melt, kernel, self.nodes, window, self.exponents, self.rouse
        )
        data = np.log(np.concatenate([self.storage, self.loss]))
        return JointProblem(self.x, self.gpc, response, data, self.sigma, self.priors), window


def settle(
    distribution: Distribution,
    omega: np.ndarray,
    storage: np.ndarray,
    loss: np.ndarray,
    sigma: np.ndarray,
    melt: Melt,
    kernels: tuple[str, ...],
    *,
    exponent: tuple[float, float] = EXPONENT_PRIOR,
    trust_range: tuple[float, float] | None = None,
    rouse: bool = True,
    beside: tuple[str, ...] = (),
) -> Setting:
    """Nodes over the ranges of both instruments, rows of the GPC, priors.

    Parameters
    ----------
    exponent : (float, float)
        Centre and spread of the exponent's prior; a spread of 0 fixes it.
    beside : tuple of str
        Kernels that were not asked for but may be tried.
    """
    windows = {k: find_window(omega, melt, Model(k, exponent[0], rouse)) for k in kernels + beside}
    reach = max(float(windows[k].nodes[-1]) for k in kernels)
    low, high = supported_range(distribution)
    if trust_range is not None:
        low, high = max(low, trust_range[0]), min(high, trust_range[1])
    share = distribution.mass
    logs = np.log10(distribution.molar_mass)
    width = float(np.sqrt(max(share @ (logs - share @ logs) ** 2, 0.0)))
    spacing = float(np.clip(width / 4.0, 0.02, SPACING))
    first = np.log10(low) - 4 * spacing
    # far enough for the smooth continuation of any curve to have ended
    last = max(np.log10(reach), np.log10(high) + 1.0)
    count = int(np.ceil((last - first) / spacing)) + 1
    if count > 140:
        spacing, count = (last - first) / 139, 140
    x = first + spacing * np.arange(count)
    rows = gpc_rows(distribution, trust_range, spacing)
    # a curve rougher than its assumed errors even for the most willing smooth one has larger ones
    rough = np.sqrt(fit_alone(x, rows, FREE).chi2 / rows.size)
    scale = float(rough) if rough > 1.0 else 1.0
    rows = replace(rows, sigma=rows.sigma * scale)
    plateau = MODULUS_SPREAD
    if melt.plateau_range is not None:
        a, b = melt.plateau_range
        plateau = max(plateau, 0.25 * float(np.log(b / a)))
    centre = np.array([0.0, exponent[0], 0.0, 0.0, 0.0])
    spread = np.array(
        [
            max(melt.scatter_decades * np.log(10.0), LEAST_TIME_SPREAD),
            max(exponent[1], joint.PINNED),
            CALIBRATION_SPREAD[distribution.calibration],
            plateau,
            BASELINE_SPREAD,
        ]
    )
    priors = Priors(centre, spread)
    return Setting(omega, storage, loss, sigma, melt, rows, x, priors, rouse, windows, scale)


@dataclass(frozen=True, eq=False)
class KernelScan:
    """One kernel's fits and its standing among the others.

    Attributes
    ----------
    kernel : str
    free, smooth : JointScan
        The curve free beyond the GPC, and only its smooth continuation there.
    window : Window
    share : float
        Share of the members.
    """

    kernel: str
    free: JointScan
    smooth: JointScan
    window: Window
    share: float = 0.0

    @property
    def tail_odds(self) -> float:
        """Probability of a tail of its own against a smooth continuation, both equal before."""
        return float(1.0 / (1.0 + np.exp(np.clip(self.smooth.total - self.free.total, -700, 700))))

    @property
    def total(self) -> float:
        """ln of the evidence, over both."""
        return float(np.logaddexp(self.free.total, self.smooth.total) - np.log(2.0))

    @property
    def best(self) -> JointFit:
        """The fit of highest evidence."""
        return (self.free if self.tail_odds > 0.5 else self.smooth).best


@dataclass(frozen=True, eq=False)
class Joint:
    """The joint inference.

    Attributes
    ----------
    setting : Setting
    alone : AloneFit
        The GPC's own smooth curve and its continuation.
    kernels : tuple of KernelScan
        The best first.
    w : ndarray of shape (m, n + 1)
        Weights of nodes and lump of each member.
    alone_w : ndarray of shape (m, n)
        The smooth continuation of each member's GPC curve.
    nuisance : ndarray of shape (m, 5)
    kernel : ndarray of int of shape (m,)
        Which kernel each member was drawn with.
    smoothing : ndarray of shape (m,)
        lambda of each member.
    tail_free : ndarray of bool of shape (m,)
        Whether the member's curve was free beyond the GPC.
    unsettled : int
        Members that did not converge and were left out.
    beside : Joint or None
        The same with the kernels that were not asked for, where there are any.
    doubt : float
        Share of these among all kernels: evidence for a kernel other than those asked for.
    """

    setting: Setting
    alone: AloneFit
    kernels: tuple[KernelScan, ...]
    w: np.ndarray
    alone_w: np.ndarray
    nuisance: np.ndarray
    kernel: np.ndarray
    smoothing: np.ndarray
    tail_free: np.ndarray
    unsettled: int = 0
    beside: Joint | None = None
    doubt: float = 0.0

    @property
    def best(self) -> JointFit:
        """The fit of highest evidence."""
        return self.kernels[0].best


def infer(
    setting: Setting,
    kernels: tuple[str, ...],
    members: int,
    seed: int,
    beside: tuple[str, ...] = (),
) -> Joint:
    """Fit with every kernel, weigh lambda by evidence, and draw members.

    Members are drawn by perturbing all data and all priors by their own noise and fitting again
    (randomise, then optimise); each has its own child seed.

    Parameters
    ----------
    beside : tuple of str
        Kernels that were not asked for. They are tried all the same: where the data speak for one
        of them, the answer with the kernels asked for knows less than its members say.
    """
    alone = smooth_curve(setting.x, setting.gpc)
    found = _scans(setting, alone, kernels, SMOOTHING, np.inf)
    others: list[KernelScan] = []
    if beside:
        rival = min(k.best.objective for k in found)
        others = _scans(setting, alone, beside, BESIDE, rival)
    own = _draw(setting, alone, _ranked(found), members, seed)
    if not others:
        return own
    everything = _ranked(found + others)
    doubt = sum(k.share for k in everything if k.kernel in beside)
    drawn = members if doubt > HEARD else 0
    second = _draw(setting, alone, _ranked(others), drawn, seed + 1)
    return replace(own, beside=second, doubt=float(doubt))


def _scans(
    setting: Setting,
    alone: AloneFit,
    kernels: tuple[str, ...],
    values: np.ndarray,
    rival: float,
) -> list[KernelScan]:
    """Fits of each kernel, with the curve free beyond the GPC and smooth there."""
    found = []
    for kernel in kernels:
        problem, window = setting.problem(kernel)
        free = joint_fit.scan(problem, joint_fit.start(problem, alone.u), values, rival)
        rival = min(rival, free.best.objective)
        stiff = problem.with_priors(replace(problem.priors, tail_free=False))
        smooth = joint_fit.scan(stiff, joint_fit.start(stiff, alone.u), values, rival)
        rival = min(rival, smooth.best.objective)
        found.append(KernelScan(kernel, free, smooth, window))
    return found


def _ranked(found: list[KernelScan]) -> tuple[KernelScan, ...]:
    """The best first, each with its share of the evidence among these."""
    order = sorted(found, key=lambda k: -k.total)
    gap = np.array([k.total - order[0].total for k in order])
    weight = np.where(gap > -ADMISSIBLE, np.exp(gap / TEMPER), 0.0)
    share = weight / weight.sum()
    return tuple(replace(k, share=float(v)) for k, v in zip(order, share, strict=True))


def _draw(
    setting: Setting, alone: AloneFit, ranked: tuple[KernelScan, ...], members: int, seed: int
) -> Joint:
    seeds = np.random.SeedSequence(seed).spawn(members)
    # as many members of each kernel as its share, the odd ones to the best
    edges = np.cumsum([k.share for k in ranked])
    fits, pushes, kernel, smoothing, tail = [], [], [], [], []
    for i, child in enumerate(seeds):
        rng = np.random.default_rng(child)
        j = min(int(np.searchsorted(edges, (i + 0.5) / members)), len(ranked) - 1)
        free = bool(rng.random() < ranked[j].tail_odds)
        chosen = ranked[j].free if free else ranked[j].smooth
        k = int(rng.choice(len(chosen.fits), p=chosen.weights))
        noise = joint_fit.draw_noise(chosen.problem, rng)
        first = chosen.fits[k]
        fit = joint_fit.minimise(
            chosen.problem,
            first.z,
            first.smoothing,
            noise,
            tolerance=0.05,
            known=first.residuals,
        )
        own = rng.standard_normal(alone.prior_rows)
        if fit.converged:
            fits.append(fit)
            # the same error of the GPC pushes its own curve
            pushes.append((noise.data[chosen.problem.data.size : -1], own))
            kernel.append(j)
            smoothing.append(first.smoothing)
            tail.append(free)
    n = setting.x.size
    return Joint(
        setting,
        alone,
        ranked,
        np.array([f.w for f in fits]).reshape(-1, n + 1),
        alone.drawn(pushes),
        np.array([f.nuisance for f in fits]).reshape(-1, len(joint.NUISANCE)),
        np.array(kernel, dtype=int),
        np.array(smoothing, dtype=float),
        np.array(tail, dtype=bool),
        members - len(fits),
    )


def weight_beyond(x: np.ndarray, w: np.ndarray, mass: float) -> np.ndarray:
    """Weight fraction beyond M, cells counted in part; lumps count whole.

    Parameters
    ----------
    x : ndarray of shape (n,)
        log10 M of the nodes.
    w : ndarray of shape (..., n) or (..., n + 1)
        Weights of the nodes, and of the lump above where there is one.
    mass : float
        [g/mol]
    """
    h = float(x[1] - x[0])
    share = np.clip((x + h / 2 - np.log10(mass)) / h, 0.0, 1.0)
    if w.shape[-1] == x.size + 1:
        share = np.append(share, 1.0)
    return w @ share
