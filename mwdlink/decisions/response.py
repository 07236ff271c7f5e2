"""Many predicted melts at once: components, kernels, exponents and constants share their work.

With S_i(t) = sum_j w_ij F(t; M_j)^(1/beta) of component i, a blend of fractions phi is
G_N (sum_i phi_i S_i)^beta plus the Rouse parts: linear in phi before the power. What costs time is
ln F on a grid of times and molar masses; it is made once for a kernel and a plateau modulus.
Another exponent takes its 1/beta-th power and moves the times by a factor (the anchor c depends on
beta only); another constant of the viscosity law moves all times by a factor.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.melt import Melt
from mwdlink.decisions.properties import Curves
from mwdlink.relaxation.kernels import get_kernel, power_law_decay, tube_survival
from mwdlink.relaxation.mixing import Model, in_network, relaxation_times
from mwdlink.relaxation.operator import exponential_fit, log_grid
from mwdlink.relaxation.rouse import rouse_on_lattice

TIMES_PER_DECADE = 10
MODES_PER_DECADE = 8
FREQUENCIES_PER_DECADE = 10
MOST_NODES = 240
HIGHEST_FREQUENCY = 1e7


@dataclass(frozen=True, eq=False)
class Response:
    """Relaxation of k melts on one grid of times.

    Attributes
    ----------
    times : ndarray of shape (n_t,)
        [s]
    modulus : ndarray of shape (k, n_t)
        Network part of G(t) [Pa].
    tau : ndarray of shape (n_k,)
        Times of the exponentials [s].
    strength : ndarray of shape (k, n_k)
        Strengths of either sign that reproduce the network part [Pa].
    rouse_tau : ndarray of shape (n_r,)
    rouse_strength : ndarray of shape (k, n_r)
        Rouse part [s], [Pa].
    """

    times: np.ndarray
    modulus: np.ndarray
    tau: np.ndarray
    strength: np.ndarray
    rouse_tau: np.ndarray
    rouse_strength: np.ndarray

    def moduli(self, omega: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """G', G'' [Pa], shape (k, n_w)."""
        storage, loss = _debye(omega, self.tau, self.strength)
        if self.rouse_tau.size:
            a, b = _debye(omega, self.rouse_tau, self.rouse_strength)
            storage, loss = storage + a, loss + b
        # far below the terminal zone G' is a difference of large numbers
        floor = 1e-18 * self.modulus.max()
        return np.maximum(storage, floor), np.maximum(loss, floor)

    def relaxation(self, t: np.ndarray) -> np.ndarray:
        """G(t) [Pa], shape (k, n): interpolated network part plus Rouse part."""
        top = self.modulus.max(axis=1, keepdims=True)
        table = np.log(np.maximum(self.modulus, 1e-18 * top))
        x = np.log(np.clip(t, self.times[0], self.times[-1]))
        out = np.exp(_cubic_rows(np.log(self.times), table, x))
        if self.rouse_tau.size:
            out = out + self.rouse_strength @ np.exp(-np.outer(1.0 / self.rouse_tau, t))
        return np.maximum(out, 1e-15 * top)

    def started(self, t: np.ndarray) -> np.ndarray:
        """eta+(t) = int_0^t G [Pa s], shape (k, n)."""
        step = np.log(self.times[1] / self.times[0])
        f = self.modulus * self.times
        area = np.concatenate([f[:, :1], 0.5 * (f[:, 1:] + f[:, :-1]) * step], axis=1).cumsum(
            axis=1
        )
        x = np.log(np.clip(t, self.times[0], self.times[-1]))
        out = np.exp(_cubic_rows(np.log(self.times), np.log(area), x))
        if self.rouse_tau.size:
            out = out + (self.rouse_strength * self.rouse_tau) @ -np.expm1(
                -np.outer(1.0 / self.rouse_tau, t)
            )
        return out

    @property
    def terminal(self) -> tuple[np.ndarray, np.ndarray]:
        """eta0 [Pa s] and Je0 [1/Pa], shape (k,) each."""
        t = self.times
        step = np.log(t[1] / t[0])
        zero = (self.modulus * t).sum(axis=1) * step + self.modulus[:, 0] * t[0] * (1 - 0.5 * step)
        first = (self.modulus * t * t).sum(axis=1) * step
        if self.rouse_tau.size:
            zero = zero + self.rouse_strength @ self.rouse_tau
            first = first + self.rouse_strength @ self.rouse_tau**2
        return zero, first / zero**2

    def scaled(self, factor: float) -> Response:
        """All times multiplied by a factor."""
        return Response(
            self.times * factor,
            self.modulus,
            self.tau * factor,
            self.strength,
            self.rouse_tau * factor,
            self.rouse_strength,
        )

    def curves(self, omega: np.ndarray) -> Curves:
        """Moduli at frequencies even in ln omega, with terminal values."""
        return Curves(omega, *self.moduli(omega), *self.terminal)


