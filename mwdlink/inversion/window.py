"""Which molar masses a sweep can see, and the nodes the distribution is sought on."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

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


def mass_at_time(tau: float, melt: Melt, model: Model) -> float:
    """Molar mass whose kernel time is tau [s]; inverse of the time law, [g/mol].

    Below the shortest entangled chain (Z = 1) that chain is returned.
    """
    floor = max(0.8 * melt.entanglement_molar_mass * 1.0001, 50.0)

    def gap(x: float) -> float:
        return float(np.log(relaxation_times(np.array([np.exp(x)]), melt, model)[0] / tau))

    a, b = np.log(floor), np.log(1e10)
    if gap(a) >= 0:
        return float(np.exp(a))
    if gap(b) <= 0:
        raise InputError(
            f"a relaxation time of {tau:.3g} s belongs to chains longer than 1e10 g/mol.",
            remedy="Check the frequency unit (Hz, rad/s), the temperature and the polymer.",
        )
    return float(np.exp(brentq(gap, a, b, xtol=1e-9)))


def find_window(omega: np.ndarray, melt: Melt, model: Model, nodes: int = NODES) -> Window:
    """Nodes and window of a list of frequencies [rad/s].

    Raises
    ------
    InputError
        If the frequencies see no entangled chain of this polymer.
    """
    low_time, high_time = 1.0 / float(np.max(omega)), 1.0 / float(np.min(omega))
    first = mass_at_time(low_time / 10**BELOW_DECADES, melt, model)
    last = mass_at_time(high_time * 10**ABOVE_DECADES, melt, model)
    low = mass_at_time(low_time * SUPPORT, melt, model)
    high = mass_at_time(high_time / SUPPORT, melt, model)
    if last / first < 1.5:
        raise InputError(
            "the frequencies see no entangled chains of this polymer at this temperature.",
            remedy="Check the unit of frequency, the temperature and the polymer card.",
        )
    x = np.linspace(np.log10(first), np.log10(last), nodes)
    return Window(10.0**x, float(x[1] - x[0]), low, max(high, low), 10.0 * _time(last, melt, model))


def _time(mass: float, melt: Melt, model: Model) -> float:
    return float(relaxation_times(np.array([mass]), melt, model)[0])
