"""Curves and numbers of a predicted melt with bands: what `predict` and `blend` write alike."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from mwdlink.decisions.ensemble import Draws, band, curve_band
from mwdlink.decisions.properties import INDEX_FREQUENCIES, Curves, properties_of
from mwdlink.quantity import Uncertain
from mwdlink.relaxation.flow import STANDARD_LOADS_KG
from mwdlink.relaxation.spectrum import Spectrum

Band = tuple[np.ndarray, np.ndarray]

FLOW_RESTS_ON = (
    "Steady flow and melt flow rate rest on the Cox-Merz rule; the central melt flow rate has no "
    "entrance correction, its band takes up to a fifth of the load as lost there."
)
"""What every predicted flow takes for granted; why a melt flow rate may lie at its band's end."""


@dataclass(frozen=True)
class Outputs:
    """Curves and numbers of one predicted melt, with bands: what `predict` and `blend` share.

    Attributes
    ----------
    curves : mapping of str to mapping of str to ndarray
        Table name to header to column, bands included.
    values : mapping of str to float or None
        Properties by name (see `properties.properties_of`).
    bands : mapping of str to Uncertain
        The same names; empty without members.
    """

    curves: Mapping[str, Mapping[str, np.ndarray]]
    values: Mapping[str, float | None]
    bands: Mapping[str, Uncertain] = field(default_factory=dict)

    def blocks(
        self, averages: Mapping[str, float], spread: Mapping[str, Uncertain]
    ) -> dict[str, Any]:
        """The keys `averages` to `indices` of a record, and `bands` in the same shape."""
        plain = _shape(dict(self.values) | dict(averages))
        out = dict(plain)
        if self.bands:
            out["bands"] = _shape(dict(self.bands) | dict(spread))
        else:
            out["bands"] = None
        return out


def _shape(values: Mapping[str, Any]) -> dict[str, Any]:
    averages = ("Mn_g_per_mol", "Mw_g_per_mol", "Mz_g_per_mol", "dispersity")
    crossing = {
        "omega_rad_per_s": values.get("crossover_omega_rad_per_s"),
        "G_Pa": values.get("crossover_G_Pa"),
    }
    flow = [
        {"load_kg": load, "MFR_g_per_10min": values.get(f"MFR_g_per_10min@{load:g}")}
        for load in STANDARD_LOADS_KG
    ]
    return {
        "averages": {k: values[k] for k in averages if k in values} or None,
        "terminal": {k: values.get(k) for k in ("eta0_Pa_s", "Je0_per_Pa", "mean_time_s")},
        "crossover": None if crossing["omega_rad_per_s"] is None else crossing,
        "melt_flow": [f for f in flow if f["MFR_g_per_10min"] is not None],
        "indices": {
            **{f"eta_{w:g}": values.get(f"viscosity_Pa_s@{w:g}") for w in INDEX_FREQUENCIES},
            "thinning_0.1_100": values.get("thinning_0.1_100"),
            "tan_delta_0.1": values.get("tan_delta@0.1"),
        },
    }


def stack(samples: Sequence[Curves]) -> Curves:
    """Rows of several sets of curves together."""
    return Curves(
        samples[0].omega,
        np.vstack([c.storage for c in samples]),
        np.vstack([c.loss for c in samples]),
        np.concatenate([c.eta0 for c in samples]),
        np.concatenate([c.Je0 for c in samples]),
    )


def bands_of(
    curves: Curves,
    density: float | None,
    draws: Draws,
    values: Mapping[str, float | None],
    extra: Mapping[str, np.ndarray] | None = None,
) -> dict[str, Uncertain]:
    """Interval and budget of every property of an ensemble."""
    out = {}
    for name, x in properties_of(curves, density, draws.lost).items():
        if values.get(name) is not None:
            out[name] = band(x, values[name], draws, extra)
    return out


