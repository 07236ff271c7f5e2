"""A blend from its components' own measured spectra: no distribution, no card, no kernel.

With G_i(t) of component i from the positive spectrum of its sweep, the mixing rule reads
G_b = [sum phi_i G_i^(1/beta)]^beta; the plateau modulus cancels. What the components' sweeps do not
reach, the blend's prediction does not reach either.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from mwdlink.decisions.response import Response, even_times, from_modulus
from mwdlink.errors import NotConverged
from mwdlink.measurement.continuous import fit_continuous
from mwdlink.measurement.modes import fit_on_grid
from mwdlink.measurement.noise import noise_of
from mwdlink.measurement.spectrum_fit import REACHED_ETA0
from mwdlink.measurement.sweep import Sweep
from mwdlink.quantity import readonly
from mwdlink.relaxation.operator import log_grid


@dataclass(frozen=True, eq=False)
class Modes:
    """A measured spectrum and its noise.

    Attributes
    ----------
    tau : ndarray of shape (n,)
        [s]
    strength : ndarray of shape (1 + m, n)
        [Pa]; the first row is the fit, the others refits of perturbed data.
    noise : float
        Typical relative error of one modulus [-].
    omega : (float, float)
        Range measured [rad/s].
    eta0 : float
        sum g tau [Pa s].
    terminal : bool
        Whether the sweep reaches terminal flow, so that eta0 is measured and not a continuation.
    """

    tau: np.ndarray
    strength: np.ndarray
    noise: float
    omega: tuple[float, float]
    eta0: float
    terminal: bool

    def modulus(self, t: np.ndarray, rows: np.ndarray | slice = slice(None)) -> np.ndarray:
        """G(t) [Pa] of the chosen rows, shape (k, n_t)."""
        return self.strength[rows] @ np.exp(-np.outer(1.0 / self.tau, t))

    def moduli(self, omega: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Fitted G', G'' [Pa] of the first row."""
        x = np.outer(omega, self.tau)
        d = x / (1 + x * x)
        return (x * d) @ self.strength[0], d @ self.strength[0]


def modes_of(sweep: Sweep, members: int = 0, seed: int = 0, noise: float | None = None) -> Modes:
    """The positive spectrum of a sweep with perturbed refits.

    Raises
    ------
    InputError
        Too few points.
    """
    weights = noise_of(sweep, noise)
    curves = (sweep.omega, sweep.storage, sweep.loss, weights.sigma_storage, weights.sigma_loss)
    return _fitted(tuple(np.asarray(c).tobytes() for c in curves), members, seed)


@lru_cache(maxsize=24)
def _fitted(raw: tuple[bytes, ...], members: int, seed: int) -> Modes:
    """The fit itself, kept: moving a fraction to and fro asks for the same components again."""
    data = tuple(np.frombuffer(b, dtype=float) for b in raw)
    omega, storage, loss, sigma_storage, sigma_loss = data
    try:
        c = fit_continuous(*data, members=members, seed=seed)
        tau, strength = c.tau, np.vstack([c.H[None, :], c.members]) * c.step
    except NotConverged:
        tau = log_grid(0.05 / omega[-1], 10.0 / omega[0], 6)
        rng = np.random.default_rng(seed)
        rows = []
        for k in range(members + 1):
            scale = 0.0 if k == 0 else 1.0
            up = storage * np.exp(scale * sigma_storage * rng.standard_normal(omega.size))
            out = loss * np.exp(scale * sigma_loss * rng.standard_normal(omega.size))
            fit = fit_on_grid(omega, up, out, sigma_storage, sigma_loss, tau=tau)
            row = np.zeros(tau.size)
            row[np.searchsorted(tau, fit.tau)] = fit.strength
            rows.append(row)
        strength = np.array(rows)
    eta0 = float(strength[0] @ tau)
    x = omega[0] * tau
    d = x / (1 + x * x)
    lowest = float(np.hypot(strength[0] @ (x * d), strength[0] @ d) / omega[0])
    typical = float(np.median(np.concatenate([sigma_storage, sigma_loss])))
    return Modes(
        readonly(tau),
        readonly(strength),
        typical,
        (float(omega[0]), float(omega[-1])),
        eta0,
        eta0 / lowest <= REACHED_ETA0,
    )


