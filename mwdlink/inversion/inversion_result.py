"""The result of an inversion: what was found, how sure, and what the data cannot say."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, ClassVar

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.errors import Caution
from mwdlink.quantity import Uncertain
from mwdlink.result import Result


@dataclass(frozen=True, eq=False)
class Inversion(Result):
    """A distribution read from rheology.

    Attributes
    ----------
    molar_mass, density, density_low, density_high : ndarray of shape (n,)
        M [g/mol], dW/dlog10 M and its interval.
    distribution : Distribution
        The weight on the nodes alone (lumps left out), normalised.
    averages : mapping of str to Uncertain
        `Mn_g_per_mol`, `Mw_g_per_mol`, `Mz_g_per_mol`, `dispersity`, `Mw_within_window_g_per_mol`.
    window : tuple of float
        Lowest and highest molar mass the frequencies support [g/mol].
    outside : mapping of str to Uncertain
        Weight fraction `above` and `below` the window.
    above : tuple of (float, Uncertain)
        Weight fraction above each molar mass asked for.
    fit : mapping
        chi2_per_point, points, smoothing, method, converged.
    fit_table, smoothing_table : mapping of str to ndarray
        Columns of fit.csv and smoothing.csv.
    kernels : tuple of mapping
    peaks : tuple of mapping or None
    cross_check : mapping or None
    advice : tuple of str or None
    members : mapping of str to ndarray
        Columns of members.csv.
    """

    command: ClassVar[str] = "invert"
    main_table: ClassVar[str] = "distribution.csv"

    molar_mass: np.ndarray
    density: np.ndarray
    density_low: np.ndarray | None
    density_high: np.ndarray | None
    distribution: Distribution
    averages: Mapping[str, Uncertain]
    window: tuple[float, float]
    outside: Mapping[str, Uncertain]
    above: tuple[tuple[float, Uncertain], ...]
    fit: Mapping[str, Any]
    fit_table: Mapping[str, np.ndarray]
    smoothing_table: Mapping[str, np.ndarray]
    kernels: tuple[Mapping[str, Any], ...]
    model: Mapping[str, Any]
    polymer: Mapping[str, Any]
    seed: int
    noise: Mapping[str, Any]
    exponent: Uncertain | None = None
    peaks: tuple[Mapping[str, Any], ...] | None = None
    cross_check: Mapping[str, Any] | None = None
    advice: tuple[str, ...] | None = None
    members: Mapping[str, np.ndarray] = field(default_factory=dict)
    time_law_scatter_decades: float = 0.0
    warnings: tuple[Caution, ...] = ()

    def payload(self) -> dict[str, Any]:
        return {
            "polymer": dict(self.polymer),
            "model": dict(self.model),
            "seed": self.seed,
            "averages": dict(self.averages),
            "window": {"M_low_g_per_mol": self.window[0], "M_high_g_per_mol": self.window[1]},
            "outside_window": {k: {"fraction": v} for k, v in self.outside.items()},
            "above": [{"M_g_per_mol": m, "fraction": v} for m, v in self.above],
            "fit": dict(self.fit),
            "noise": dict(self.noise),
            "kernels": [dict(k) for k in self.kernels],
            "exponent": self.exponent,
            "cross_check": self.cross_check,
            "peaks": None if self.peaks is None else [dict(p) for p in self.peaks],
            "advice": None if self.advice is None else list(self.advice),
        }

    def tables(self) -> dict[str, Any]:
        import pandas as pd

        columns = {"M [g/mol]": self.molar_mass, "dW/dlog10M": self.density}
        if self.density_low is not None and self.density_high is not None:
            columns["dW/dlog10M low"] = self.density_low
            columns["dW/dlog10M high"] = self.density_high
        out = {
            "distribution.csv": pd.DataFrame(columns),
            "fit.csv": pd.DataFrame(dict(self.fit_table)),
            "smoothing.csv": pd.DataFrame(dict(self.smoothing_table)),
        }
        if self.members:
            out["members.csv"] = pd.DataFrame(dict(self.members))
        return out

    # -- words --------------------------------------------------------------------------------
    def answer(self) -> str:
        mw = self.averages["Mw_g_per_mol"]
        beyond = self.outside["above"]
        head = {
            "lower_bound": "Mw is at least",
            "upper_bound": "Mw is at most",
            "assumed": "Mw is not determined by these data; the assumed shape gives",
        }.get(mw.status, "Mw is")
        text = f"{head} {_g(mw.value)} g/mol{interval_text(mw)}"
        return (
            f"{text}; {percent(beyond)} of the weight lies above {_g(self.window[1])} g/mol, "
            "the longest chains these frequencies can size."
        )

    def paragraph(self) -> str:
        used = [k["kernel"] for k in self.kernels if k["admissible"]]
        out = [self.answer()]
        within = self.averages["Mw_within_window_g_per_mol"]
        out.append(
            f"Within the window {_g(self.window[0])} to {_g(self.window[1])} g/mol the mean molar "
            f"mass is {_g(within.value)} g/mol{interval_text(within)}."
        )
        out.append(
            f"Read with the mixing rule and the kernel{'s' if len(used) > 1 else ''} "
            f"{', '.join(used)} for {self.polymer.get('title', 'this polymer')}; "
            f"the fit leaves chi2 of {self.fit['chi2_per_point']:.2f} per point."
        )
        for m, value in self.above:
            out.append(f"Above {_g(m)} g/mol: {percent(value)}{interval_text(value, 100, ' %')}.")
        return " ".join(out)

    def cannot_say(self) -> tuple[str, ...]:
        names = {
            "Mn_g_per_mol": "Mn",
            "Mw_g_per_mol": "Mw",
            "Mz_g_per_mol": "Mz",
            "dispersity": "the dispersity",
        }
        out = []
        for key, name in names.items():
            status = self.averages[key].status
            start = name[0].upper() + name[1:]
            if status == "lower_bound":
                out.append(
                    f"{start} is a lower bound: chains too long for these frequencies carry "
                    "weight of unknown length."
                )
            elif status == "upper_bound":
                out.append(f"{start} is an upper bound: chains too short to see are in the melt.")
            elif status == "assumed":
                out.append(f"{start} is assumed, not measured: the prior shape fixes it.")
        out.append(
            "Long-chain branching and a second phase change the low frequencies as a "
            "high-molar-mass tail does; one sweep at one temperature cannot tell them apart."
        )
        return tuple(out)


def interval_text(u: Uncertain, scale: float = 1.0, unit: str = "") -> str:
    """' (90 %: a to b)', or nothing without an interval."""
    if u.low is None or u.high is None:
        return ""
    return f" ({100 * u.level:.0f} %: {_g(u.low * scale)} to {_g(u.high * scale)}{unit})"


def percent(u: Uncertain) -> str:
    """A weight fraction in words, bounds as bounds."""
    if u.value is None:
        return "an unknown part"
    if u.status == "upper_bound" and u.high is not None:
        return f"less than {100 * u.high:.2g} %"
    if u.status == "lower_bound" and u.low is not None:
        return f"more than {100 * u.low:.2g} %"
    return f"{100 * u.value:.2g} %"


def _g(x: float | None) -> str:
    """Three digits, powers of ten written 1.16e5."""
    if x is None:
        return "unknown"
    text = f"{x:.3g}"
    if "e" in text:
        digits, power = text.split("e")
        text = f"{digits}e{int(power)}"
    return text
