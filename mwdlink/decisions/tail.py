"""`find_tail`: is there a high-molar-mass tail that the GPC did not see?"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from scipy.stats import norm

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import Polymer, builtin
from mwdlink.decisions import tail_words
from mwdlink.decisions.gpc_scale import on_own_scale
from mwdlink.decisions.tail_result import Tail
from mwdlink.decisions.tail_tables import budget, distribution_table, fit_table, gpc_table
from mwdlink.errors import Caution, InputError, NotConverged, merge_cautions
from mwdlink.inversion import joint
from mwdlink.inversion.invert import exponent_prior
from mwdlink.inversion.joint_ensemble import Joint, infer, settle, weight_beyond
from mwdlink.inversion.joint_explain import weigh
from mwdlink.inversion.joint_limit import detection_limit
from mwdlink.inversion.window import SUPPORT
from mwdlink.measurement.noise import chi2_in_words, noise_of
from mwdlink.measurement.sweep import Sweep
from mwdlink.quantity import Uncertain
from mwdlink.relaxation.kernels import KERNEL_NAMES, available_kernels, get_kernel
from mwdlink.relaxation.mixing import Model, relaxation_times

# a nuisance unknown this many prior standard deviations out strains the model
STRAINED = 2.5
# sum of their squares up to which nothing is stretched
EXPECTED_STRAIN = 2.0
# weight fraction that kernel, mixing rule and continuation are worth at best, one standard
# deviation (assumed): a hundredth of a per cent is not told from nothing
WORTH = 2e-4
# this much of a moment beyond the window makes the average a bound
BOUND = 0.1


def find_tail(
    distribution: Distribution,
    sweep: Sweep,
    polymer: Polymer | str,
    *,
    beyond: float | None = None,
    kernels: Sequence[str] | None = None,
    exponent: float | tuple[float, float] | None = None,
    rouse: bool = True,
    members: int = 200,
    seed: int = 0,
    trust_range: tuple[float, float] | None = None,
    temperature_C: float | None = None,
    noise: float | None = None,
    level: float = 0.9,
) -> Tail:
    """Weight beyond a molar mass from GPC and sweep as one inference.

    Parameters
    ----------
    distribution : Distribution
        The GPC's curve; its `calibration` says what its molar masses are.
    sweep : Sweep
        Of the same sample.
    polymer : Polymer or str
        A card, or the name of a built-in one.
    beyond : float, optional
        Where the tail begins [g/mol]; default the last M that the GPC supports.
    kernels : sequence of str, optional
        Default all the card has constants for; those the data allow share the members.
    exponent : float, (low, high) or None
        Mixing exponent: a number fixes it, a pair is its 90 % range, None the card's or 2.0 +- 0.2.
    rouse : bool
    members : int
        Members behind the intervals; 0 gives values without intervals.
    seed : int
    trust_range : (float, float), optional
        Molar masses the GPC may be trusted over [g/mol]; default where it has signal. Beyond its
        end the GPC says nothing, not even that there is nothing.
    temperature_C : float, optional
        Of the sweep, where it does not carry its own [C].
    noise : float, optional
        Relative noise of the moduli; default from the sweep's columns, else estimated.
    level : float
        Probability of the intervals.

    Returns
    -------
    Tail

    Raises
    ------
    InputError
        If the data cannot be used.
    NotConverged
        If no kernel's fit converged.

    Notes
    -----
    The default distribution of the members mixes the two possibilities, a tail of its own and
    nothing but the GPC's smooth continuation, by their evidence; an excess is found when its
    interval stays above zero.
    """
    card = builtin(polymer) if isinstance(polymer, str) else polymer
    _check(sweep, beyond, members, trust_range, level)
    temperature, notes = _temperature(sweep, card, temperature_C)
    melt = card.melt(temperature)
    names = _kernels(kernels, melt)
    prior, _ = exponent_prior(exponent, melt)
    gpc, scale_notes = on_own_scale(distribution, card)
    weights = noise_of(sweep, noise)
    sigma = np.concatenate([weights.sigma_storage, weights.sigma_loss])
    setting = settle(
        gpc,
        sweep.omega,
        sweep.storage,
        sweep.loss,
        sigma,
        melt,
        names,
        exponent=(prior.mean, prior.spread),
        trust_range=trust_range,
        rouse=rouse,
    )
    found = infer(setting, names, members, seed)
    if not found.best.converged:
        raise NotConverged(
            "no fit of GPC and sweep together converged: check that both are of one sample and "
            "the frequency unit, temperature and polymer are right."
        )
    limit_mass = setting.gpc.high if beyond is None else float(beyond)
    return _assemble(found, gpc, sweep, limit_mass, level, weights.source, card, rouse,
                     (*notes, *scale_notes))  # fmt: skip


def _check(
    sweep: Sweep,
    beyond: float | None,
    members: int,
    trust_range: tuple[float, float] | None,
    level: float,
) -> None:
    if len(sweep) < 5:
        raise InputError(
            f"the sweep has {len(sweep)} points.", path=sweep.path, remedy="At least 5 are needed."
        )
    if beyond is not None and not (np.isfinite(beyond) and beyond > 0):
        raise InputError("the molar mass a tail begins at must be positive.")
    if members < 0 or not 0 < level < 1:
        raise InputError("members must be >= 0 and the level between 0 and 1.")
    if trust_range is not None and not 0 < trust_range[0] < trust_range[1]:
        raise InputError(
            "the range the GPC is trusted over must rise and be positive.",
            remedy="Give it as low and high molar mass [g/mol].",
        )


def _temperature(
    sweep: Sweep, card: Polymer, asked: float | None
) -> tuple[float, tuple[Caution, ...]]:
    own = sweep.temperature_C if sweep.temperature_C is not None else asked
    if own is not None:
        return float(own), ()
    return card.temperature_C, (
        Caution(
            "temperature_assumed",
            f"The sweep states no temperature; the card's own, {card.temperature_C:g} C, was "
            "taken. State it with --temperature.",
        ),
    )


def _kernels(asked: Sequence[str] | None, melt: Any) -> tuple[str, ...]:
    if asked is None:
        return available_kernels(melt)
    for name in asked:
        get_kernel(name, melt)
    return tuple(k for k in KERNEL_NAMES if k in set(asked))


def _uncertain(
    samples: np.ndarray,
    level: float,
    status: str = "resolved",
    single: float | None = None,
    **more: Any,
) -> Uncertain:
    if samples.size < 5:
        return Uncertain(single, None, None, level, status)
    return Uncertain.from_samples(samples, level=level, status=status, **more)


def _stretch(found: Joint) -> float:
    """Factor on the intervals of a pair that agrees only by stretching what was thought known.

    The squares of the nuisance unknowns' distances from their priors add up to about 1 to 3 where
    card, kernel and data belong together; a kernel that is not the melt's makes 20 and more.
    """
    priors = found.setting.priors
    z = (found.best.nuisance - priors.centre) / priors.spread
    return float(np.sqrt(max(1.0, float(z @ z) / EXPECTED_STRAIN)))


def _widened(u: Uncertain, stretch: float, least: float | None = None) -> Uncertain:
    """The interval stretched, with what no model of this kind is better than in quadrature."""
    if u.value is None or u.low is None or u.high is None:
        return u
    more = float(norm.ppf((1 + u.level) / 2)) * WORTH
    low = u.value - float(np.hypot(stretch * (u.value - u.low), more))
    high = u.value + float(np.hypot(stretch * (u.high - u.value), more))
    return replace(u, low=low if least is None else max(low, least), high=high)


def _assemble(
    found: Joint,
    gpc: Distribution,
    sweep: Sweep,
    beyond: float,
    level: float,
    noise_source: str,
    card: Polymer,
    rouse: bool,
    notes: tuple[Caution, ...],
) -> Tail:
    setting, best, leader = found.setting, found.best, found.kernels[0]
    x, nodes = setting.x, setting.nodes
    w = found.w if found.w.shape[0] else best.w[None, :]
    alone = found.alone_w if found.alone_w.shape[0] else found.alone.w[None, :]
    nuisance = found.nuisance if found.nuisance.shape[0] else best.nuisance[None, :]
    window = (
        min(k.window.low for k in found.kernels if k.share > 0),
        min(k.window.high for k in found.kernels if k.share > 0),
    )
    reach = max(float(k.window.nodes[-1]) for k in found.kernels if k.share > 0)

    # -- the tail -------------------------------------------------------------------------------
    part = weight_beyond(x, w, beyond)
    more = part - weight_beyond(x, alone, beyond)
    status = "resolved" if beyond <= reach else "assumed"
    shares = budget(found, part, nuisance)
    stretch = _stretch(found)
    fraction = _uncertain(part, level, status, float(part[0]), budget=shares)
    fraction = _widened(fraction, stretch, 0.0)
    shares = budget(found, more, nuisance)
    excess = _widened(_uncertain(more, level, status, float(more[0]), budget=shares), stretch)
    limit = detection_limit(leader.smooth.problem, leader.smooth.best, beyond)

    # -- what went with it ----------------------------------------------------------------------
    def factor(index: int) -> Uncertain:
        values = np.exp(nuisance[:, index])
        return _uncertain(values, level, single=float(values[0]))

    exponents = nuisance[:, joint.EXPONENT]
    exponent = _uncertain(exponents, level, single=float(exponents[0]))
    explanations = weigh(leader)
    averages = _averages(x, w, gpc, reach, window[1], level)
    needed = _frequency_for(2.0 * beyond, found)
    is_found = excess.low is not None and excess.low > 0
    cautions = merge_cautions(
        sweep.warnings,
        gpc.warnings,
        setting.melt.warnings,
        notes,
        _cautions(found, beyond, window[1], reach, noise_source),
    )
    return Tail(
        beyond=beyond,
        fraction=fraction,
        excess=excess,
        detection_limit=limit,
        time_law_factor=factor(joint.TIME),
        exponent=exponent,
        gpc_factor=factor(joint.CALIBRATION),
        modulus_factor=factor(joint.MODULUS),
        explanations=explanations,
        averages=averages,
        advice=tail_words.advice(
            is_found, explanations, window[1], beyond, float(sweep.omega[0]), needed
        ),
        window=window,
        gpc_range=(setting.gpc.low, setting.gpc.high),
        kernels=tuple(
            _kernel_row(found, i, beyond, part, level) for i in range(len(found.kernels))
        ),
        fit={
            "chi2_per_point": best.chi2_sweep / leader.free.problem.data.size,
            "points": int(leader.free.problem.data.size),
            "gpc_chi2_per_row": best.chi2_gpc / setting.gpc.size,
            "gpc_rows": setting.gpc.size,
            "smoothing": best.smoothing,
            "tail_odds": leader.tail_odds,
            "converged": best.converged,
            "members": int(found.w.shape[0]),
            "members_lost": found.unsettled,
        },
        model={
            "kernels": [k.kernel for k in found.kernels if k.share > 0],
            "exponent": exponent,
            "rouse": rouse,
        },
        distribution_table=distribution_table(x, nodes, w, alone, best.w, level),
        gpc_table=gpc_table(gpc, setting.gpc.low, setting.gpc.high),
        fit_table=fit_table(found, sweep),
        warnings=cautions,
    )


def _averages(
    x: np.ndarray, w: np.ndarray, gpc: Distribution, reach: float, high: float, level: float
) -> dict[str, Uncertain]:
    # beyond its reach the sweep knows that chains are there, not how long: counted at the reach,
    # they give lower bounds
    mass = np.minimum(10.0**x, max(reach, gpc.edges[-1]))
    mass = np.append(mass, mass[-1])
    first, second = w @ mass, w @ mass**2
    beyond = mass > high
    number = 1.0 / (w @ (1.0 / mass))
    share_w = float(np.median((w[:, beyond] @ mass[beyond]) / first))
    share_z = float(np.median((w[:, beyond] @ mass[beyond] ** 2) / second))
    cut = any(c.code == "cut_at_low_end" for c in gpc.warnings)

    def status(share: float) -> str:
        return "lower_bound" if share > BOUND else "resolved"

    return {
        "Mn_g_per_mol": _uncertain(
            number, level, "upper_bound" if cut else "resolved", float(number[0])
        ),
        "Mw_g_per_mol": _uncertain(first, level, status(share_w), float(first[0])),
        "Mz_g_per_mol": _uncertain(
            second / first, level, status(share_z), float((second / first)[0])
        ),
        "dispersity": _uncertain(
            first / number, level, status(share_w), float((first / number)[0])
        ),
    }


def _frequency_for(mass: float, found: Joint) -> float | None:
    """Frequency down to which a sweep follows chains of a molar mass [rad/s]."""
    setting, kernel = found.setting, found.kernels[0].kernel
    model = Model(kernel, float(setting.priors.centre[joint.EXPONENT]), setting.rouse)
    tau = float(relaxation_times(np.array([mass]), setting.melt, model)[0])
    return 1.0 / (tau * SUPPORT) if np.isfinite(tau) and tau > 0 else None


def _kernel_row(
    found: Joint, i: int, beyond: float, part: np.ndarray, level: float
) -> dict[str, Any]:
    k = found.kernels[i]
    own = part[found.kernel == i] if found.kernel.size else part[:0]
    single = float(weight_beyond(found.setting.x, k.best.w, beyond))
    return {
        "kernel": k.kernel,
        "chi2_per_point": k.best.chi2_sweep / k.free.problem.data.size,
        "admissible": k.share > 0,
        "share": k.share,
        "fraction": _uncertain(own, level, single=single),
    }


def _cautions(
    found: Joint, beyond: float, high: float, reach: float, noise_source: str
) -> list[Caution]:
    setting, best, leader = found.setting, found.best, found.kernels[0]
    out = []
    if beyond > reach:
        out.append(
            Caution(
                "beyond_the_sweep",
                f"The sweep does not reach {beyond:.3g} g/mol (it feels chains up to {reach:.3g}): "
                "the weight beyond is assumed, not measured.",
            )
        )
    elif beyond > high:
        out.append(
            Caution(
                "sweep_ends_early",
                f"The sweep follows chains up to {high:.3g} g/mol; longer ones show only as stress "
                "that has not relaxed yet. Lower frequencies would narrow the answer.",
            )
        )
    if setting.gpc.high < beyond * (1 - 1e-6) and setting.gpc.high < 0.8 * beyond:
        out.append(
            Caution(
                "gap_between",
                f"The GPC is used up to {setting.gpc.high:.3g} g/mol only, below where the tail "
                "begins: the weight between rests on the sweep alone.",
            )
        )
    strained = [
        (name, z)
        for name, z in zip(
            joint.NUISANCE,
            (best.nuisance - setting.priors.centre) / setting.priors.spread,
            strict=True,
        )
        if abs(z) > STRAINED
    ]
    if strained:
        words = ", ".join(f"{name} by {abs(z):.1f}" for name, z in strained)
        out.append(
            Caution(
                "priors_strained",
                f"The pair agrees only by stretching what was thought known ({words} standard "
                "deviations): the kernel, the card or the pairing of the samples is in doubt. The "
                "intervals were widened for it. Let all kernels take part.",
            )
        )
    points = leader.free.problem.data.size
    words = chi2_in_words(best.chi2_sweep / points, points, noise_source)
    if best.chi2_sweep / points > 1.5 and words:
        out.append(Caution("poor_fit", words))
    if found.setting.gpc_scale > 1.0:
        out.append(
            Caution(
                "gpc_rough",
                f"The GPC curve is {found.setting.gpc_scale:.1f} times rougher than the error "
                "assumed for it (3 % of itself and 0.3 % of its peak); the error was raised.",
            )
        )
    if found.unsettled > 0.1 * max(found.w.shape[0] + found.unsettled, 1):
        out.append(
            Caution(
                "members_lost",
                f"{found.unsettled} members did not converge and were left out.",
            )
        )
    out.append(
        Caution(
            "column_broadening",
            "Broadening in the GPC columns is not corrected: for narrow distributions it widens "
            "the curve and its continuation.",
        )
    )
    return out
