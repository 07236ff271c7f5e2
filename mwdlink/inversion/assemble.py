"""From branches and members to the numbers, statuses and tables of an `Inversion`."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.chains.polymer import Polymer
from mwdlink.errors import Caution, merge_cautions
from mwdlink.inversion import closed_form
from mwdlink.inversion.advice import advise
from mwdlink.inversion.ensemble import (
    Branch,
    ExponentPrior,
    Members,
    prior_weights,
    unpulled,
)
from mwdlink.inversion.inversion_result import Inversion
from mwdlink.inversion.peaks import find_peaks
from mwdlink.inversion.pool import Pool, make_pool
from mwdlink.inversion.quantities import Cells
from mwdlink.inversion.result_tables import (
    bound_cautions,
    fit_cautions,
    fit_table,
    kernel_rows,
    member_table,
    peak_row,
    smoothing_table,
    sweep_cautions,
)
from mwdlink.inversion.statuses import average_statuses, prior_dominates, zero_excluded
from mwdlink.measurement.sweep import Sweep
from mwdlink.quantity import Uncertain, quantiles, readonly
from mwdlink.relaxation.kernels import DEFAULT_KERNEL

PRIOR_DRAWS = 200


def assemble(
    sweep: Any,
    polymer: Polymer,
    melt: Melt,
    branches: Sequence[Branch],
    allowed: Sequence[bool],
    used: Sequence[Branch],
    drawn: Sequence[Members],
    *,
    above: tuple[float, ...],
    seed: int,
    prior_seed: np.random.SeedSequence,
    fixed_exponent: bool,
    exponent_prior: ExponentPrior,
    rouse: bool,
    noise: Mapping[str, Any],
    method: str,
    choose: str,
    want: Mapping[str, float] | None,
    level: float,
    notes: tuple[Caution, ...],
) -> Inversion:
    """All numbers of the result. Central values are medians of the ensemble, else the fit's.

    `used` are the branches the members were drawn from: those allowed, and their variants.
    """
    centre = _preferred(used)
    pool = make_pool(used, drawn)
    nominal = [b for b in used if b.plateau_factor == 1.0]
    low = max(b.problem.window.low for b in nominal)
    high = min(b.problem.window.high for b in nominal)
    single = Cells.make(centre.problem.window.edges, centre.fit.w)
    # what no data would say is held against the members; without any there is no need of it
    draws = PRIOR_DRAWS if pool is not None else 1
    prior = Cells.make(centre.problem.window.edges, prior_weights(centre, draws, prior_seed))
    averages = _averages(single, pool, prior, low, high, level)
    if pool is not None:
        key = "Mw_within_window_g_per_mol"
        averages[key] = _longer(averages[key], _pull(used, pool, low, high))
    outside = {
        "above": _fraction(centre, single, pool, prior, high, level),
        "below": _below(single, pool, prior, low, level),
    }
    tops = tuple(
        (m, _asked(centre, single, pool, prior, m, low, high, level, outside["above"]))
        for m in above
    )
    grid, density, band, sampled = _curve(used, centre, pool, level)
    exponent = _exponent(used, pool, fixed_exponent, exponent_prior, level)
    check, check_notes = _cross_check(sweep, centre, averages, noise, outside["above"])
    found = find_peaks(
        grid,
        sampled,
        density,
        centre.problem.window,
        level=level,
        groups=None if pool is None else pool.kernel,
        above_members=None if pool is None else pool.gather(lambda c: c.w[:, -1]),
        above_central=float(centre.fit.w[-1]),
    )
    notes = merge_cautions(
        notes, fit_cautions(centre, method), check_notes, sweep_cautions(sweep, melt)
    )
    notes = notes + bound_cautions(averages, outside)
    advice = _advice(centre, sweep, polymer, want, averages)
    return Inversion(
        molar_mass=readonly(grid),
        density=readonly(density),
        density_low=None if band is None else readonly(band[0]),
        density_high=None if band is None else readonly(band[1]),
        distribution=Distribution(
            centre.problem.window.nodes,
            np.maximum(centre.fit.w[:-2], 0.0),
            centre.problem.window.edges,
            label=sweep.label,
            calibration="absolute",
        ),
        averages=averages,
        window=(low, high),
        outside=outside,
        above=tops,
        fit={
            "chi2_per_point": centre.chi2_per_point,
            "points": int(centre.problem.data.size),
            "smoothing": float(centre.scan.smoothing[centre.scan.best]),
            "method": method,
            "kernel": centre.kernel,
            "converged": bool(centre.fit.converged),
            "members": 0 if pool is None else int(pool.kernel.size),
        },
        fit_table=fit_table(sweep, centre),
        smoothing_table=smoothing_table(centre),
        kernels=kernel_rows(branches, allowed, low, high, pool, used),
        model={
            "kernels": [b.kernel for b, ok in zip(branches, allowed, strict=True) if ok],
            "exponent": centre.model.exponent,
            "exponent_spread": centre.exponent_spread,
            "rouse": rouse,
        },
        polymer=polymer.to_dict(),
        seed=seed,
        noise=noise,
        exponent=exponent,
        peaks=tuple(peak_row(p) for p in found),
        cross_check=None if check is None else check.to_dict(),
        advice=advice,
        members=member_table(pool, used, low, high),
        time_law_scatter_decades=melt.scatter_decades,
        warnings=notes,
    )


def _preferred(used: Sequence[Branch]) -> Branch:
    """The default kernel where the data allow it, else the likeliest."""
    nominal = [b for b in used if b.plateau_factor == 1.0]
    for b in nominal:
        if b.kernel == DEFAULT_KERNEL:
            return b
    return max(nominal, key=lambda b: b.scan.total)


def _uncertain(
    value: float, samples: np.ndarray | None, level: float, status: str, pool: Pool | None
) -> Uncertain:
    if samples is None or pool is None:
        return Uncertain(float(value), None, None, level, status)
    return Uncertain.from_samples(samples, level=level, status=status, budget=pool.shares(samples))


def _averages(
    single: Cells, pool: Pool | None, prior: Cells, low: float, high: float, level: float
) -> dict[str, Uncertain]:
    central = single.averages()
    guess = prior.averages()
    if pool is None:
        status = average_statuses(single, central, single.edges[:, -1])
        samples: dict[str, np.ndarray | None] = dict.fromkeys(central)
    else:
        parts = [c.averages() for c in pool.cells]
        joined = {k: np.concatenate([p[k] for p in parts]) for k in central}
        w = np.concatenate([c.w[:, -2:] for c in pool.cells])
        top = np.concatenate([c.edges[:, -1] for c in pool.cells])
        status = average_statuses(Cells(np.empty((0, 0)), w), joined, top)
        samples = dict(joined)
        for k in ("Mw", "Mz"):
            if status[k] == "resolved" and prior_dominates(joined[k], guess[k]):
                status[k] = "assumed"
    names = {"Mn": "Mn_g_per_mol", "Mw": "Mw_g_per_mol", "Mz": "Mz_g_per_mol"}
    out = {
        names.get(k, k): _uncertain(float(central[k][0]), samples[k], level, status[k], pool)
        for k in ("Mn", "Mw", "Mz", "dispersity")
    }
    inside = None if pool is None else pool.gather(lambda c: c.mean_within(low, high))
    state = "resolved"
    if inside is not None and prior_dominates(inside, prior.mean_within(low, high)):
        state = "assumed"
    value = float(single.mean_within(low, high)[0])
    out["Mw_within_window_g_per_mol"] = _uncertain(value, inside, level, state, pool)
    return out


def _pull(used: Sequence[Branch], pool: Pool, low: float, high: float) -> float:
    """What smoothing takes from Mw within the window, to first order, mean over members [g/mol]."""
    counts = np.bincount(pool.branch, minlength=len(used))
    total = 0.0
    for branch, count in zip(used, counts, strict=True):
        if branch.build is None and count:
            before, after, shares = unpulled(branch)
            edges = branch.problem.window.edges
            taken = Cells.make(edges, after).mean_within(low, high)
            taken = taken - Cells.make(edges, before).mean_within(low, high)
            total += float(count) * float(np.nansum(shares * taken))
    return total / max(int(counts.sum()), 1)


def _longer(u: Uncertain, pull: float) -> Uncertain:
    """An interval longer by the pull of smoothing, on its side: members cannot know of it."""
    if u.low is None or u.high is None:
        return u
    return replace(u, low=u.low + min(pull, 0.0), high=u.high + max(pull, 0.0))


def _fraction(
    centre: Branch, single: Cells, pool: Pool | None, prior: Cells, m: float, level: float
) -> Uncertain:
    """Weight above M: resolved, or an upper bound where the data would do without it."""
    value = float(single.above(m)[0])
    samples = None if pool is None else pool.gather(lambda c: c.above(m))
    status = "resolved"
    if samples is not None and prior_dominates(samples, prior.above(m)):
        status = "assumed"
    elif not zero_excluded(centre.problem, centre.fit.w, centre.problem.window.edges, m):
        status = "upper_bound"
    out = _uncertain(value, samples, level, status, pool)
    if status == "upper_bound" and out.low is not None:
        out = Uncertain(out.value, 0.0, out.high, level, status, out.budget)
    return out


def _below(single: Cells, pool: Pool | None, prior: Cells, m: float, level: float) -> Uncertain:
    value = 1.0 - float(single.above(m)[0])
    samples = None if pool is None else 1.0 - pool.gather(lambda c: c.above(m))
    status = "resolved"
    if samples is not None and prior_dominates(samples, 1.0 - prior.above(m)):
        status = "assumed"
    elif samples is not None and float(np.quantile(samples, (1 - level) / 2)) < 1e-3:
        status = "upper_bound"
    return _uncertain(value, samples, level, status, pool)


def _asked(
    centre: Branch,
    single: Cells,
    pool: Pool | None,
    prior: Cells,
    m: float,
    low: float,
    high: float,
    level: float,
    beyond: Uncertain,
) -> Uncertain:
    if m <= high and m >= low:
        return _fraction(centre, single, pool, prior, m, level)
    inner = _fraction(centre, single, pool, prior, m, level)
    if m > high:
        # beyond the window only the sum is known: anything from nothing to all of it
        return Uncertain(inner.value, 0.0, beyond.high, level, "upper_bound", inner.budget)
    at_low = single.above(low) if pool is None else pool.gather(lambda c: c.above(low))
    least = float(np.quantile(at_low, (1 - level) / 2))
    return Uncertain(inner.value, min(least, inner.value or least), 1.0, level, "lower_bound")


def _curve(
    used: Sequence[Branch], centre: Branch, pool: Pool | None, level: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray | None, np.ndarray | None]:
    """Common grid, central density, band and member densities on it."""
    nodes = centre.problem.window.nodes
    grid = np.geomspace(nodes[0], nodes[-1], nodes.size)
    single = Cells.make(centre.problem.window.edges, centre.fit.w)
    density = single.density(grid)[0]
    if pool is None:
        return grid, density, None, None
    sampled = pool.gather(lambda c: c.density(grid))
    band = np.quantile(sampled, [(1 - level) / 2, (1 + level) / 2], axis=0)
    band[0] = np.minimum(band[0], density)
    band[1] = np.maximum(band[1], density)
    return grid, density, band, sampled


def _exponent(
    used: Sequence[Branch],
    pool: Pool | None,
    fixed: bool,
    prior: ExponentPrior,
    level: float,
) -> Uncertain | None:
    if fixed:
        return Uncertain(prior.mean, None, None, level, "assumed")
    if pool is None:
        return Uncertain(
            float(np.mean([b.model.exponent for b in used])), None, None, level, "assumed"
        )
    low, middle, high = quantiles(pool.exponent, [(1 - level) / 2, 0.5, (1 + level) / 2])
    wide = (high - low) > 0.8 * 2 * 1.6449 * prior.spread
    return Uncertain(
        float(middle), float(low), float(high), level, "assumed" if wide else "resolved"
    )


def _cross_check(
    sweep: Any,
    centre: Branch,
    averages: Mapping[str, Uncertain],
    noise: Mapping[str, Any],
    beyond: Uncertain,
) -> tuple[Any, tuple[Caution, ...]]:
    if not isinstance(sweep, Sweep):
        return None, ()
    check = closed_form.cross_check(
        sweep.omega, sweep.storage, sweep.loss, float(noise["relative"]), centre.melt, centre.model
    )

    def span(key: str) -> tuple[float, float] | None:
        u = averages[key]
        if u.value is None or u.status == "assumed":
            return None
        return (u.low or u.value, u.high or u.value)

    cautions = check.cautions(
        span("Mw_g_per_mol"), span("Mz_g_per_mol"), weight_above=float(beyond.value or 0.0)
    )
    return check, cautions


def _advice(
    centre: Branch,
    sweep: Any,
    polymer: Polymer,
    want: Mapping[str, float] | None,
    averages: Mapping[str, Uncertain],
) -> tuple[str, ...]:
    """What to measure next: computed for what is wanted, else what the statuses say."""
    if not want or not isinstance(sweep, Sweep) or centre.build is not None:
        out = []
        if averages["Mz_g_per_mol"].status == "lower_bound":
            out.append(
                "Mz is bounded because the longest chains relax below the lowest frequency: lower "
                "frequencies, or the same ones at a higher temperature, would size them. Ask with "
                "--want Mz=0.1 how far to go."
            )
        if averages["Mn_g_per_mol"].status != "resolved":
            out.append("Mn cannot be had from rheology; GPC gives it.")
        return tuple(out)
    return tuple(
        advise(
            centre.problem,
            centre.fit,
            centre.melt,
            centre.model,
            sweep.omega,
            centre.problem.sigma,
            want,
            polymer,
        )
    )