class Recorder:
    """Collects the central curves and the members' and turns them into tables with bands."""

    def __init__(self, omega: np.ndarray) -> None:
        self.omega = omega
        self.time = 1.0 / omega[::-1]
        self.central: dict[str, np.ndarray] = {}
        self.samples: dict[str, list[np.ndarray]] = {}

    def _curves(self, r: Any, storage: np.ndarray, loss: np.ndarray) -> dict[str, np.ndarray]:
        t = self.time
        n = t.size
        fine = r.relaxation(np.concatenate([t, t * 0.9, t * 1.1]))[0]
        modulus, started = fine[:n], r.started(t)[0]
        eta0 = float(r.terminal[0][0])
        # -dG/dln t, to first order the density of modes at tau = t
        slope = np.maximum(fine[n : 2 * n] - fine[2 * n :], 1e-30)
        return {
            "G'": storage,
            "G''": loss,
            "|eta*|": np.hypot(storage, loss) / self.omega,
            "tan delta": loss / storage,
            "G": modulus,
            "eta+": started,
            "eta-/eta0": np.clip(1.0 - started / eta0, 1e-12, 1.0),
            "slope": slope,
        }

    def centre(self, r: Any, storage: np.ndarray, loss: np.ndarray) -> None:
        """Set the central melt, moduli given."""
        self.central = self._curves(r, storage, loss)

    def member(self, r: Any, offset: Any = None) -> None:
        """Add a member of the ensemble.

        `offset` takes frequencies and gives what to add to ln G' and ln G'' there.
        """
        storage, loss = r.moduli(self.omega)
        up, out = storage[0], loss[0]
        if offset is not None:
            a, b = offset(self.omega)
            up, out = up * np.exp(a), out * np.exp(b)
        found = self._curves(r, up, out)
        if offset is not None:
            a, b = offset(1.0 / self.time)
            for name in ("G", "slope"):
                found[name] = found[name] * np.exp(a)
            found["eta+"] = found["eta+"] * np.exp(b)
        for k, v in found.items():
            self.samples.setdefault(k, []).append(v)

    @property
    def bands(self) -> dict[str, Band]:
        """Low and high of every curve; empty without members."""
        return {k: curve_band(np.array(v), self.central[k]) for k, v in self.samples.items()}

    def tables(self, spectrum: Spectrum) -> dict[str, dict[str, np.ndarray]]:
        """Columns by table and header."""
        bands = self.bands
        seen = self.central["G"] > 1e-12 * self.central["G"].max()

        def columns(*pairs: tuple[str, str], mask: Any = slice(None)) -> dict[str, np.ndarray]:
            out = {}
            for name, unit in pairs:
                out[f"{name} [{unit}]"] = self.central[name][mask]
                if name in bands:
                    out[f"{name} low [{unit}]"] = bands[name][0][mask]
                    out[f"{name} high [{unit}]"] = bands[name][1][mask]
            return out

        sweep = {"omega [rad/s]": self.omega} | columns(
            ("G'", "Pa"), ("G''", "Pa"), ("|eta*|", "Pa s"), ("tan delta", "-")
        )
        relaxation = {"t [s]": self.time[seen]} | columns(
            ("G", "Pa"), ("eta+", "Pa s"), ("eta-/eta0", "-"), mask=seen
        )
        eta = spectrum.flow_curve(self.omega)[0]
        flow = {"rate [1/s]": self.omega, "eta [Pa s]": eta}
        modes = {"tau [s]": spectrum.tau, "g [Pa]": spectrum.strength}
        if bands:
            share = eta / self.central["|eta*|"]
            low, high = bands["|eta*|"]
            flow |= {
                "eta low [Pa s]": np.minimum(low * share, eta),
                "eta high [Pa s]": np.maximum(high * share, eta),
            }
            modes |= self._mode_band(spectrum, *bands["slope"])
        return {
            "sweep.csv": sweep,
            "spectrum.csv": modes,
            "relaxation.csv": relaxation,
            "flow.csv": flow,
        }

    def _mode_band(self, s: Spectrum, low: np.ndarray, high: np.ndarray) -> dict[str, np.ndarray]:
        # single modes have no meaning of their own; their density has: its relative band is that
        # of -dG/dln t at t = tau
        x, c = np.log(self.time), self.central["slope"]
        seen = c > 1e-12 * c.max()
        at = np.log(s.tau)
        down = np.interp(at, x[seen], (low / c)[seen])
        up = np.interp(at, x[seen], (high / c)[seen])
        return {"g low [Pa]": s.strength * down, "g high [Pa]": s.strength * up}


def frames(outputs: Outputs) -> dict[str, Any]:
    """The tables as pandas DataFrames."""
    import pandas as pd

    return {name: pd.DataFrame(dict(columns)) for name, columns in outputs.curves.items()}


def trimmed(s: Spectrum) -> Spectrum:
    """Without modes that carry less than 1e-9 of the modulus, the viscosity and the compliance."""
    keep = np.zeros(s.tau.size, dtype=bool)
    for power in (0, 1, 2):
        part = s.strength * s.tau**power
        keep |= part > 1e-9 * part.sum()
    return Spectrum(s.tau[keep], s.strength[keep])


def quoted(q: Any, unit: str) -> str:
    """`1.2e4 Pa s (0.9e4 to 1.5e4)` of a number or an Uncertain."""
    if isinstance(q, Uncertain):
        if q.value is None:
            return "unknown"
        text = f"{q.value:.3g} {unit}"
        if q.low is not None and q.high is not None and q.high > q.low:
            text += f" ({q.low:.3g} to {q.high:.3g}, {100 * q.level:.0f} % interval)"
        return text
    return "unknown" if q is None else f"{float(q):.3g} {unit}"
