"""Kernels: how the network stress of a monodisperse melt decays.

A kernel gives F(t; M), the surviving share of the network stress of a monodisperse melt,
G_mono(t) = G_N F(t; M), F(0) = 1. Every kernel's time scale is anchored so that the viscosity law
of narrow fractions holds exactly: with c = int_0^inf F ds, s = t/tau, tau = eta/(G_N c). Kernels
therefore differ in shape only.

To add one: write a class with the methods of `Kernel` and give it a line in `KERNELS`.
"""

from __future__ import annotations

from functools import lru_cache
from typing import Any, Protocol

import numpy as np
from scipy import special

from mwdlink.chains.melt import Melt
from mwdlink.errors import ModelError
from mwdlink.relaxation.lattice import POINTS, stencil

# lattice of ln(M1/M) of the fluctuation kernel
RATIO_STEP = 0.1


class Kernel(Protocol):
    """What a kernel must offer. `survival` is F^(1/beta), the quantity the mixing rule sums."""

    name: str
    scale_free: bool
    """Whether F depends on M through t/tau(M) only: one curve serves every chain."""

    def available(self, melt: Melt) -> bool:
        """Whether the card has the constants this kernel needs."""

    def survival(
        self, s: np.ndarray, beta: float, melt: Melt, molar_mass: np.ndarray
    ) -> np.ndarray:
        """F^(1/beta) at s = t/tau.

        Parameters
        ----------
        s : ndarray of shape (n_t, n_M)
            Reduced times [-], >= 0.
        beta : float
            Mixing exponent, >= 1.
        melt : Melt
        molar_mass : ndarray of shape (n_M,)
            [g/mol]

        Returns
        -------
        ndarray of shape (n_t, n_M)
        """

    def constant(self, beta: float, melt: Melt, molar_mass: np.ndarray) -> np.ndarray:
        """c = int_0^inf F ds of each molar mass, shape (n_M,)."""


class Exponential:
    """F = exp(-s); c = 1; Je0 G_N = 1."""

    name = "exponential"
    scale_free = True

    def available(self, melt: Melt) -> bool:
        return True

    def survival(
        self, s: np.ndarray, beta: float, melt: Melt, molar_mass: np.ndarray
    ) -> np.ndarray:
        return np.exp(-s / beta)

    def constant(self, beta: float, melt: Melt, molar_mass: np.ndarray) -> np.ndarray:
        return np.ones(np.shape(molar_mass))


class Reptation:
    """F = mu^beta with the tube survival mu of Doi and Edwards.

    mu = (8/pi^2) sum_{p odd} p^-2 exp(-p^2 s). The tube survival itself enters the mixing
    integral, so that c depends on beta: 0.82247 (pi^2/12) at 1, 0.34686 at 2 (derived).

    References
    ----------
    .. [1] M. Doi, S. F. Edwards, J. Chem. Soc. Faraday Trans. 2 74 (1978) 1802 (recalled).
    """

    name = "reptation"
    scale_free = True

    def available(self, melt: Melt) -> bool:
        return True

    def survival(
        self, s: np.ndarray, beta: float, melt: Melt, molar_mass: np.ndarray
    ) -> np.ndarray:
        return tube_survival(s)

    def constant(self, beta: float, melt: Melt, molar_mass: np.ndarray) -> np.ndarray:
        return np.full(np.shape(molar_mass), _reptation_constant(float(beta)))


