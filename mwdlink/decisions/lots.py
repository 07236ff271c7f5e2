"""Many lots: is the process steady, and does a lot differ from a retained reference?"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.stats import chi2 as chi2_law

from mwdlink.errors import InputError
from mwdlink.inversion.inversion_result import Inversion
from mwdlink.measurement.noise import noise_of
from mwdlink.measurement.sweep import Sweep
from mwdlink.quantity import Uncertain, readonly

# three standard deviations over the mean moving range of pairs: 3/d2(2) = 3/1.128 (W. A. Shewhart's
# charts as in ISO 7870-2; recalled)
INDIVIDUALS = 2.66
FEWEST_LOTS = 5
# a difference of the moduli is called one when noise alone would give it this seldom
SELDOM = 0.01


@dataclass(frozen=True)
class Control:
    """Control limits of a chart of individuals.

    Attributes
    ----------
    centre, low, high : float
        Mean and mean -+ 2.66 mean moving range, in the quantity's unit.
    outside : tuple of int
        Positions of the values beyond the limits.
    """

    centre: float
    low: float
    high: float
    outside: tuple[int, ...]

    def to_dict(self) -> dict[str, Any]:
        return {"centre": self.centre, "low": self.low, "high": self.high}


def control(values: Sequence[float | None]) -> Control | None:
    """Limits for values in the order they were made; None for fewer than five.

    Parameters
    ----------
    values : sequence of float or None
        Missing values are passed over.
    """
    x = np.array([np.nan if v is None else float(v) for v in values])
    known = np.flatnonzero(np.isfinite(x))
    if known.size < FEWEST_LOTS:
        return None
    held = x[known]
    centre = float(np.mean(held))
    reach = INDIVIDUALS * float(np.mean(np.abs(np.diff(held))))
    low, high = centre - reach, centre + reach
    beyond = known[(held < low) | (held > high)]
    return Control(centre, low, high, tuple(int(i) for i in beyond))


@dataclass(frozen=True, eq=False)
class Reference:
    """A retained sample's sweep and what is needed of its inversion.

    Attributes
    ----------
    sweep : Sweep
    sigma : ndarray of shape (2, n)
        Relative noise of G' and G''.
    Mw : float
        Mean molar mass within the window [g/mol].
    members : ndarray of shape (m, 3) or None
        Of each member: index of its kernel, exponent, ln of Mw within the window with the time
        law's own scatter taken out.
    """

    sweep: Sweep
    sigma: np.ndarray
    Mw: float
    members: np.ndarray | None


def reference_of(sweep: Any, inversion: Inversion) -> Reference:
    """What later lots are compared with.

    Raises
    ------
    InputError
        If it is no frequency sweep.
    """
    if not isinstance(sweep, Sweep):
        raise InputError("the reference must be a frequency sweep.", path=sweep.path)
    weights = noise_of(sweep, _noise(inversion))
    return Reference(
        sweep,
        readonly(np.vstack([weights.sigma_storage, weights.sigma_loss])),
        float(inversion.averages["Mw_within_window_g_per_mol"].value or np.nan),
        _members(inversion),
    )


def compare(
    sweep: Sweep, inversion: Inversion, reference: Reference, level: float = 0.9
) -> dict[str, Any]:
    """A lot against the reference.

    Returns
    -------
    dict
        `G_ratio` and `Mw_ratio` (uncertain; lot over reference, 1 means alike), `chi2_per_point`
        of the difference of ln moduli, `chance` that noise alone gives as much, `largest`
        {omega_rad_per_s, quantity, ratio} and `differs`.

    Notes
    -----
    The moduli are compared at the lot's frequencies within the reference's range. The interval of
    G_ratio holds noise only: a second loading of one sample usually moves all moduli together by
    some per cent. In Mw_ratio kernel, exponent and time law are taken as common to both (they are
    the material's), noise and smoothing as each one's own.
    """
    if not isinstance(sweep, Sweep):
        raise InputError("only frequency sweeps can be compared.", path=sweep.path)
    x, there = np.log(sweep.omega), np.log(reference.sweep.omega)
    near = (x >= there[0] - 1e-6) & (x <= there[-1] + 1e-6)
    if int(near.sum()) < 3:
        raise InputError(
            "the frequencies do not overlap with the reference's.",
            path=sweep.path,
            remedy="Compare sweeps over one window.",
        )
    weights = noise_of(sweep, _noise(inversion))
    own = np.vstack([weights.sigma_storage, weights.sigma_loss])[:, near]
    other = np.vstack([np.interp(x[near], there, s) for s in reference.sigma])
    sigma = np.hypot(own, other)
    pairs = (
        (sweep.storage, reference.sweep.storage),
        (sweep.loss, reference.sweep.loss),
    )
    gap = np.vstack([np.log(a[near]) - np.interp(x[near], there, np.log(b)) for a, b in pairs])
    score = gap / sigma
    chi2, n = float(np.sum(score**2)), gap.size
    chance = float(chi2_law.sf(chi2, n))
    mean = float(np.mean(gap))
    error = max(float(np.sqrt(np.sum(sigma**2))), float(np.std(gap) * np.sqrt(n))) / n
    reach = _normal(level) * error
    worst = np.unravel_index(int(np.argmax(np.abs(score))), gap.shape)
    return {
        "G_ratio": Uncertain(
            float(np.exp(mean)), float(np.exp(mean - reach)), float(np.exp(mean + reach)), level
        ),
        "Mw_ratio": _mass_ratio(inversion, reference, level),
        "chi2_per_point": chi2 / n,
        "chance": chance,
        "largest": {
            "omega_rad_per_s": float(sweep.omega[near][worst[1]]),
            "quantity": ("G'", "G''")[int(worst[0])],
            "ratio": float(np.exp(gap[worst])),
        },
        "differs": bool(chance < SELDOM),
    }


def _mass_ratio(inversion: Inversion, reference: Reference, level: float) -> Uncertain:
    value = float(inversion.averages["Mw_within_window_g_per_mol"].value or np.nan) / reference.Mw
    own = _members(inversion)
    if own is None or reference.members is None:
        return Uncertain(value, None, None, level)
    parts = []
    for kernel in np.unique(own[:, 0]):
        a = own[own[:, 0] == kernel]
        b = reference.members[reference.members[:, 0] == kernel]
        if not b.size:
            continue
        # one material, one exponent: pair members of like rank in it
        a, b = a[np.argsort(a[:, 1], kind="stable")], b[np.argsort(b[:, 1], kind="stable")]
        rank = (np.arange(len(a)) * len(b)) // len(a)
        parts.append(a[:, 2] - b[rank, 2])
    if not parts:
        return Uncertain(value, None, None, level)
    return Uncertain.from_samples(np.exp(np.concatenate(parts)), level=level)


def _members(inversion: Inversion) -> np.ndarray | None:
    table = inversion.members
    if not table:
        return None
    names = [str(k["kernel"]) for k in inversion.kernels]
    a = float(inversion.polymer["viscosity"]["exponent"])
    # a law f times higher reads M f^(-1/a): multiplied back
    mass = np.log(table["Mw within window [g/mol]"]) + np.log(table["time-law factor [-]"]) / a
    kernel = [names.index(str(k)) for k in table["kernel"]]
    return readonly(np.column_stack([kernel, table["exponent [-]"], mass]))


def _noise(inversion: Inversion) -> float | None:
    """The noise to take where the inversion found it; columns of the file speak for themselves."""
    if inversion.noise["source"] == "columns":
        return None
    return float(np.clip(inversion.noise["relative"], 1e-4, 0.9))


def _normal(level: float) -> float:
    from scipy.special import ndtri

    return float(ndtri(0.5 + 0.5 * level))