def _debye(
    omega: np.ndarray, tau: np.ndarray, strength: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    x = np.outer(tau, omega)
    d = x / (1.0 + x * x)
    return strength @ (x * d), strength @ d


def _cubic_rows(x: np.ndarray, y: np.ndarray, at: np.ndarray) -> np.ndarray:
    """Four-point interpolation of rows y (k, n) over an even x (n,) at places (m,): (k, m)."""
    h = x[1] - x[0]
    i = np.clip(np.floor((at - x[0]) / h).astype(int) - 1, 0, x.size - 4)
    u = (at - x[i]) / h
    c = (
        -(u - 1) * (u - 2) * (u - 3) / 6,
        u * (u - 2) * (u - 3) / 2,
        -u * (u - 1) * (u - 3) / 2,
        u * (u - 1) * (u - 2) / 6,
    )
    return sum(y[:, i + j] * c[j] for j in range(4))  # type: ignore[return-value]


@lru_cache(maxsize=8)
def _ln_table(kernel: str, n: float) -> tuple[np.ndarray, np.ndarray]:
    """ln of a kernel's decay over ln(t/tau), for interpolation (to 7e-5 t/tau of itself)."""
    x = np.geomspace(1e-18, 690.0, 2100)
    decay = tube_survival(x) if kernel == "reptation" else power_law_decay(x, n)
    return np.log(x), np.log(np.maximum(decay, 1e-305))


def even_times(low: float, high: float) -> np.ndarray:
    """Times from low to beyond high [s], always the same step and few different lengths.

    The matrix that fits exponentials depends on step and length only, and is kept.
    """
    count = int(np.ceil(np.log10(high / low) * TIMES_PER_DECADE)) + 1
    count += -count % 20
    return low * 10.0 ** (np.arange(count) / TIMES_PER_DECADE)


@lru_cache(maxsize=64)
def _fit_matrix(count: int, step: float, modes: int) -> np.ndarray:
    """Values at `count` times e^(i step) -> strengths at `modes` times over the same range."""
    t = np.exp(step * np.arange(count))
    fit = exponential_fit(t, np.geomspace(t[0], t[-1], modes))
    fit.setflags(write=False)
    return fit


def lean(distribution: Distribution, most: int = MOST_NODES) -> Distribution:
    """The distribution without empty ends; very long tables merged to fewer cells."""
    d = distribution.compact(1e-18)
    if d.molar_mass.size <= most:
        return d
    edges = np.geomspace(d.edges[0], d.edges[-1], most + 1)
    cell = np.clip(np.searchsorted(edges, d.molar_mass, side="right") - 1, 0, most - 1)
    mass = np.bincount(cell, d.mass, most)
    # of each cell the weight and the mean of M^3.5, which the viscosity feels
    node = np.bincount(cell, d.mass * d.molar_mass**3.5, most)
    held = mass > 0
    return Distribution.from_nodes((node[held] / mass[held]) ** (1 / 3.5), mass[held])


@dataclass(frozen=True, eq=False)
class Version:
    """The components as they may be, on the bank's nodes.

    Attributes
    ----------
    mass : sequence of ndarray of shape (n_M,)
        Weights of each component, sum 1.
    log_factor : ndarray of shape (n_i,)
        ln of what multiplies each component's molar masses; small, a few per cent.
    """

    mass: Sequence[np.ndarray]
    log_factor: np.ndarray


def _time_exponent(d: Distribution, melt: Melt) -> float:
    """How relaxation times grow with M about the chains that carry a distribution's viscosity."""
    m = d.moment(3.5) ** (1 / 3.5)
    step = 1.01
    return float(np.log(melt.zero_shear_law(step * m) / melt.zero_shear_law(m)) / np.log(step))


class Bank:
    """Responses of blends of given components, for any kernel, exponent and constants.

    Parameters
    ----------
    components : sequence of Distribution
    melt : Melt
    rouse : bool
    omega_max : float
        Highest frequency of interest [rad/s].
    """

    def __init__(
        self,
        components: Sequence[Distribution],
        melt: Melt,
        rouse: bool = True,
        omega_max: float = HIGHEST_FREQUENCY,
    ) -> None:
        self.components = [lean(d) for d in components]
        self.melt, self.rouse = melt, rouse
        self.omega_max = max(float(omega_max), 1.0)
        self._decay: dict[tuple[str, float, float], tuple[np.ndarray, list[np.ndarray]]] = {}
        self._rouse: dict[float, tuple[np.ndarray, np.ndarray, list[np.ndarray]]] = {}
        self.own_weights = tuple(d.mass for d in self.components)
        self.time_exponents = np.array([_time_exponent(d, melt) for d in self.components])

    def melt_of(self, plateau: float) -> Melt:
        """The melt with another plateau modulus [Pa]."""
        if plateau == self.melt.plateau_modulus:
            return self.melt
        return self.melt.with_(plateau_modulus=plateau)

    def _log_decay(
        self, kernel: str, exponent: float, melt: Melt
    ) -> tuple[np.ndarray, list[np.ndarray]]:
        """Times and ln F of each component at a reference exponent, made once."""
        # only the fluctuation kernel's shape in time depends on the exponent (through c(M))
        reference = exponent if kernel == "fluctuation" else 2.0
        key = (kernel, reference, melt.plateau_modulus)
        if key not in self._decay:
            model = Model(kernel, reference, self.rouse)
            taus, held = [], []
            for d in self.components:
                taus.append(relaxation_times(d.molar_mass, melt, model))
                held.append(in_network(d.molar_mass, melt, model))
            everything = np.concatenate(taus)
            low = min(1e-3 / self.omega_max, 1e-7 * float(everything.max()))
            # exp(-t/tau) is 1e-20 of itself at 46 tau; F of the slower kernels is below that
            t = even_times(low, 400.0 * float(everything.max()))
            columns = []
            for d, tau, mask in zip(self.components, taus, held, strict=True):
                log_f = np.full((t.size, d.molar_mass.size), -np.inf)
                if np.any(mask):
                    log_f[:, mask] = self._ln_survival(
                        kernel, t[:, None] / tau[mask], reference, melt, d.molar_mass[mask]
                    )
                columns.append(log_f)
            self._decay[key] = (t, columns)
        return self._decay[key]

    @staticmethod
    def _ln_survival(
        kernel: str, x: np.ndarray, exponent: float, melt: Melt, molar_mass: np.ndarray
    ) -> np.ndarray:
        """ln F (kernels defined by F) or ln mu (kernels of a tube survival) at x = t/tau."""
        if kernel == "exponential":
            return -x
        if kernel in ("reptation", "power-law"):
            at, table = _ln_table(kernel, melt.power_law_n)
            return np.interp(np.log(x), at, table)
        mu = get_kernel(kernel, melt).survival(x, exponent, melt, molar_mass)
        return np.log(np.maximum(mu, 1e-300))

    def survivals(
        self,
        kernel: str,
        exponent: float,
        plateau: float | None = None,
        version: Version | None = None,
    ) -> tuple[np.ndarray, np.ndarray]:
        """Times [s] (n_t,) and S_i(t) of each component (n_i, n_t)."""
        melt = self.melt_of(self.melt.plateau_modulus if plateau is None else plateau)
        t, columns = self._log_decay(kernel, exponent, melt)
        power = 1.0 / exponent if kernel in ("power-law", "exponential") else 1.0
        weights = self.own_weights if version is None else version.mass
        s = np.stack([np.exp(power * c) @ w for c, w in zip(columns, weights, strict=True)])
        move = 1.0
        if kernel != "fluctuation":
            one = np.ones(1)
            k = get_kernel(kernel, melt)
            move = float(k.constant(2.0, melt, one)[0] / k.constant(exponent, melt, one)[0])
        if version is not None and np.any(version.log_factor != 0.0):
            # longer chains relax later: what all components share moves the times, the rest
            # of each is a shift along them
            later = self.time_exponents * version.log_factor
            common = float(later.mean())
            move *= float(np.exp(common))
            x = np.log(t)
            for i, gap in enumerate(later - common):
                if abs(gap) > 1e-12:
                    at = np.clip(x - gap, x[0], x[-1])
                    s[i] = _cubic_rows(x, s[i : i + 1], at)[0]
        return t * move, s

    def rouse_parts(
        self, melt: Melt, version: Version | None = None
    ) -> tuple[np.ndarray, np.ndarray]:
        """Rouse modes of each component on common times: (n_r,) [s] and (n_i, n_r) [Pa]."""
        if not self.rouse:
            return np.empty(0), np.empty((len(self.components), 0))
        key = melt.plateau_modulus
        if key not in self._rouse:
            masses = np.concatenate([d.molar_mass for d in self.components])
            tau, each = rouse_on_lattice(masses, None, melt, 30.0 * self.omega_max)
            ends = np.cumsum([d.molar_mass.size for d in self.components])[:-1]
            chains = np.split(each, ends, axis=1)
            parts = [c @ w for c, w in zip(chains, self.own_weights, strict=True)]
            self._rouse[key] = (tau, np.stack(parts), chains)
        tau, own, chains = self._rouse[key]
        if version is None:
            return tau, own
        parts = [c @ w for c, w in zip(chains, version.mass, strict=True)]
        # tau_R goes with M^2 and the strength of a mode with 1/M; the times are common to all
        # components, and so is the factor here
        f = float(np.exp(np.mean(version.log_factor)))
        return tau * f**2, np.stack(parts) / f

    def response(
        self,
        fractions: np.ndarray,
        kernel: str,
        exponent: float,
        plateau: float | None = None,
        time_factor: float = 1.0,
        version: Version | None = None,
    ) -> Response:
        """Blends of fractions (k, n_i), rows summing to 1.

        Parameters
        ----------
        fractions : ndarray of shape (k, n_i)
        kernel : str
        exponent : float
        plateau : float, optional
            G_N [Pa]; the card's by default.
        time_factor : float
            Multiplies the viscosity law [-].
        version : Version, optional
            Other weights and molar masses of the components than their own.
        """
        phi = np.atleast_2d(np.asarray(fractions, dtype=float))
        melt = self.melt_of(self.melt.plateau_modulus if plateau is None else plateau)
        t, s = self.survivals(kernel, exponent, plateau, version)
        g = melt.plateau_modulus * np.maximum(phi @ s, 0.0) ** exponent
        tau_r, rouse = self.rouse_parts(melt, version)
        return from_modulus(t, g, tau_r, phi @ rouse).scaled(time_factor)


def from_modulus(
    times: np.ndarray,
    modulus: np.ndarray,
    rouse_tau: np.ndarray | None = None,
    rouse_strength: np.ndarray | None = None,
) -> Response:
    """A response from G(t) of rows (k, n_t) at times even in ln t."""
    decades = np.log10(times[-1] / times[0])
    modes = round(decades * MODES_PER_DECADE) + 1
    step = round(float(np.log(times[-1] / times[0]) / (times.size - 1)), 9)
    fit = _fit_matrix(times.size, step, modes)  # (modes, times)
    tau = np.geomspace(times[0], times[-1], modes)
    none = np.empty(0)
    # what is left at the longest times are numbers so small that arithmetic with them is slow
    modulus = np.where(modulus > 1e-40 * modulus.max(), modulus, 0.0)
    return Response(
        times,
        modulus,
        tau,
        modulus @ fit.T,
        none if rouse_tau is None else rouse_tau,
        np.empty((modulus.shape[0], 0)) if rouse_strength is None else rouse_strength,
    )


def inner_frequencies(low: float, high: float, melt: Melt) -> np.ndarray:
    """Frequencies for properties: from terminal flow to where the indexer's stress is reached."""
    top = max(high, min(HIGHEST_FREQUENCY, 1.0 / melt.equilibration_time))
    return log_grid(low, top, FREQUENCIES_PER_DECADE)