class PowerLaw:
    """F = n int_0^1 x^(n-1) exp(-t/(x tau)) dx = e^-s - s^n Gamma(1-n) Q(1-n, s).

    The flow part of the spectrum of narrow melts; c = n/(1+n), Je0 G_N = (1+n)^2/(n(n+2)).

    References
    ----------
    .. [1] M. Baumgaertel, A. Schausberger, H. H. Winter, Rheol. Acta 29 (1990) 400 (recalled).
    """

    name = "power-law"
    scale_free = True

    def available(self, melt: Melt) -> bool:
        return 0 < melt.power_law_n < 1

    def survival(
        self, s: np.ndarray, beta: float, melt: Melt, molar_mass: np.ndarray
    ) -> np.ndarray:
        return power_law_decay(s, melt.power_law_n) ** (1.0 / beta)

    def constant(self, beta: float, melt: Melt, molar_mass: np.ndarray) -> np.ndarray:
        n = melt.power_law_n
        return np.full(np.shape(molar_mass), n / (1.0 + n))


class Fluctuation:
    """Tube survival with contour-length fluctuation (time-dependent diffusion).

    F = mu^beta, mu = (8/pi^2) sum_{p odd} p^-2 exp(-p^2 U), U = s + (M1/M) g(M s/M1),
    g(x) = sum_{n>=1} (1 - exp(-n^2 x))/n^2. Needs M1 on the card. c depends on M.

    References
    ----------
    .. [1] J. des Cloizeaux, Macromolecules 23 (1990) 4678 (form recalled).
    """

    name = "fluctuation"
    scale_free = False

    def available(self, melt: Melt) -> bool:
        return melt.fluctuation_molar_mass is not None

    def survival(
        self, s: np.ndarray, beta: float, melt: Melt, molar_mass: np.ndarray
    ) -> np.ndarray:
        ratio = self._ratio(melt, molar_mass)
        return tube_survival(s + ratio * fluctuation_sum(s / ratio))

    def constant(self, beta: float, melt: Melt, molar_mass: np.ndarray) -> np.ndarray:
        # c is a smooth curve of ln(M1/M): on a lattice, and interpolated
        ratio = self._ratio(melt, np.atleast_1d(molar_mass))
        position = np.log(ratio) / RATIO_STEP
        first, weight = stencil(position)
        lattice = np.arange(int(first.min()), int(first.max()) + POINTS)
        table = _fluctuation_constants(int(lattice[0]), lattice.size, float(beta))
        return np.exp(np.sum(table[first[:, None] - lattice[0] + np.arange(POINTS)] * weight, 1))

    def _ratio(self, melt: Melt, molar_mass: np.ndarray) -> np.ndarray:
        if melt.fluctuation_molar_mass is None:
            raise ModelError(
                f"the fluctuation kernel needs kernel.fluctuation_molar_mass_g_per_mol, which the "
                f"card {melt.name!r} does not give; add it or leave this kernel out"
            )
        return melt.fluctuation_molar_mass / np.asarray(molar_mass, dtype=float)


KERNELS: dict[str, Kernel] = {
    k.name: k for k in (Exponential(), Reptation(), PowerLaw(), Fluctuation())
}
KERNEL_NAMES = tuple(KERNELS)
DEFAULT_KERNEL = "power-law"


def get_kernel(name: str, melt: Melt | None = None) -> Kernel:
    """The kernel of a name; ModelError if unknown, or if the card lacks its constant."""
    if name not in KERNELS:
        raise ModelError(f"unknown kernel {name!r}; use one of {', '.join(KERNEL_NAMES)}")
    kernel = KERNELS[name]
    if melt is not None and not kernel.available(melt):
        if name == "fluctuation":
            raise ModelError(
                "the fluctuation kernel needs kernel.fluctuation_molar_mass_g_per_mol, which the "
                f"card {melt.name!r} does not give; add it or choose another kernel"
            )
        raise ModelError(f"the card {melt.name!r} cannot serve the kernel {name!r}")
    return kernel


def available_kernels(melt: Melt) -> tuple[str, ...]:
    """Names of the kernels the card has constants for."""
    return tuple(name for name, kernel in KERNELS.items() if kernel.available(melt))


