"""Which molar masses a sweep can see, and the nodes the distribution is sought on."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from mwdlink.chains.melt import Melt
from mwdlink.errors import InputError
from mwdlink.relaxation.mixing import Model, relaxation_times

# a spectrum is supported by data only this far inside the reciprocal frequencies: J. Davies and
# R. S. Anderssen, J. Non-Newt. Fluid Mech. 73 (1997) 163 (recalled)
SUPPORT = float(np.exp(np.pi / 2))
# decades of relaxation time the nodes reach beyond the frequencies: short chains still dilute and
# colour the high end, long ones end in a lump soon
BELOW_DECADES = 1.5
ABOVE_DECADES = 0.7
NODES = 60
# masses the time law is looked up at before it is inverted, and rounds of closing in
GRID, MOST_HALVINGS = 128, 40


@dataclass(frozen=True, eq=False)
class Window:
    """Nodes and limits of an inversion.

    Attributes
    ----------
    nodes : ndarray of shape (n,)
        Molar masses [g/mol], uniform in log10.
    spacing : float
        Decades between nodes.
    low, high : float
        Molar masses whose kernel time lies within exp(pi/2)/omega_max and exp(-pi/2)/omega_min
        [g/mol].
    top_time : float
        Time given to the lump of longer chains [s], one decade above the last node.
    """

    nodes: np.ndarray
    spacing: float
    low: float
    high: float
    top_time: float

    @property
    def edges(self) -> np.ndarray:
        """Cell edges of the nodes [g/mol], shape (n + 1,)."""
        x = np.log10(self.nodes)
        h = self.spacing
        return 10.0 ** np.concatenate([x - h / 2, [x[-1] + h / 2]])


def masses_at_times(tau: np.ndarray, melt: Melt, model: Model) -> np.ndarray:
    """Molar masses whose kernel times are tau [s]; inverse of the time law, [g/mol].

    Below the shortest entangled chain (Z = 1) that chain is returned.

    Parameters
    ----------
    tau : ndarray of shape (k,)
        [s], > 0.

    Returns
    -------
    ndarray of shape (k,)

    Raises
    ------
    InputError
        If a time belongs to chains longer than 1e10 g/mol.
    """
    floor = max(0.8 * melt.entanglement_molar_mass * 1.0001, 50.0)
    goal = np.log(np.asarray(tau, dtype=float))
    x = np.linspace(np.log(floor), np.log(1e10), GRID)
    y = np.log(relaxation_times(np.exp(x), melt, model))
    if np.any(goal >= y[-1]):
        raise InputError(
            f"a relaxation time of {np.exp(goal.max()):.3g} s belongs to chains longer than "
            "1e10 g/mol.",
            remedy="Check the frequency unit (Hz, rad/s), the temperature and the polymer.",
        )
    # the last grid point below each goal; the cell is then halved and halved again
    cell = np.array([np.flatnonzero(y <= g)[-1] if y[0] < g else 0 for g in goal])
    low, high = x[cell], x[np.minimum(cell + 1, GRID - 1)]
    below = y[cell]
    above = y[np.minimum(cell + 1, GRID - 1)]
    for _ in range(MOST_HALVINGS):
        # regula falsi, kept off the ends, closes in faster than halving where the law is smooth
        share = np.clip((goal - below) / np.maximum(above - below, 1e-300), 0.0, 1.0)
        middle = low + share * (high - low)
        found = np.log(relaxation_times(np.exp(middle), melt, model)) - goal
        if np.all(np.abs(found) < 1e-11):
            break
        left = found < 0
        low, below = np.where(left, middle, low), np.where(left, found + goal, below)
        high, above = np.where(left, high, middle), np.where(left, above, found + goal)
        half = 0.5 * (low + high)
        found = np.log(relaxation_times(np.exp(half), melt, model)) - goal
        left = found < 0
        low, below = np.where(left, half, low), np.where(left, found + goal, below)
        high, above = np.where(left, high, half), np.where(left, above, found + goal)
        if np.all(high - low < 1e-10):
            break
    middle = np.where(y[0] >= goal, x[0], middle)
    return np.exp(middle)


def mass_at_time(tau: float, melt: Melt, model: Model) -> float:
    """`masses_at_times` of one time."""
    return float(masses_at_times(np.array([tau]), melt, model)[0])


def find_window(omega: np.ndarray, melt: Melt, model: Model, nodes: int = NODES) -> Window:
    """Nodes and window of a list of frequencies [rad/s].

    Raises
    ------
    InputError
        If the frequencies see no entangled chain of this polymer.
    """
    return _find_window(float(np.max(omega)), float(np.min(omega)), melt, model, nodes)


# lots of one kind of measurement share their window
@lru_cache(maxsize=32)
def _find_window(highest: float, lowest: float, melt: Melt, model: Model, nodes: int) -> Window:
    low_time, high_time = 1.0 / highest, 1.0 / lowest
    wanted = [
        low_time / 10**BELOW_DECADES,
        high_time * 10**ABOVE_DECADES,
        low_time * SUPPORT,
        high_time / SUPPORT,
    ]
    first, last, low, high = masses_at_times(np.array(wanted), melt, model).tolist()
    if last / first < 1.5:
        raise InputError(
            "the frequencies see no entangled chains of this polymer at this temperature.",
            remedy="Check the unit of frequency, the temperature and the polymer card.",
        )
    x = np.linspace(np.log10(first), np.log10(last), nodes)
    mass = 10.0**x
    mass.setflags(write=False)
    return Window(mass, float(x[1] - x[0]), low, max(high, low), 10.0 * _time(last, melt, model))


def _time(mass: float, melt: Melt, model: Model) -> float:
    return float(relaxation_times(np.array([mass]), melt, model)[0])
