"""Properties a plant or a sheet asks for, from many curves at once.

Everything works on rows: k melts (members of an ensemble, fractions of a blend) on one list of
frequencies that is even in ln omega.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from mwdlink.relaxation.flow import DIE_RADIUS, STANDARD_LOADS_KG, wall_stress

INDEX_FREQUENCIES = (0.1, 1.0, 10.0, 100.0)


@dataclass(frozen=True, eq=False)
class Curves:
    """Linear response of k melts.

    Attributes
    ----------
    omega : ndarray of shape (n,)
        Even in ln omega [rad/s].
    storage, loss : ndarray of shape (k, n)
        [Pa], > 0.
    eta0, Je0 : ndarray of shape (k,)
        [Pa s], [1/Pa]
    """

    omega: np.ndarray
    storage: np.ndarray
    loss: np.ndarray
    eta0: np.ndarray
    Je0: np.ndarray

    def __len__(self) -> int:
        return int(self.eta0.size)

    @property
    def viscosity(self) -> np.ndarray:
        """|eta*| [Pa s], shape (k, n)."""
        return np.hypot(self.storage, self.loss) / self.omega

    def at(self, rows: np.ndarray, omega: float) -> np.ndarray:
        """A quantity of `rows` (k, n), > 0, at one frequency [rad/s]: cubic in the logarithms."""
        return np.exp(cubic_at(np.log(self.omega), np.log(rows), np.log(omega)))


def cubic_at(x: np.ndarray, y: np.ndarray, at: float) -> np.ndarray:
    """Four-point Lagrange interpolation of rows y (k, n) over an even x (n,) at one place, (k,)."""
    h = x[1] - x[0]
    i = int(np.clip(np.floor((at - x[0]) / h) - 1, 0, x.size - 4))
    u = (at - x[i]) / h
    c = np.array(
        [
            -(u - 1) * (u - 2) * (u - 3) / 6,
            u * (u - 2) * (u - 3) / 2,
            -u * (u - 1) * (u - 3) / 2,
            u * (u - 1) * (u - 2) / 6,
        ]
    )
    return np.asarray(y)[:, i : i + 4] @ c


def crossovers(curves: Curves) -> tuple[np.ndarray, np.ndarray]:
    """Lowest crossing of G' and G'' going up: omega [rad/s] and G [Pa], NaN where there is none."""
    gap = np.log(curves.storage / curves.loss)
    up = (gap[:, :-1] < 0) & (gap[:, 1:] >= 0)
    has = up.any(axis=1)
    cell = np.argmax(up, axis=1)
    i = np.clip(cell, 1, gap.shape[1] - 3)
    row = np.arange(len(curves))
    g = np.stack([gap[row, i + j] for j in (-1, 0, 1, 2)], axis=1)
    # the zero of the cubic through four points: the secant's guess, then Newton, both within the
    # cell of the crossing, which at either end of the curve is not the middle one of the three
    start = 1.0 + (cell - i)
    a, b = (gap[row, np.minimum(cell + j, gap.shape[1] - 1)] for j in (0, 1))
    u = start + a / np.where(a == b, 1.0, a - b)
    for _ in range(4):
        c, d = _lagrange(u)
        value, slope = np.sum(c * g, axis=1), np.sum(d * g, axis=1)
        step = value / np.where(np.abs(slope) < 1e-12, 1.0, slope)
        u = np.clip(u - step, start - 0.1, start + 1.1)
    c, _ = _lagrange(u)
    x = np.log(curves.omega)
    h = x[1] - x[0]
    level = np.stack([np.log(curves.storage)[row, i + j] for j in (-1, 0, 1, 2)], axis=1)
    omega = np.where(has, np.exp(x[i - 1] + u * h), np.nan)
    return omega, np.where(has, np.exp(np.sum(c * level, axis=1)), np.nan)


