"""The time law of a chain and the mixing rule of a melt.

G_net(t) = G_N [ sum_i w_i F(t; M_i)^(1/beta) ]^beta: beta 1 adds linearly, beta 2 is double
reptation.

References
----------
.. [1] J. des Cloizeaux, Europhys. Lett. 5 (1988) 437; C. Tsenoglou, Polym. Prepr. 28 (1987) 185.
.. [2] D. Maier et al., J. Rheol. 42 (1998) 1153 (general exponent).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from mwdlink.chains.melt import Melt
from mwdlink.errors import ModelError
from mwdlink.relaxation.kernels import DEFAULT_KERNEL, get_kernel
from mwdlink.relaxation.rouse import rouse_viscosity

# the Rouse part may take at most this much of the law's viscosity from the network
LEAST_NETWORK_SHARE = 0.1


@dataclass(frozen=True)
class Model:
    """Which relaxation model: kernel, mixing exponent, Rouse part.

    Attributes
    ----------
    kernel : str
        A name of `kernels.KERNELS`.
    exponent : float
        Mixing exponent beta [-], >= 1. It has meaning only together with the kernel.
    rouse : bool
        Whether the Rouse part is added (and unentangled chains leave the network).
    """

    kernel: str = DEFAULT_KERNEL
    exponent: float = 2.0
    rouse: bool = True

    def __post_init__(self) -> None:
        get_kernel(self.kernel)
        if not (np.isfinite(self.exponent) and self.exponent >= 1.0):
            raise ModelError(f"the mixing exponent must be >= 1, not {self.exponent!r}")
        if self.exponent > 8.0:
            raise ModelError(f"a mixing exponent of {self.exponent:g} is beyond any use (limit 8)")


def relaxation_times(molar_mass: np.ndarray, melt: Melt, model: Model) -> np.ndarray:
    """Time tau(M) of each chain's kernel [s], anchored to the viscosity law of narrow fractions.

    With the Rouse part its own viscosity is taken off, tau = max(law - eta_R, 0.1 law)/(G_N c).

    Parameters
    ----------
    molar_mass : ndarray of shape (n,)
        [g/mol]

    Returns
    -------
    ndarray of shape (n,)
    """
    m = np.atleast_1d(np.asarray(molar_mass, dtype=float))
    law = melt.zero_shear_law(m)
    if model.rouse:
        law = np.maximum(law - rouse_viscosity(m, melt), LEAST_NETWORK_SHARE * law)
    c = get_kernel(model.kernel, melt).constant(model.exponent, melt, m)
    return law / (melt.plateau_modulus * c)


def in_network(molar_mass: np.ndarray, melt: Melt, model: Model) -> np.ndarray:
    """Which chains carry network stress: all, or with the Rouse part those with Z >= 1."""
    m = np.asarray(molar_mass, dtype=float)
    if not model.rouse:
        return np.ones(m.shape, dtype=bool)
    return np.asarray(melt.Z(m) >= 1.0)


def survival_matrix(t: np.ndarray, molar_mass: np.ndarray, melt: Melt, model: Model) -> np.ndarray:
    """F(t; M)^(1/beta), zero for chains outside the network.

    Parameters
    ----------
    t : ndarray of shape (n_t,)
        [s], >= 0.
    molar_mass : ndarray of shape (n_M,)
        [g/mol]

    Returns
    -------
    ndarray of shape (n_t, n_M)
    """
    m = np.atleast_1d(np.asarray(molar_mass, dtype=float))
    t = np.asarray(t, dtype=float)
    out = np.zeros((t.size, m.size))
    held = in_network(m, melt, model)
    if np.any(held):
        tau = relaxation_times(m[held], melt, model)
        kernel = get_kernel(model.kernel, melt)
        out[:, held] = kernel.survival(t[:, None] / tau, model.exponent, melt, m[held])
    return out


def survival_at(s: np.ndarray, molar_mass: float, melt: Melt, model: Model) -> np.ndarray:
    """F^(1/beta) of one molar mass at reduced times s = t/tau, shape of s."""
    kernel = get_kernel(model.kernel, melt)
    column = np.asarray(s, dtype=float)[:, None]
    return kernel.survival(column, model.exponent, melt, np.array([molar_mass]))[:, 0]
