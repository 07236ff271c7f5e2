"""What an ensemble may claim: resolved, a bound, or merely assumed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from mwdlink.inversion.objective import Problem
from mwdlink.inversion.quantities import Cells

# a lump moves an average by more than this share: the average is a bound
BOUND_SHARE = 0.02
# posterior at least this much of the prior's width: the prior says it, not the data
PRIOR_SHARE = 0.8
# chi2 (of one parameter, 90 %) by which the data must object before a weight is called above zero
OBJECTION = 2.706


@dataclass(frozen=True)
class Lumps:
    """Upper ends (95 %) of the weights in the lumps over the ensemble."""

    above: float
    below_low: float
    below_high: float


def average_statuses(
    cells: Cells, values: dict[str, np.ndarray], top: np.ndarray
) -> dict[str, str]:
    """Status of Mn, Mw, Mz and dispersity.

    Parameters
    ----------
    cells : Cells
    values : mapping
        `Cells.averages()`.
    top : ndarray of shape (m,)
        Molar mass given to the lump above [g/mol].
    """
    lump = cells.w[:, -1]
    share_w = float(np.quantile(lump * top / values["Mw"], 0.9))
    share_z = float(np.quantile(lump * top**2 / (values["Mw"] * values["Mz"]), 0.9))
    below = float(np.quantile(cells.w[:, -2], 0.05))
    mw = "lower_bound" if share_w > BOUND_SHARE else "resolved"
    mz = "lower_bound" if share_z > BOUND_SHARE else "resolved"
    # rheology never resolves Mn: short chains only dilute
    mn = "upper_bound" if below > 1e-3 else "assumed"
    dispersity = "lower_bound" if mn == "upper_bound" else "assumed"
    return {"Mn": mn, "Mw": mw, "Mz": mz, "dispersity": dispersity}


def prior_dominates(posterior: np.ndarray, prior: np.ndarray) -> bool:
    """Whether the data narrowed a quantity by less than a fifth.

    Parameters
    ----------
    posterior, prior : ndarray
        Samples of the quantity.
    """

    def width(x: np.ndarray) -> float:
        x = x[np.isfinite(x)]
        if np.all(x > 0):
            x = np.log(x)
        return float(np.subtract(*np.quantile(x, [0.95, 0.05])))

    b = width(prior)
    return b > 0 and width(posterior) >= PRIOR_SHARE * b


def zero_excluded(problem: Problem, w: np.ndarray, edges: np.ndarray, molar_mass: float) -> bool:
    """Whether the data object when all weight above M is moved to just below M.

    Parameters
    ----------
    problem : Problem
    w : ndarray of shape (n + 2,)
        Weights of the central fit.
    edges : ndarray of shape (n + 1,)
        [g/mol]
    molar_mass : float
        M [g/mol].
    """
    cut = int(np.searchsorted(edges, molar_mass)) - 1
    n = w.size - 2
    if cut >= n:
        moved = w.copy()
        moved[n - 1] += moved[-1]
        moved[-1] = 0.0
    else:
        cut = max(cut, 0)
        moved = w.copy()
        inside = (np.log(molar_mass) - np.log(edges[cut])) / np.log(edges[cut + 1] / edges[cut])
        inside = float(np.clip(inside, 0.0, 1.0))
        tail = moved[cut + 1 : n].sum() + moved[-1] + (1 - inside) * moved[cut]
        moved[cut + 1 : n] = 0.0
        moved[-1] = 0.0
        moved[cut] = inside * moved[cut]
        moved[max(cut - 1, 0)] += tail
    return problem.chi2(moved) - problem.chi2(w) > OBJECTION
