"""`find_tail`: is there a high-molar-mass tail that the GPC did not see?"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import Polymer, builtin
from mwdlink.decisions import tail_cautions, tail_words
from mwdlink.decisions.gpc_scale import on_own_scale
from mwdlink.decisions.tail_interval import (
    LEAST_SAMPLES,
    WORTH,
    heard,
    stretch,
    uncertain,
    unresolved,
    widened,
)
from mwdlink.decisions.tail_limit import detection_limit
from mwdlink.decisions.tail_result import Tail
from mwdlink.decisions.tail_tables import budget, distribution_table, fit_table, gpc_table
from mwdlink.errors import Caution, InputError, NotConverged, merge_cautions
from mwdlink.inversion import joint
from mwdlink.inversion.invert import exponent_prior
from mwdlink.inversion.joint_ensemble import HEARD, Joint, infer, settle, weight_beyond
from mwdlink.inversion.joint_explain import weigh
from mwdlink.inversion.window import SUPPORT
from mwdlink.measurement.noise import noise_of
from mwdlink.measurement.sweep import Sweep
from mwdlink.quantity import Uncertain
from mwdlink.relaxation.kernels import KERNEL_NAMES, available_kernels, get_kernel
from mwdlink.relaxation.mixing import Model, relaxation_times

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
        Default all the card has constants for; those the data allow share the members. The others
        are tried all the same, and intervals reach as far as the data speak for them.
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
    beside = tuple(k for k in available_kernels(melt) if k not in names)
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
        beside=beside,
    )
    found = infer(setting, names, members, seed, beside)
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
    second = heard(found)
    other_part = other_more = None
    if second is not None:
        other_part = weight_beyond(x, second.w, beyond)
        other_more = other_part - weight_beyond(x, second.alone_w, beyond)
    status = "resolved" if beyond <= reach and not unresolved(found) else "assumed"

    def amount(own: np.ndarray, other: np.ndarray | None, least: float | None) -> Uncertain:
        shares = budget(found, own, nuisance)
        u = uncertain(own, level, status, other=other, doubt=found.doubt, budget=shares)
        return widened(u, found, least)

    fraction, excess = amount(part, other_part, 0.0), amount(more, other_more, None)
    limit = detection_limit(leader, found.alone, beyond, level, WORTH, stretch(found))

    # -- what went with it ----------------------------------------------------------------------
    def factor(index: int) -> Uncertain:
        other = None if second is None else np.exp(second.nuisance[:, index])
        return uncertain(np.exp(nuisance[:, index]), level, other=other, doubt=found.doubt)

    other = None if second is None else second.nuisance[:, joint.EXPONENT]
    exponent = uncertain(nuisance[:, joint.EXPONENT], level, other=other, doubt=found.doubt)
    explanations = weigh(leader)
    averages = _averages(found, w, gpc, reach, window[1], level)
    needed = _frequency_for(2.0 * beyond, found)
    is_found = excess.low is not None and excess.low > 0
    cautions = merge_cautions(
        sweep.warnings,
        gpc.warnings,
        setting.melt.warnings,
        notes,
        tail_cautions.cautions(found, beyond, window[1], reach, noise_source),
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
        kernels=_kernel_rows(found, beyond, level),
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
    found: Joint, w: np.ndarray, gpc: Distribution, reach: float, high: float, level: float
) -> dict[str, Uncertain]:
    # beyond its reach the sweep knows that chains are there, not how long: counted at the reach,
    # they give lower bounds
    mass = np.minimum(found.setting.nodes, max(reach, gpc.edges[-1]))
    mass = np.append(mass, mass[-1])

    def moments(w: np.ndarray) -> dict[str, np.ndarray]:
        number, first, second = 1.0 / (w @ (1.0 / mass)), w @ mass, w @ mass**2
        return {
            "Mn_g_per_mol": number,
            "Mw_g_per_mol": first,
            "Mz_g_per_mol": second / first,
            "dispersity": first / number,
        }

    beyond = mass > high
    share_w = float(np.median((w[:, beyond] @ mass[beyond]) / (w @ mass)))
    share_z = float(np.median((w[:, beyond] @ mass[beyond] ** 2) / (w @ mass**2)))
    heavy = "lower_bound" if share_w > BOUND else "resolved"
    status = {
        "Mn_g_per_mol": "upper_bound"
        if any(c.code == "cut_at_low_end" for c in gpc.warnings)
        else "resolved",
        "Mw_g_per_mol": heavy,
        "Mz_g_per_mol": "lower_bound" if share_z > BOUND else "resolved",
        "dispersity": heavy,
    }
    second = heard(found)
    others = {} if second is None else moments(second.w)
    return {
        name: uncertain(own, level, status[name], other=others.get(name), doubt=found.doubt)
        for name, own in moments(w).items()
    }


def _frequency_for(mass: float, found: Joint) -> float | None:
    """Frequency down to which a sweep follows chains of a molar mass [rad/s]."""
    setting, kernel = found.setting, found.kernels[0].kernel
    model = Model(kernel, float(setting.priors.centre[joint.EXPONENT]), setting.rouse)
    tau = float(relaxation_times(np.array([mass]), setting.melt, model)[0])
    return 1.0 / (tau * SUPPORT) if np.isfinite(tau) and tau > 0 else None


def _kernel_rows(found: Joint, beyond: float, level: float) -> tuple[dict[str, Any], ...]:
    """What each kernel makes of the pair, those asked for first."""
    rows = []
    for one, asked in ((found, True), (found.beside, False)):
        if one is None:
            continue
        part = weight_beyond(one.setting.x, one.w, beyond)
        for i, k in enumerate(one.kernels):
            own = part[one.kernel == i]
            if own.size < LEAST_SAMPLES:
                own = np.array([float(weight_beyond(one.setting.x, k.best.w, beyond))])
            row = {
                "kernel": k.kernel,
                "chi2_per_point": k.best.chi2_sweep / k.free.problem.data.size,
                "admissible": k.share > 0 if asked else k.share * found.doubt > HEARD,
                "share": k.share if asked else 0.0,
                "fraction": uncertain(own, level),
                "asked": asked,
            }
            rows.append(row)
    return tuple(rows)
