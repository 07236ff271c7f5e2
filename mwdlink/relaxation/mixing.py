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
from mwdlink.errors import Caution, ModelError
from mwdlink.relaxation.kernels import DEFAULT_KERNEL, get_kernel
from mwdlink.relaxation.lattice import (
    POINTS,
    SUM_POINTS,
    even_step,
    shifted_columns,
    stencil,
    window_sums,
)
from mwdlink.relaxation.rouse import rouse_viscosity

# whatever the Rouse part takes, the network keeps this much of the law's viscosity
LEAST_NETWORK_SHARE = 0.1
# the network part fades in between these entanglements per chain, from this share on
FADE_Z = (1.0, 3.0)
FADE_FLOOR = 0.01
# steps of ln s of the table behind the survival matrix
FINE_STEP = 0.06
# steps of ln M of the same table for a kernel whose shape depends on M
MASS_STEP = 0.1
# below this many entries a survival matrix is computed entry by entry
TABLE_FROM = 4000


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


# the highest exponent anybody fitted, with another kernel than those here: Maier et al., J. Rheol.
# 42 (1998) 1153 (recalled)
HIGHEST_FITTED = 3.84


def exponent_cautions(exponent: float) -> tuple[Caution, ...]:
    """What is to be said of an exponent that somebody chose."""
    if exponent <= HIGHEST_FITTED:
        return ()
    text = (
        f"A mixing exponent of {exponent:g} is higher than any fitted to linear melts (2 to 2.25 "
        f"with kernels like these, {HIGHEST_FITTED:g} with another; recalled): molar masses and "
        "times that rest on it are far off."
    )
    return (Caution("exponent_unusual", text),)


def relaxation_times(molar_mass: np.ndarray, melt: Melt, model: Model) -> np.ndarray:
    """Time tau(M) of each chain's kernel [s], anchored to the viscosity law of narrow fractions.

    With the Rouse part its own viscosity is taken off, tau = max(law - eta_R, 0.1 law)/(G_N c):
    the law is met exactly from Z = 3. Between Z = 1, below which a chain is pure Rouse and not
    tied to the law, and Z = 3 that time fades in, so that the viscosity has no step at Z = 1.

    Parameters
    ----------
    molar_mass : ndarray of shape (n,)
        [g/mol]

    Returns
    -------
    ndarray of shape (n,)
    """
    m = np.atleast_1d(np.asarray(molar_mass, dtype=float))
    network = melt.zero_shear_law(m)
    if model.rouse:
        law = network
        network = np.maximum(law - rouse_viscosity(m, melt), LEAST_NETWORK_SHARE * law)
        x = np.clip((melt.Z(m) - FADE_Z[0]) / (FADE_Z[1] - FADE_Z[0]), 0.0, 1.0)
        network = network * np.maximum(x * x * (3.0 - 2.0 * x), FADE_FLOOR)
    c = get_kernel(model.kernel, melt).constant(model.exponent, melt, m)
    return network / (melt.plateau_modulus * c)


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
    if not np.any(held):
        return out
    tau = relaxation_times(m[held], melt, model)
    step = _table_step(t, out.size)
    if step is not None:
        columns = _from_table(np.log(t), step, np.log(tau), m[held], melt, model)
    else:
        kernel = get_kernel(model.kernel, melt)
        columns = kernel.survival(t[:, None] / tau, model.exponent, melt, m[held])
    if np.all(held):
        return columns
    out[:, held] = columns
    return out


def survival_sum(
    t: np.ndarray, molar_mass: np.ndarray, mass: np.ndarray, melt: Melt, model: Model
) -> np.ndarray:
    """sum_i w_i F(t; M_i)^(1/beta), shape (n_t,), to 1e-12 of its value at t = 0.

    `survival_matrix` @ mass is the same with relative accuracy at long times, and slower.

    Parameters
    ----------
    t : ndarray of shape (n_t,)
        [s], >= 0.
    molar_mass, mass : ndarray of shape (n_M,)
        [g/mol], weight fractions [-].
    """
    m = np.asarray(molar_mass, dtype=float)
    kernel = get_kernel(model.kernel, melt)
    step = _table_step(t, t.size * m.size) if kernel.scale_free else None
    held = in_network(m, melt, model) & (mass > 0)
    if step is None or not np.any(held):
        return survival_matrix(t, m, melt, model) @ mass
    ln_t, ln_tau = np.log(t), np.log(relaxation_times(m[held], melt, model))
    s, position, stride = _table_places(ln_t, step, ln_tau)
    table = kernel.survival(s, model.exponent, melt, m[:1])[:, 0]
    return window_sums(table, position, mass[held], stride, t.size)


def _table_step(t: np.ndarray, entries: int) -> float | None:
    """Step of ln t when the times allow a table and the matrix is large enough to want one."""
    if entries <= TABLE_FROM or not np.all(t > 0):
        return None
    return even_step(np.log(t))


def _table_places(
    ln_t: np.ndarray, step: float, ln_tau: np.ndarray
) -> tuple[np.ndarray, np.ndarray, int]:
    """s = t/tau of the table's entries (a column), each chain's place of t[0], steps a row."""
    stride = int(np.ceil(step / FINE_STEP))
    fine = step / stride
    margin = SUM_POINTS // 2 + 2
    start = ln_t[0] - ln_tau.max() - margin * fine
    position = (ln_t[0] - ln_tau - start) / fine
    size = int(np.ceil(position.max())) + (ln_t.size - 1) * stride + 2 * margin
    return np.exp(start + fine * np.arange(size))[:, None], position, stride


def _from_table(
    ln_t: np.ndarray, step: float, ln_tau: np.ndarray, m: np.ndarray, melt: Melt, model: Model
) -> np.ndarray:
    """F^(1/beta) on times even in ln t: ln F is one curve of ln s, shifted by each chain's ln tau.

    Interpolating ln F keeps the relative accuracy of the long-time end too. A kernel whose shape
    depends on M has a family of curves, on a lattice of ln M.
    """
    s, position, stride = _table_places(ln_t, step, ln_tau)
    if get_kernel(model.kernel, melt).scale_free:
        table = _ln_decay(s, m[:1], melt, model)[0]
    else:
        first, weight = stencil(np.log(m) / MASS_STEP)
        lattice = np.arange(first.min(), first.max() + POINTS)
        if lattice.size < m.size:
            curves = _ln_decay(s, np.exp(MASS_STEP * lattice), melt, model)
            row = np.repeat(np.arange(m.size), POINTS)
            mix = np.zeros((m.size, lattice.size))
            mix[row, (first[:, None] - lattice[0] + np.arange(POINTS)).ravel()] = weight.ravel()
            table = mix @ curves
        else:
            table = _ln_decay(s, m, melt, model)
    return np.exp(shifted_columns(table, position, stride, ln_t.size))


def _ln_decay(s: np.ndarray, m: np.ndarray, melt: Melt, model: Model) -> np.ndarray:
    """ln F^(1/beta), shape (n_M, n_s), of a column of s = t/tau."""
    decay = get_kernel(model.kernel, melt).survival(s, model.exponent, melt, m)
    return np.log(np.maximum(decay, 1e-300)).T


def survival_at(s: np.ndarray, molar_mass: float, melt: Melt, model: Model) -> np.ndarray:
    """F^(1/beta) of one molar mass at reduced times s = t/tau, shape of s."""
    kernel = get_kernel(model.kernel, melt)
    column = np.asarray(s, dtype=float)[:, None]
    return kernel.survival(column, model.exponent, melt, np.array([molar_mass]))[:, 0]