class MeasuredBank:
    """Responses of blends from the components' measured spectra.

    Parameters
    ----------
    components : sequence of Modes
    """

    def __init__(self, components: Sequence[Modes]) -> None:
        self.components = tuple(components)
        slowest = max(float(m.tau[-1]) for m in self.components)
        fastest = min(float(m.tau[0]) for m in self.components)
        self.times = even_times(1e-3 * fastest, 200.0 * slowest)
        self._log = []
        for m in self.components:
            with np.errstate(divide="ignore"):
                self._log.append(np.log(np.maximum(m.modulus(self.times), 1e-280)))

    @property
    def members(self) -> int:
        """Perturbed refits that every component has."""
        return min(m.strength.shape[0] for m in self.components) - 1

    @property
    def omega(self) -> tuple[float, float]:
        """The range all components were measured in [rad/s]."""
        return (
            max(m.omega[0] for m in self.components),
            min(m.omega[1] for m in self.components),
        )

    @property
    def terminal(self) -> bool:
        """Whether every component's sweep reaches terminal flow."""
        return all(m.terminal for m in self.components)

    def roots(self, exponent: float, member: int | None = None) -> np.ndarray:
        """G_i^(1/beta) of each component, shape (n_i, n_t)."""
        row = 0 if member is None else 1 + member % max(self.members, 1)
        row = min(row, self.members)
        return np.stack([np.exp(log[row] / exponent) for log in self._log])

    def response(
        self, fractions: np.ndarray, exponent: float, member: int | None = None
    ) -> Response:
        """Blends of fractions (k, n_i), rows summing to 1."""
        phi = np.atleast_2d(np.asarray(fractions, dtype=float))
        g = (phi @ self.roots(exponent, member)) ** exponent
        return from_modulus(self.times, g)


def log_additive(fractions: np.ndarray, eta0: np.ndarray) -> np.ndarray:
    """Classical mixing of viscosities, ln eta = sum phi_i ln eta_i [Pa s], shape (k,)."""
    return np.exp(np.atleast_2d(fractions) @ np.log(eta0))


def root_additive(fractions: np.ndarray, eta0: np.ndarray, a: float) -> np.ndarray:
    """Classical mixing that adds Mw: eta^(1/a) = sum phi_i eta_i^(1/a) [Pa s], shape (k,)."""
    return (np.atleast_2d(fractions) @ eta0 ** (1.0 / a)) ** a


@dataclass(frozen=True, eq=False)
class Quadratic:
    """Exponent 2 and two components: every blend from three curves.

    G*_b = phi^2 G*_1 + (1-phi)^2 G*_2 + 2 phi (1-phi) G*_12, with G*_12 = 2 G*_half -
    (G*_1 + G*_2)/2. Rouse part and dilution are in it, being linear in phi.

    Attributes
    ----------
    omega : ndarray of shape (n,)
        [rad/s]
    storage, loss : ndarray of shape (3, n)
        Rows: pure 1, pure 2, cross term [Pa].
    eta0, second : ndarray of shape (3,)
        int G dt [Pa s] and int t G dt [Pa s^2] of the same three.
    """

    omega: np.ndarray
    storage: np.ndarray
    loss: np.ndarray
    eta0: np.ndarray
    second: np.ndarray

    @classmethod
    def of(cls, ends_and_half: Response, omega: np.ndarray) -> Quadratic:
        """From the responses of pure 1, pure 2 and the half-and-half blend at exponent 2."""
        mix = np.array([[1.0, 0.0, 0.0], [0.0, 1.0, 0.0], [-0.5, -0.5, 2.0]])
        storage, loss = ends_and_half.moduli(omega)
        eta0, Je0 = ends_and_half.terminal
        return cls(omega, mix @ storage, mix @ loss, mix @ eta0, mix @ (Je0 * eta0**2))

    @staticmethod
    def weights(first: np.ndarray) -> np.ndarray:
        """Weights of the three curves at fractions of component 1, shape (k, 3)."""
        p = np.atleast_1d(np.asarray(first, dtype=float))
        return np.stack([p * p, (1 - p) ** 2, 2 * p * (1 - p)], axis=1)

    def curves(self, first: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """G', G'' (k, n), eta0 and Je0 (k,) at fractions of component 1."""
        w = self.weights(first)
        eta0 = w @ self.eta0
        tiny = 1e-300
        return (
            np.maximum(w @ self.storage, tiny),
            np.maximum(w @ self.loss, tiny),
            eta0,
            w @ self.second / eta0**2,
        )