def _lagrange(u: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Weights of four even points at 0, 1, 2, 3 and their derivatives, shape (k, 4) each."""
    value = np.stack(
        [
            -(u - 1) * (u - 2) * (u - 3) / 6,
            u * (u - 2) * (u - 3) / 2,
            -u * (u - 1) * (u - 3) / 2,
            u * (u - 1) * (u - 2) / 6,
        ],
        axis=1,
    )
    slope = np.stack(
        [
            -(3 * u * u - 12 * u + 11) / 6,
            (3 * u * u - 10 * u + 6) / 2,
            -(3 * u * u - 8 * u + 3) / 2,
            (3 * u * u - 6 * u + 2) / 6,
        ],
        axis=1,
    )
    return value, slope


def melt_flow_rates(
    curves: Curves, load_kg: float, density_kg_m3: float, lost: np.ndarray | float = 0.0
) -> np.ndarray:
    """Melt flow rate [g/10 min] of each melt by Cox-Merz, shape (k,); NaN where out of reach.

    Between two frequencies the integrand is taken as a power of the stress, which it nearly is:
    far fewer points than a trapezoid would need.

    Parameters
    ----------
    curves : Curves
        From terminal flow upwards.
    load_kg : float
    density_kg_m3 : float
        Of the melt.
    lost : float or ndarray of shape (k,)
        Share of the load lost at the entrance [-].
    """
    stress = float(wall_stress(load_kg)) * (1.0 - np.broadcast_to(lost, (len(curves),)))
    rate = curves.omega
    x = np.log(np.maximum.accumulate(np.hypot(curves.storage, curves.loss), axis=1))
    f = np.exp(3.0 * x) * rate  # tau^3 rate, per d ln tau
    piece = _log_mean(f[:, :-1], f[:, 1:]) * np.diff(x, axis=1)
    below = np.concatenate([f[:, :1] / 4.0, piece], axis=1).cumsum(axis=1)
    target = np.log(stress)
    count = np.sum(x < target[:, None], axis=1)
    reached = (count > 0) & (count < rate.size)
    i = np.clip(count - 1, 0, rate.size - 2)
    row = np.arange(len(curves))
    step = np.maximum(x[row, i + 1] - x[row, i], 1e-12)
    share = (target - x[row, i]) / step
    wall = np.exp(np.log(rate[i]) + share * np.log(rate[i + 1] / rate[i]))
    end = stress**3 * wall
    integral = below[row, i] + _log_mean(f[row, i], end) * (target - x[row, i])
    q = np.pi * DIE_RADIUS**3 / stress**3 * integral
    return np.where(reached, 600.0 * density_kg_m3 / 1000.0 * q * 1e6, np.nan)


def _log_mean(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    tiny = 1e-300
    r = np.log(np.maximum(b, tiny) / np.maximum(a, tiny))
    small = np.abs(r) < 1e-8
    return np.where(small, 0.5 * (a + b), (b - a) / np.where(small, 1.0, r))


def properties_of(
    curves: Curves,
    density_kg_m3: float | None,
    lost: np.ndarray | float = 0.0,
    loads: Sequence[float] = STANDARD_LOADS_KG,
    frequencies: Sequence[float] = INDEX_FREQUENCIES,
) -> dict[str, np.ndarray]:
    """All properties of each melt, shape (k,) each, by the names that targets use.

    `eta0_Pa_s`, `Je0_per_Pa`, `mean_time_s`, `crossover_omega_rad_per_s`, `crossover_G_Pa`,
    `MFR_g_per_10min@LOAD`, `viscosity_Pa_s@OMEGA`, `tan_delta@OMEGA`, `thinning_0.1_100`. What
    lies outside the frequencies of the curves is NaN.
    """
    out = {
        "eta0_Pa_s": curves.eta0,
        "Je0_per_Pa": curves.Je0,
        "mean_time_s": curves.eta0 * curves.Je0,
    }
    out["crossover_omega_rad_per_s"], out["crossover_G_Pa"] = crossovers(curves)
    if density_kg_m3 is not None:
        for load in loads:
            out[f"MFR_g_per_10min@{load:g}"] = melt_flow_rates(curves, load, density_kg_m3, lost)
    viscosity, tan_delta = curves.viscosity, curves.loss / curves.storage
    lowest, highest = curves.omega[0] * (1 - 1e-9), curves.omega[-1] * (1 + 1e-9)
    nothing = np.full(len(curves), np.nan)
    for w in frequencies:
        inside = lowest <= w <= highest
        out[f"viscosity_Pa_s@{w:g}"] = curves.at(viscosity, w) if inside else nothing
        out[f"tan_delta@{w:g}"] = curves.at(tan_delta, w) if inside else nothing
    first, last = f"viscosity_Pa_s@{0.1:g}", f"viscosity_Pa_s@{100.0:g}"
    if first in out and last in out:
        out["thinning_0.1_100"] = out[first] / out[last]
    return out
