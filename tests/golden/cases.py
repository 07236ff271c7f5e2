"""Ten cases whose numbers are kept: from the shipped example and the built-in cards."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import mwdlink
from mwdlink.chains import families
from mwdlink.chains.polymer import builtin
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

DATA = Path(__file__).parents[2] / "examples" / "netting"
KEPT = Path(__file__).parent / "kept.json"
Numbers = dict[str, float]


def _melt(polymer: str, kernel: str, exponent: float, Mw: float, dispersity: float) -> Numbers:
    r = Relaxation(
        families.lognormal(Mw, dispersity), builtin(polymer).melt(), Model(kernel, exponent)
    )
    storage, loss = r.moduli([0.1, 10.0])
    return {
        "eta0": r.zero_shear_viscosity,
        "Je0": r.recoverable_compliance,
        "G' 0.1": float(storage[0]),
        "G'' 10": float(loss[1]),
    }


def _inverted(name: str, **options: object) -> Numbers:
    sweep = mwdlink.read_sweep(DATA / name)
    r = mwdlink.invert(sweep, builtin("hdpe"), members=0, above=(5e5,), noise=0.02, **options)
    return {
        "Mw within": r.averages["Mw_within_window_g_per_mol"].value,
        "above 5e5": r.above[0][1].value,
        "chi2": r.fit["chi2_per_point"],
    }


def _distribution() -> Numbers:
    d = mwdlink.read_distribution(DATA / "tarn-gpc.csv", calibration="absolute")
    return {"Mn": d.Mn, "Mw": d.Mw, "Mz": d.Mz, "above 5e5": d.weight_above(5e5)}


def _spectrum() -> Numbers:
    r = mwdlink.fit_spectrum(mwdlink.read_sweep(DATA / "fell-190.csv"), members=0, noise=0.02)
    storage, loss = r.spectrum.moduli([0.1, 10.0])
    return {"G' 0.1": float(storage[0]), "G'' 10": float(loss[1])}


def _predicted() -> Numbers:
    d = mwdlink.read_distribution(DATA / "fell-gpc.csv", calibration="absolute")
    r = mwdlink.predict(d, builtin("hdpe"), members=0).to_dict()
    return {
        "eta0": r["terminal"]["eta0_Pa_s"],
        "crossover": r["crossover"]["omega_rad_per_s"],
        "MFR 2.16": r["melt_flow"][0]["MFR_g_per_10min"],
    }


CASES: dict[str, Callable[[], Numbers]] = {
    "hdpe power-law": lambda: _melt("hdpe", "power-law", 2.0, 1.2e5, 4.0),
    "hdpe exponential": lambda: _melt("hdpe", "exponential", 2.0, 1.2e5, 4.0),
    "polybutadiene reptation 2.2": lambda: _melt("polybutadiene", "reptation", 2.2, 1.5e5, 1.05),
    "polystyrene power-law": lambda: _melt("polystyrene", "power-law", 2.0, 3e5, 2.0),
    "GPC table": _distribution,
    "predict": _predicted,
    "spectrum": _spectrum,
    "invert Fell": lambda: _inverted("fell-190.csv", kernels=["power-law"], exponent=2.0),
    "invert the lot": lambda: _inverted("lot-190.csv", kernels=["reptation"], exponent=2.0),
    "invert Tarn, tikhonov": lambda: _inverted(
        "tarn-190.csv", kernels=["power-law"], exponent=2.0, method="tikhonov"
    ),
}
# relative; closed forms and quadratures to many digits, minima as far as their stopping rule goes
TOLERANCE = {"invert Fell": 3e-3, "invert the lot": 3e-3, "invert Tarn, tikhonov": 1e-2}
DEFAULT_TOLERANCE = 1e-6
LOOSER = {"spectrum": 1e-4, "predict": 1e-5}


def tolerance(name: str) -> float:
    """Relative tolerance of a case."""
    return TOLERANCE.get(name, LOOSER.get(name, DEFAULT_TOLERANCE))
