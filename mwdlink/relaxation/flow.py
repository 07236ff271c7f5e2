"""Steady flow through the melt indexer: wall stress, flow integral, melt flow rate.

Geometry of ISO 1133-1 and ASTM D1238: die 2.095 mm x 8.000 mm, cylinder bore 9.55 mm, piston head
9.474 mm (recalled; piston published). Wall stress = load g R/(2 A L) without entrance correction,
which is an uncertainty to carry: the true wall stress is lower by some per cent.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from mwdlink.errors import InputError

DIE_RADIUS = 2.095e-3 / 2
DIE_LENGTH = 8.000e-3
BORE_DIAMETER = 9.55e-3
PISTON_DIAMETER = 9.474e-3
STANDARD_GRAVITY = 9.80665
# the share of the load that an orifice of this length may lose at its entrance (common practice
# for polyolefins in an L/D of about 4: a few to 20 per cent)
ENTRANCE_SHARE = 0.10
STANDARD_LOADS_KG = (2.16, 5.0, 21.6)


def wall_stress(load_kg: Any, area: str = "piston") -> Any:
    """Wall shear stress in the die [Pa].

    Parameters
    ----------
    load_kg : float or ndarray
        Total load on the piston [kg], > 0.
    area : str
        Which area carries the load: `piston` or `bore`.

    Examples
    --------
    >>> round(float(wall_stress(2.16, "bore"))), round(float(wall_stress(2.16)))
    (19361, 19673)
    """
    diameter = PISTON_DIAMETER if area == "piston" else BORE_DIAMETER
    pressure = np.asarray(load_kg, dtype=float) * STANDARD_GRAVITY / (np.pi * diameter**2 / 4)
    return pressure * DIE_RADIUS / (2 * DIE_LENGTH)


def volume_flow(viscosity: Callable[[np.ndarray], np.ndarray], stress: float) -> float:
    """Flow through the die [m3/s] at a wall stress [Pa].

    Q = (pi R^3/tau_w^3) int_0^tau_w tau^2 rate(tau) dtau, integrated over rate so that the flow
    curve need not be inverted: tau = eta(rate) rate.

    Parameters
    ----------
    viscosity : callable
        Shear rate [1/s] (ndarray) -> viscosity [Pa s].
    stress : float
        Wall stress [Pa], > 0.
    """
    # stress rises with rate; find the rates that span it, on a grid fine enough for 1e-5
    rate = np.geomspace(1e-8, 1e7, 1501)
    tau = np.asarray(viscosity(rate), dtype=float) * rate
    tau = np.maximum.accumulate(tau)
    if tau[0] > stress or tau[-1] < stress:
        raise InputError(
            f"the flow curve never reaches a wall stress of {stress:.3g} Pa between 1e-8 and "
            "1e7 1/s"
        )
    keep = np.concatenate([[True], np.diff(tau) > 0])
    rate, tau = rate[keep], tau[keep]
    wall_rate = float(np.exp(np.interp(np.log(stress), np.log(tau), np.log(rate))))
    below = tau < stress
    x = np.append(tau[below], stress)
    y = np.append(rate[below], wall_rate)
    f = x**3 * y  # integrand in d ln tau
    # the logarithmic mean: exact where the flow curve is a power law between two points
    ratio = np.log(f[1:] / f[:-1])
    mean = np.where(np.abs(ratio) > 1e-6, (f[1:] - f[:-1]) / np.where(ratio == 0, 1, ratio), f[1:])
    integral = float(np.sum(mean * np.diff(np.log(x))))
    # below the first point the melt is Newtonian: int tau^2 rate dtau = tau^3 rate/4
    integral += float(x[0] ** 3 * y[0] / 4.0)
    return float(np.pi * DIE_RADIUS**3 / stress**3 * integral)


def melt_flow_rate(flow: Any, load_kg: float, density_kg_m3: float, lost: float = 0.0) -> float:
    """Melt flow rate MFR [g/10 min] = 600 rho Q.

    Parameters
    ----------
    flow : Spectrum or callable
        A spectrum (its Cox-Merz flow curve is used), or rate [1/s] -> viscosity [Pa s].
    load_kg : float
        [kg]
    density_kg_m3 : float
        Density of the *melt* [kg/m3].
    lost : float
        Share of the load lost at the entrance [-], 0 <= lost < 1; 0 is the standard's own formula.

    Raises
    ------
    InputError
        If load or density is not positive.
    """
    if not (load_kg > 0 and density_kg_m3 > 0 and 0 <= lost < 1):
        raise InputError("a melt flow rate needs a positive load and a positive melt density")

    def viscosity(rate: np.ndarray) -> np.ndarray:
        return flow.flow_curve(rate)[0] if hasattr(flow, "flow_curve") else flow(rate)

    q = volume_flow(viscosity, float(wall_stress(load_kg)) * (1 - lost))
    return 600.0 * (density_kg_m3 / 1000.0) * (q * 1e6)


def apparent_rate(mfr: float, density_kg_m3: float) -> float:
    """Apparent shear rate in the die [1/s], 4 Q/(pi R^3) = 1.846 MFR/rho (rho in g/cm3)."""
    q = mfr / 600.0 / (density_kg_m3 / 1000.0) * 1e-6
    return 4 * q / (np.pi * DIE_RADIUS**3)
