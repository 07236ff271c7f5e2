"""The GPC's own error in the band of a prediction: which tables have one, and each member's curves.

A distribution that is a measured table has the errors of `GpcError`; one that was given by averages
or computed is taken as exact, unless an error is asked for.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.gpc_error import GpcDraws, GpcError, draw_curves
from mwdlink.decisions.response import Version, lean
from mwdlink.quantity import Uncertain

MOMENTS = (-1, 1, 2)
"""Moments that Mn, Mw, Mz and dispersity come from."""

BETWEEN = (0.5, 1.5)
"""Further ones that tell a member's shape: with them five sixths or more of what the curve's errors
do to any property are traced (tried on three melts)."""


def error_asked(error: Any) -> GpcError | None:
    """A GpcError from what a caller gives: None, the relative error of a row, or a GpcError.

    Raises
    ------
    InputError
        If it is out of range.
    """
    if error is None or isinstance(error, GpcError):
        return error
    return GpcError.of(float(error))


@dataclass(frozen=True, eq=False)
class GpcBand:
    """Members' versions of the components' distributions.

    Attributes
    ----------
    errors : tuple of GpcError or None
        Of each component; None is exact.
    kinds : tuple of str
        Calibrations of those that have an error.
    spread : float
        Standard deviation of ln M, the largest of them [-].
    draws : GpcDraws
        On the nodes that a `Bank` of the same distributions uses.
    members : ndarray of shape (5, m, n)
        Moments of each member's distributions, by the orders of `MOMENTS` and `BETWEEN`.
    """

    errors: tuple[GpcError | None, ...]
    kinds: tuple[str, ...]
    spread: float
    draws: GpcDraws
    members: np.ndarray

    @classmethod
    def of(
        cls,
        distributions: Sequence[Distribution],
        error: GpcError | None,
        members: int,
        seed: int,
        masses: bool = True,
    ) -> GpcBand | None:
        """None where every distribution is exact or there are no members.

        Without `masses` the usual errors are of the curves alone, not of their molar masses.
        """
        usual = GpcError() if masses else GpcError(molar_mass=0.0)
        errors = tuple(
            error if error is not None else (usual if d.measured else None) for d in distributions
        )
        errors = tuple(
            None if e is None or not (e.relative or e.baseline or e.spread_of(d)) else e
            for e, d in zip(errors, distributions, strict=True)
        )
        if members <= 0 or all(e is None for e in errors):
            return None
        held = [lean(d) for d in distributions]
        draws = draw_curves(held, errors, members, seed)
        orders = (*MOMENTS, *BETWEEN)
        own = np.array([[d.moment(k) for d in distributions] for k in orders])
        # nodes may have been merged: only the ratio to what was merged is the member's
        base = np.array([[d.moment(k) for d in held] for k in orders])
        nodes = [d.molar_mass for d in held]
        drawn = np.stack([draws.moments(nodes, k) for k in orders])
        kinds = [d.calibration for d, e in zip(distributions, errors, strict=True) if e is not None]
        return cls(
            errors,
            tuple(dict.fromkeys(kinds)),
            max(
                e.spread_of(d) for d, e in zip(distributions, errors, strict=True) if e is not None
            ),
            draws,
            drawn * (own / base)[:, None, :],
        )

    def version(self, i: int) -> Version:
        """The components of member i, for a `Bank`."""
        return Version([w[i] for w in self.draws.mass], self.draws.log_factor[i])

    def averages(self, shares: np.ndarray) -> dict[str, np.ndarray]:
        """Mn, Mw, Mz, dispersity of each member's blend of fractions (m, n)."""
        return averages_from(*(np.sum(shares * x, axis=1) for x in self.members[: len(MOMENTS)]))

    def marks(self, shares: np.ndarray) -> np.ndarray:
        """Numbers that say how far off each member's blend is, shape (m, 5), for budgets."""
        return np.log(np.sum(shares * self.members, axis=2)).T

    def words(self) -> str:
        """What it is, for a sentence."""
        first = next(e for e in self.errors if e is not None)
        return f"the GPC's own error ({first.words(self.kinds)})"

    def to_dict(self) -> dict[str, Any]:
        """For the record."""
        first = next(e for e in self.errors if e is not None)
        return {
            "relative": first.relative,
            "baseline": first.baseline,
            "molar_mass": self.spread,
        }


def averages_from(inverse: Any, first: Any, second: Any) -> dict[str, Any]:
    """Mn, Mw, Mz, dispersity from moments of order -1, 1 and 2."""
    return {
        "Mn_g_per_mol": 1.0 / inverse,
        "Mw_g_per_mol": first,
        "Mz_g_per_mol": second / first,
        "dispersity": first * inverse,
    }


def average_bands(
    averages: Mapping[str, float], gpc: GpcBand | None, shares: np.ndarray, phi: np.ndarray
) -> dict[str, Uncertain]:
    """Intervals of a blend's averages from the members' distributions and weighed fractions.

    Parameters
    ----------
    averages : mapping
    gpc : GpcBand or None
    shares : ndarray of shape (m, n)
        Fractions of each member.
    phi : ndarray of shape (n,)
        Fractions as weighed.
    """
    if gpc is None:
        return {k: Uncertain(v, v, v) for k, v in averages.items()}
    rows, alone = gpc.averages(shares), gpc.averages(phi[None, :])
    out = {}
    for k, v in averages.items():
        whole, part = float(np.log(rows[k]).var()), float(np.log(alone[k]).var())
        share = min(part / whole, 1.0) if whole > 0 else 1.0
        # of one source alone there is nothing to share out
        budget = {"noise": 1.0 - share, "gpc": share} if share < 1.0 - 1e-9 else {}
        out[k] = Uncertain.from_samples(rows[k], v, budget=budget)
    return out


def gpc_limits(
    distributions: Sequence[Distribution], gpc: GpcBand | None, in_curves: bool = True
) -> tuple[str, ...]:
    """What a band cannot say of the distributions behind it."""
    out = []
    exact = [d for i, d in enumerate(distributions) if gpc is None or gpc.errors[i] is None]
    if exact:
        which = (
            "The distribution is"
            if len(exact) == len(distributions) == 1
            else (
                "The distributions are"
                if len(exact) == len(distributions)
                else f"{len(exact)} of {len(distributions)} distributions are"
            )
        )
        out.append(
            f"{which} taken as exact (given by averages, computed, or told to be): no error of a "
            "GPC is in the band. One per cent in Mw is about three and a half per cent in the "
            "zero-shear viscosity."
        )
    if gpc is not None and in_curves:
        out.append(
            "Of the GPC the band holds errors of rows, baseline and calibration as assumed; column "
            "broadening, and chains that the table leaves out, are not in it."
        )
    return tuple(out)