def tube_survival(u: Any) -> np.ndarray:
    """mu(u) = (8/pi^2) sum_{p odd} p^-2 exp(-p^2 u), to 1e-15 of its value at 0.

    Below u = 0.06 the equivalent 1 - 4 sqrt(u)/pi^1.5: what it leaves out is of the order of
    exp(-pi^2/(4 u)), 1e-18.
    """
    u = np.asarray(u, dtype=float)
    out = np.asarray(1.0 - 4.0 * np.sqrt(np.minimum(u, 0.06)) / np.pi**1.5)
    late = u >= 0.06
    v = np.minimum(u[late], 700.0)
    total = np.exp(-v)
    # at u = 0.06 the first term left out, p = 25, is exp(-37.5)/25^2: 1e-19
    for p in range(3, 25, 2):
        total += np.exp(-np.minimum(p * p * v, 745.0)) / (p * p)
    out[late] = 8.0 / np.pi**2 * total
    return out


def power_law_decay(z: Any, n: float) -> np.ndarray:
    """F(z) = e^-z - z^n Gamma(1-n) Q(1-n, z) = n E_{1+n}(z), without cancellation at large z.

    Parameters
    ----------
    z : ndarray
        t/tau [-], >= 0.
    n : float
        0 < n < 1.
    """
    z = np.asarray(z, dtype=float)
    out = np.empty_like(z)
    large = z > 3.0
    x = np.where(large, 0.0, z)
    head = np.exp(-x) - x**n * special.gamma(1 - n) * special.gammaincc(1 - n, x)
    out[~large] = head[~large]
    if np.any(large):
        # continued fraction of the exponential integral E_{1+n} (modified Lentz)
        y = np.minimum(z[large], 700.0)
        p = 1.0 + n
        b = y + p
        c = np.full_like(y, 1e300)
        d = 1.0 / b
        h = d.copy()
        for i in range(1, 60):
            a = -i * (p - 1 + i)
            b = b + 2.0
            d = 1.0 / (a * d + b)
            c = b + a / c
            step = c * d
            h *= step
            if np.all(np.abs(step - 1) < 1e-15):
                break
        out[large] = n * h * np.exp(-y)
    return out


def fluctuation_sum(x: Any) -> np.ndarray:
    """g(x) = sum_{n>=1} (1 - exp(-n^2 x))/n^2, to 1e-14.

    Up to x = 0.3 its small-x form sqrt(pi x) - x/2, which leaves out terms of the order of
    exp(-pi^2/x); above, pi^2/6 less the direct sum of eleven terms.
    """
    x = np.asarray(x, dtype=float)
    low = np.minimum(x, 0.3)
    out = np.asarray(np.sqrt(np.pi * low) - 0.5 * low)
    late = x > 0.3
    v = np.minimum(x[late], 700.0)
    tail = np.exp(-v)
    for k in range(2, 12):
        tail += np.exp(-np.minimum(k * k * v, 745.0)) / (k * k)
    out[late] = np.pi**2 / 6 - tail
    return out


# ln s for the integrals of F over ln s: the trapezoid rule is exponentially accurate there, as the
# integrands are smooth and vanish at both ends
_LN_S = np.linspace(np.log(1e-18), np.log(80.0), 461)


@lru_cache(maxsize=256)
def _reptation_constant(beta: float) -> float:
    s = np.exp(_LN_S)
    return float(np.sum(tube_survival(s) ** beta * s) * (_LN_S[1] - _LN_S[0]))


@lru_cache(maxsize=64)
def _fluctuation_constants(start: int, count: int, beta: float) -> np.ndarray:
    """ln c at ln(M1/M) = RATIO_STEP (start + k), k = 0 ... count - 1."""
    s = np.exp(_LN_S)[:, None]
    ratio = np.exp(RATIO_STEP * (start + np.arange(count)))
    f = tube_survival(s + ratio * fluctuation_sum(s / ratio)) ** beta * s
    return np.log(f.sum(axis=0) * (_LN_S[1] - _LN_S[0]))
