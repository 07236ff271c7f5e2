"""Which claims do not belong: the fewest without which the rest of a sheet hangs together.

One claim is tried first, then a cause that several claims share (a unit, a temperature, the scale
of all averages), then any two, all that come from one kind of test, any three. Where another choice
does nearly as well, its claims are rivals: the sheet cannot tell which is off.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import combinations

import numpy as np
from scipy.stats import chi2

from mwdlink.decisions.datasheet_causes import Cause, shared_causes
from mwdlink.decisions.datasheet_claims import Claim
from mwdlink.decisions.datasheet_fit import least_costs
from mwdlink.decisions.datasheet_model import SheetModel

# a clean sheet misfits by more than this once in a thousand, or once in twenty
RARE, UNUSUAL = 0.001, 0.05
# two choices are told apart when the one leaves this much less misfit than the other
TELL_APART = 4.0
# more claims are left out only where that leaves this much less misfit: there are many pairs
WORTH = 10.0
# a shared cause is believed where no claim stands out if it leaves this much less misfit
HIDDEN = 14.0
MOST = 3
# claims of one kind of test, which may be off together (another lot, another laboratory)
TESTS: tuple[Callable[[Claim], bool], ...] = (
    lambda c: c.kind in ("Mn", "Mw", "Mz", "dispersity"),
    lambda c: c.kind in ("melt flow", "flow rate ratio"),
    lambda c: c.kind == "eta0" or (c.kind == "viscosity" and (c.omega or 0.0) <= 1.0),
    lambda c: c.kind in ("eta0", "viscosity", "crossover omega", "crossover G"),
)


@dataclass(frozen=True)
class Finding:
    """What does not belong.

    Attributes
    ----------
    named : tuple of int
        Claims without which the rest hangs together.
    rivals : mapping
        Claim that could be the culprit instead -> the claims left out in that case.
    rest_agrees : bool
        False where no few claims explain the disagreement.
    causes : tuple of str
        Shared causes that bring all claims in line.
    """

    named: tuple[int, ...] = ()
    rivals: Mapping[int, tuple[int, ...]] = field(default_factory=dict)
    rest_agrees: bool = True
    causes: tuple[str, ...] = ()


def follows(claims: Sequence[Claim]) -> tuple[int, ...]:
    """Claims that are the quotient of two others on the sheet, and so say nothing new.

    A flow rate ratio beside its two rates, a dispersity beside Mn and Mw: within 3 %, which is
    rounding.
    """
    out = []
    for i, c in enumerate(claims):
        pair: list[list[Claim]] = [[], []]
        if c.kind == "dispersity":
            pair = [[o for o in claims if o.kind == k] for k in ("Mw", "Mn")]
        elif c.kind == "flow rate ratio":
            pair = [
                [
                    o
                    for o in claims
                    if o.kind == "melt flow"
                    and abs(float(o.load_kg or 0) - float(load or 0)) < 0.01
                    and (c.temperature_C is None or o.temperature_C in (None, c.temperature_C))
                ]
                for load in (c.load_kg, c.second_load_kg)
            ]
        if any(
            a.volume == b.volume
            and a.calibration == b.calibration
            and abs(np.log(a.value / b.value / c.value)) < 0.03
            for a in pair[0]
            for b in pair[1]
        ):
            out.append(i)
    return tuple(out)


def find(
    models: Sequence[SheetModel],
    claims: Sequence[Claim],
    inconsistent: Sequence[bool],
    without: Sequence[float],
    total: float,
    counted: np.ndarray,
    least: int = 1,
) -> Finding:
    """Which claims do not belong.

    Parameters
    ----------
    models : sequence of SheetModel
        Of the claims, one per kernel.
    claims : sequence of Claim
    inconsistent : sequence of bool
        Of each claim against all the others.
    without : sequence of float
        Misfit of the others when one is left out.
    total : float
        Misfit of all.
    counted : ndarray of shape (n,)
        1 for claims that count, 0 for those that follow from others.
    least : int
        How many to leave out at least: fewer have been tried and do not do.
    """
    active = [i for i in range(len(claims)) if counted[i] > 0]
    n = len(active)
    marked = [i for i in active if inconsistent[i]]
    if not marked:
        if total <= _limit(n):
            return _hidden(models, claims, total, counted)
        marked = active
    ranked = sorted((float(without[i]), i) for i in marked)
    cost, first = ranked[0]
    # a claim may be the culprit even where the others leave it too open to call it inconsistent
    close = min(cost + TELL_APART, 0.5 * (cost + total))
    near = [i for i in active if i != first and without[i] < close]
    single = Finding((first,), {i: (i,) for i in near})
    if least == 1 and cost <= _usual(n - 1):
        return single
    to_beat = cost - WORTH if least == 1 and cost <= _limit(n - 1) else np.inf
    shared = _fitting(models, claims, counted, _limit(n), easy=True)
    found, pair_cost, rivals = _several(models, claims, active, counted, 2)
    if not found and not shared and to_beat == np.inf:
        shared = _fitting(models, claims, counted, _limit(n), easy=False)
    if shared and shared[0][0] < min(pair_cost + TELL_APART, to_beat + WORTH - TELL_APART):
        by_cause = _shared(shared, counted)
        if len(by_cause.named) >= least:
            return by_cause
    if found and pair_cost < to_beat and least <= 2:
        return Finding(found, rivals)
    if to_beat < np.inf:
        return single
    group = _group(models, claims, active, counted)
    if group:
        return Finding(group)
    found, _, rivals = _several(models, claims, active, counted, 3)
    return Finding(found, rivals) if found else Finding((first,), {}, False)


def _usual(count: int) -> float:
    return float(chi2.ppf(0.75, max(count, 1)))


def _hidden(
    models: Sequence[SheetModel], claims: Sequence[Claim], total: float, counted: np.ndarray
) -> Finding:
    """A cause that so many claims share that none of them stands out."""
    if total <= _limit(int(counted.sum()), UNUSUAL):
        return Finding()
    shared = _fitting(models, claims, counted, total - HIDDEN, easy=True)
    shared = shared or _fitting(models, claims, counted, total - HIDDEN, easy=False)
    return _shared(shared, counted) if shared else Finding()


def _shared(shared: Sequence[tuple[float, Cause]], counted: np.ndarray) -> Finding:
    best, cause = shared[0]
    members = tuple(i for i in cause.members if counted[i] > 0)
    near = tuple(c.text for v, c in shared if v < best + TELL_APART)
    return Finding(members, {}, True, near[:2])


def _limit(count: int, rare: float = RARE) -> float:
    return float(chi2.ppf(1.0 - rare, max(count, 1)))


def _rows(counted: np.ndarray, sets: Sequence[Sequence[int]]) -> np.ndarray:
    rows = np.tile(counted, (len(sets), 1))
    for row, left in zip(rows, sets, strict=True):
        row[list(left)] = 0.0
    return rows


def _fitting(
    models: Sequence[SheetModel],
    claims: Sequence[Claim],
    counted: np.ndarray,
    limit: float,
    *,
    easy: bool,
) -> list[tuple[float, Cause]]:
    """Shared causes under which everything hangs together, the best first."""
    found = []
    for changed, batch in shared_causes(models, claims, temperatures=not easy):
        rows = np.tile(counted, (len(batch), 1))
        costs = least_costs(changed, len(claims), rows, np.array([c.shift for c in batch]))
        found += [(float(v), c) for v, c in zip(costs, batch, strict=True) if v <= limit]
    return sorted(found, key=lambda pair: pair[0])


def _several(
    models: Sequence[SheetModel],
    claims: Sequence[Claim],
    active: Sequence[int],
    counted: np.ndarray,
    size: int,
) -> tuple[tuple[int, ...], float, dict[int, tuple[int, ...]]]:
    """The claims without which the rest hangs together best, and what comes close to them."""
    if len(active) < size + 2:
        return (), np.inf, {}
    sets = list(combinations(active, size))
    costs = least_costs(models, len(claims), _rows(counted, sets))
    order = np.argsort(costs, kind="stable")
    best = int(order[0])
    if costs[best] > _limit(len(active) - size):
        return (), np.inf, {}
    rivals: dict[int, tuple[int, ...]] = {}
    for k in order[1:]:
        if costs[k] >= costs[best] + TELL_APART:
            break
        for i in sets[int(k)]:
            if i not in sets[best]:
                rivals.setdefault(i, sets[int(k)])
    return sets[best], float(costs[best]), rivals


def _group(
    models: Sequence[SheetModel],
    claims: Sequence[Claim],
    active: Sequence[int],
    counted: np.ndarray,
) -> tuple[int, ...]:
    """All claims of one kind of test, where they agree with each other and the rest does too."""
    sets = [tuple(i for i in active if test(claims[i])) for test in TESTS]
    sets = [s for s in dict.fromkeys(sets) if 2 < len(s) < len(active)]
    if not sets:
        return ()
    outside = least_costs(models, len(claims), _rows(counted, sets))
    inside = least_costs(
        models, len(claims), _rows(counted, [[i for i in active if i not in s] for s in sets])
    )
    good = [
        (float(a + b), s)
        for a, b, s in zip(outside, inside, sets, strict=True)
        if a <= _limit(len(active) - len(s)) and b <= _limit(len(s))
    ]
    return min(good)[1] if good else ()
