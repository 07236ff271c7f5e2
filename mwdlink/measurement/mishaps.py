"""Slips of the laboratory that leave a fingerprint: recognised and proposed, never corrected.

Each recogniser looks for one slip and returns a `Proposal` with the number that speaks for it and
what would settle the matter.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.stats import chi2 as chi2_law

from mwdlink.errors import NotConverged
from mwdlink.measurement.modes import fit_on_grid
from mwdlink.measurement.sweep import Sweep

TWO_PI = 2.0 * np.pi
# A crossover modulus of a melt lies between about 1/100 (very broad) and 1/2 (narrow) of G_N
# (common practice); a thousandth of that is a slip of units, half-way on the log scale is the line.
CROSSOVER_SHARE = 1.0 / 700.0
# Torques below this are within the usual uncertainty of a rotational rheometer (recalled).
TORQUE_FLOOR = 1e-7


@dataclass(frozen=True)
class Proposal:
    """A slip that may have happened.

    Attributes
    ----------
    code : str
        "swapped_columns", "hertz_for_radians", "kilopascal_for_pascal", "pascal_for_kilopascal",
        "overload_points" or "torque_floor_points".
    text : str
        What speaks for it and what to do, in plain words.
    evidence : float
        The number behind it; its meaning stands in the text.
    rows : tuple of int
        Source rows (or point numbers from 1) concerned; empty when all.
    """

    code: str
    text: str
    evidence: float
    rows: tuple[int, ...] = ()

    def to_dict(self) -> dict[str, Any]:
        return {
            "code": self.code,
            "text": self.text,
            "evidence": self.evidence,
            "rows": list(self.rows),
        }


def propose(
    sweep: Sweep,
    failure: float,
    noise: float,
    *,
    taken: tuple[int, ...] = (),
    complex_viscosity: Any = None,
    other: Sweep | None = None,
    plateau_modulus: float | None = None,
) -> tuple[Proposal, ...]:
    """All slips a sweep shows.

    Parameters
    ----------
    sweep : Sweep
    failure : float
        chi2 of the Kramers-Kronig test over its limit: above 1 when it failed [-].
    noise : float
        Relative noise of the test [-].
    taken : tuple of int
        Points already named as outliers.
    complex_viscosity, other, plateau_modulus
        As for `check_consistency`.
    """
    found = [
        swapped(sweep, failure, noise),
        hertz(sweep, complex_viscosity, other),
        pascal(sweep, plateau_modulus, complex_viscosity),
        *bad_ends(sweep, failure, noise, taken),
        torque_floor(sweep),
    ]
    return tuple(p for p in found if p is not None)


def swapped(sweep: Sweep, failure: float, noise: float) -> Proposal | None:
    """G' and G'' in each other's place: the fit fails as it is and is good the other way."""
    if failure <= 1:
        return None
    as_is = _chi2(sweep, noise)
    other_way = _chi2(sweep.with_(storage=sweep.loss, loss=sweep.storage), noise)
    if other_way > 0.1 * as_is:
        return None
    ratio = as_is / max(other_way, 1e-12)
    text = (
        "The columns of G' and G'' look swapped: the other way round the misfit of one relaxation "
        f"spectrum is {ratio:.0f} times smaller. Check the headers; in a melt at rest G'' lies "
        "above G' at low frequency. Nothing was changed."
    )
    return Proposal("swapped_columns", text, float(ratio))


def hertz(sweep: Sweep, complex_viscosity: Any, other: Sweep | None) -> Proposal | None:
    """Frequency in Hz read as rad/s, or the reverse: a factor of 2 pi.

    Two moduli cannot show it: a factor on the frequency keeps them consistent. A viscosity column,
    a trusted sweep, or round numbers on the wrong scale can.
    """
    action = "Check the unit of the frequency column; nothing was changed."
    if complex_viscosity is not None:
        eta = np.asarray(complex_viscosity, dtype=float)
        factor = float(np.median(sweep.complex_modulus / sweep.omega / eta))
        if abs(np.log(factor / TWO_PI)) < 0.05:
            text = (
                f"|G*|/omega is {factor:.3g} times the |eta*| of the file: the frequencies look "
                f"like Hz taken for rad/s (2 pi = 6.283). {action}"
            )
            return Proposal("hertz_for_radians", text, factor)
        if abs(np.log(factor * TWO_PI)) < 0.05:
            text = (
                f"|G*|/omega is {factor:.3g} times the |eta*| of the file: the frequencies look "
                f"like rad/s taken for Hz and multiplied by 2 pi once too often. {action}"
            )
            return Proposal("radians_for_hertz", text, factor)
    if other is not None:
        shift = frequency_factor(sweep, other)
        if shift is not None and abs(np.log(shift / TWO_PI)) < 0.12:
            text = (
                f"The sweep falls on the other one when its frequencies are multiplied by "
                f"{shift:.3g}: they look like Hz taken for rad/s (2 pi = 6.283). {action}"
            )
            return Proposal("hertz_for_radians", text, shift)
        if shift is not None and abs(np.log(shift * TWO_PI)) < 0.12:
            text = (
                f"The sweep falls on the other one when its frequencies are divided by "
                f"{1 / shift:.3g}: they look multiplied by 2 pi once too often. {action}"
            )
            return Proposal("radians_for_hertz", text, shift)
    if complex_viscosity is None and other is None:
        ends = sweep.omega[[0, -1]]
        if np.all(_round(ends * TWO_PI)) and not np.any(_round(ends)):
            text = (
                f"The frequencies run from {ends[0]:.5g} to {ends[1]:.5g}, which are round numbers "
                f"only when multiplied by 2 pi ({TWO_PI * ends[0]:.4g} to {TWO_PI * ends[1]:.4g}): "
                f"they may be Hz standing under rad/s. {action}"
            )
            return Proposal("hertz_for_radians", text, TWO_PI)
    return None


def _round(x: np.ndarray) -> np.ndarray:
    """Whether numbers are 1, 2, 3, 4, 5, 6 or 8 times a power of ten, as set points are."""
    lead = x / 10 ** np.floor(np.log10(x) + 1e-9)
    marks = np.array([1.0, 2.0, 2.5, 3.0, 4.0, 5.0, 6.0, 8.0, 10.0])
    return np.min(np.abs(lead[:, None] / marks - 1.0), axis=1) < 1e-3


def frequency_factor(sweep: Sweep, other: Sweep) -> float | None:
    """The factor on the sweep's frequencies that lays it on the other one; None without overlap.

    Found on a fine grid of factors by the mean squared distance of ln G' and ln G'' over the
    common range, at least a third of a decade of it.
    """
    x, xo = np.log(sweep.omega), np.log(other.omega)
    curves = [
        (np.log(sweep.storage), np.log(other.storage)),
        (np.log(sweep.loss), np.log(other.loss)),
    ]
    best: tuple[float, float] | None = None
    for shift in np.arange(-4.0, 4.0, 0.01) * np.log(10) / 2:
        moved = x + shift
        inside = (moved >= xo[0]) & (moved <= xo[-1])
        if inside.sum() < 3 or np.ptp(moved[inside]) < np.log(10) / 3:
            continue
        cost = np.mean(
            [np.mean((a[inside] - np.interp(moved[inside], xo, b)) ** 2) for a, b in curves]
        )
        if best is None or cost < best[0]:
            best = (float(cost), float(shift))
    if best is None or best[0] > 0.1**2:
        return None
    return float(np.exp(best[1]))


def pascal(sweep: Sweep, plateau_modulus: float | None, complex_viscosity: Any) -> Proposal | None:
    """Moduli in kPa read as Pa, or the reverse: a factor of a thousand against G_N or |eta*|."""
    action = "Check the unit of the moduli; nothing was changed."
    if complex_viscosity is not None:
        eta = np.asarray(complex_viscosity, dtype=float)
        for turn in (1.0, TWO_PI, 1.0 / TWO_PI):
            factor = float(np.median(sweep.complex_modulus / sweep.omega / eta)) / turn
            if abs(np.log(factor * 1e3)) < 0.05:
                text = (
                    "|G*|/omega is a thousandth of the |eta*| of the file: the moduli look like "
                    f"kPa taken for Pa. {action}"
                )
                return Proposal("kilopascal_for_pascal", text, factor)
            if abs(np.log(factor / 1e3)) < 0.05:
                text = (
                    "|G*|/omega is a thousand times the |eta*| of the file: the moduli look a "
                    f"thousand times too large. {action}"
                )
                return Proposal("pascal_for_kilopascal", text, factor)
    if plateau_modulus is None:
        return None
    top = float(sweep.complex_modulus.max())
    if top > 30.0 * plateau_modulus and sweep.tan_delta.max() > 0.3:
        text = (
            f"|G*| reaches {top:.3g} Pa, {top / plateau_modulus:.0f} times the plateau modulus of "
            f"the polymer ({plateau_modulus:.3g} Pa): the moduli look a thousand times too large "
            f"(Pa converted as if kPa), or glassy. {action}"
        )
        return Proposal("pascal_for_kilopascal", text, top / plateau_modulus)
    crossed = np.flatnonzero(np.diff(np.sign(sweep.storage - sweep.loss)) > 0)
    mark = None
    if crossed.size:
        mark = float(np.sqrt(sweep.storage[crossed[-1]] * sweep.loss[crossed[-1] + 1]))
    elif np.all(sweep.storage > sweep.loss):
        mark = float(sweep.storage.min())  # the crossover lies below the window, at most here
        mark = mark if top < CROSSOVER_SHARE * plateau_modulus else None
    if mark is not None and mark < CROSSOVER_SHARE * plateau_modulus:
        share = mark / plateau_modulus
        text = (
            f"G' and G'' cross at {mark:.3g} Pa, only {share:.1g} of the plateau modulus of the "
            f"polymer ({plateau_modulus:.3g} Pa); melts cross above a hundredth of it. The moduli "
            f"look like kPa taken for Pa. {action}"
        )
        return Proposal("kilopascal_for_pascal", text, share)
    return None


def bad_ends(
    sweep: Sweep, failure: float, noise: float, taken: tuple[int, ...] = ()
) -> list[Proposal]:
    """Runs of points at either end without which the rest is consistent.

    At the upper end, readings that fall below the spectrum of the others are what torque or strain
    overload and slip do; at the lower end, scattering readings are what torque near its floor does.
    """
    n = len(sweep)
    at_ends = any(i < 2 or i > n - 3 for i in taken)
    if (failure <= 1 and not at_ends) or n < 8:
        return []
    found: list[Proposal] = []
    for end in ("upper", "lower"):
        for k in range(1, max(n // 4, 1) + 1):
            keep = np.ones(n, dtype=bool)
            cut = np.arange(n - k, n) if end == "upper" else np.arange(k)
            keep[cut] = False
            rest = sweep.select(keep)
            freedom_chi2 = _chi2_per_point(rest, noise)
            if freedom_chi2 is None or freedom_chi2[0] > freedom_chi2[1]:
                continue
            deviation = _predicted_deviation(sweep, keep, noise)[:, cut]
            # only a run that truly departs from what the others predict is worth a word
            if not np.all(np.abs(deviation).max(axis=0) > 3.5 * noise):
                break
            rows = tuple(int(sweep.rows[i]) if sweep.rows is not None else int(i) + 1 for i in cut)
            found.append(_end_proposal(end, rows, sweep, cut, deviation))
            break
    return found


def _end_proposal(
    end: str, rows: tuple[int, ...], sweep: Sweep, cut: np.ndarray, deviation: np.ndarray
) -> Proposal:
    if cut.size == 1:
        points = f"point at the {end} end ({sweep.omega[cut[0]]:.3g} rad/s; row {rows[0]}) departs"
    else:
        span = f"{sweep.omega[cut[0]]:.3g} to {sweep.omega[cut[-1]]:.3g} rad/s"
        named = ", ".join(map(str, rows))
        points = f"points at the {end} end ({span}; rows {named}) depart"
    size = float(np.mean(deviation))
    if abs(size) >= 0.5 * float(np.mean(np.abs(deviation))):
        amount = f"{100 * size:+.0f} % on average"
    else:  # to both sides: a mean would say that there is nothing
        amount = f"up to {100 * float(deviation.flat[np.argmax(np.abs(deviation))]):+.0f} %"
    if end == "upper":
        cause = (
            "as torque or strain overload, slip or edge fracture do"
            if size < 0
            else "which compliance of the instrument or inertia can do"
        )
        code = "overload_points"
    else:
        cause = "as readings near the torque floor, drift or unfinished loading do"
        code = "torque_floor_points"
    text = (
        f"The {points} from the spectrum of all the others by {amount}, "
        f"{cause}. Consider leaving out what is marked here, and its neighbours if they lean the "
        "same way; nothing was left out."
    )
    return Proposal(code, text, size, rows)


def torque_floor(sweep: Sweep) -> Proposal | None:
    """Readings whose torque is below what rotational rheometers resolve well."""
    if sweep.torque is None:
        return None
    low = np.flatnonzero(np.abs(sweep.torque) < TORQUE_FLOOR)
    if low.size == 0:
        return None
    rows = tuple(int(sweep.rows[i]) if sweep.rows is not None else int(i) + 1 for i in low)
    text = (
        f"The torque is below {1e6 * TORQUE_FLOOR:.1g} uN m in rows "
        f"{', '.join(map(str, rows[:8]))}: near the floor of usual instruments (a rule of thumb; "
        "your instrument's own floor decides). Larger strain or plates would help; nothing was "
        "left out here."
    )
    return Proposal("torque_floor_points", text, float(np.abs(sweep.torque[low]).max()), rows)


def _fit(sweep: Sweep, noise: float, keep: np.ndarray | None = None) -> Any:
    sigma = np.full(len(sweep), noise)
    if keep is not None:
        sigma = np.where(keep, noise, 1e6)
    return fit_on_grid(sweep.omega, sweep.storage, sweep.loss, sigma, sigma)


def _chi2(sweep: Sweep, noise: float) -> float:
    try:
        return float(_fit(sweep, noise).chi2)
    except NotConverged:
        return np.inf


def _chi2_per_point(sweep: Sweep, noise: float) -> tuple[float, float] | None:
    """chi2 per point and its limit by chance."""
    try:
        fit = _fit(sweep, noise)
    except NotConverged:
        return None
    freedom = max(fit.points - fit.free, 1)
    # a margin of a third on the variance: the noise itself is only estimated
    return fit.chi2 / freedom, 1.33 * float(chi2_law.ppf(0.99, freedom)) / freedom


def _predicted_deviation(sweep: Sweep, keep: np.ndarray, noise: float) -> np.ndarray:
    """data/fit - 1 of all points for the fit of the kept ones, shape (2, n)."""
    fit = _fit(sweep, noise, keep)
    return np.vstack([sweep.storage / fit.storage - 1.0, sweep.loss / fit.loss - 1.0])
