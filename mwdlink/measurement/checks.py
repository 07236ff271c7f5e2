"""The checks of a sweep as they travel with another result: proposals, outliers, drift.

`consistency` and `drift` are results of their own; here they are put beside a spectrum or an
inversion made of the same sweep, whose numbers they never touch.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from mwdlink.errors import Caution, MwdlinkError, merge_cautions
from mwdlink.measurement.consistency import Consistency, check_consistency
from mwdlink.measurement.drift import Drift, compare_drift
from mwdlink.measurement.sweep import Sweep

# More readings than this say no more of slips, and their check takes seconds.
PLENTY = 150


@dataclass(frozen=True)
class Checks:
    """What was found on a sweep before anything is concluded from it.

    Attributes
    ----------
    consistency : Consistency
    drift : Drift or None
        Where a second sweep of the sample was given.
    """

    consistency: Consistency
    drift: Drift | None = None

    @property
    def warnings(self) -> tuple[Caution, ...]:
        """The cautions of both."""
        drift = () if self.drift is None else self.drift.warnings
        return merge_cautions(self.consistency.warnings, drift)

    def payload(self) -> dict[str, Any]:
        """The content of `consistency` in result.json."""
        found = self.consistency.payload()
        out = {
            "passed": self.consistency.passed,
            **found["consistency"],
            "outliers": found["outliers"],
            "proposals": found["proposals"],
        }
        if self.drift is not None:
            out |= self.drift.payload()
        return out

    def tables(self) -> dict[str, Any]:
        """The comparison of the two sweeps, where there is one."""
        return {} if self.drift is None else self.drift.tables()

    def text(self) -> str:
        """What was found beside the verdict on the two moduli, in sentences; may be empty."""
        parts = [p.text for p in self.consistency.proposals]
        if self.drift is not None:
            parts.append(self.drift.answer())
        return " ".join(parts)


def check_sweep(
    sweep: Sweep,
    *,
    noise: float | None = None,
    plateau_modulus: float | None = None,
    after: Sweep | None = None,
) -> Checks:
    """All checks of a sweep: consistency, and drift against a second sweep of the sample.

    Parameters
    ----------
    sweep : Sweep
        At least four frequencies.
    noise : float, optional
        Relative noise of one modulus [-]; default the error columns, else estimated.
    plateau_modulus : float, optional
        G_N of the polymer [Pa]: shows kPa taken for Pa.
    after : Sweep, optional
        The same sample at the same temperature, measured after `sweep`.

    Returns
    -------
    Checks

    Raises
    ------
    InputError
        With fewer than four points, or a second sweep that cannot be compared.
    NotConverged
    """
    # the comparison first: a second sweep that does not belong here is refused at once
    drift = None if after is None else compare_drift(sweep, after, noise=noise)
    found = check_consistency(sweep, noise=noise, plateau_modulus=plateau_modulus)
    return Checks(found, drift)


def slips(
    sweep: Sweep, *, noise: float | None = None, plateau_modulus: float | None = None
) -> tuple[Caution, ...]:
    """The cautions of the consistency check alone, at small cost and without ever failing.

    Parameters
    ----------
    sweep : Sweep
        Of more than 150 readings as many are looked at, evenly spread: slips concern all of them,
        but single bad readings between those may be missed.
    noise, plateau_modulus
        As for `check_sweep`.

    Returns
    -------
    tuple of Caution
        Outliers by row, moduli that do not belong together, and proposals; none where the check
        cannot be made.
    """
    if len(sweep) > PLENTY:
        sweep = sweep.select(np.unique(np.linspace(0, len(sweep) - 1, PLENTY).round().astype(int)))
    try:
        found = check_consistency(sweep, noise=noise, plateau_modulus=plateau_modulus)
    except MwdlinkError:
        return ()
    named = {"outliers", "kramers_kronig_failed", *(p.code for p in found.proposals)}
    own = set(sweep.warnings)
    return tuple(c for c in found.warnings if c.code in named and c not in own)
