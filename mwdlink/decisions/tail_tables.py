"""The tables of a tail's result, and what its intervals are made of."""

from __future__ import annotations

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.inversion import joint
from mwdlink.inversion.budget import variance_shares
from mwdlink.inversion.joint_ensemble import Joint
from mwdlink.measurement.sweep import Sweep
from mwdlink.quantity import quantiles


def budget(found: Joint, value: np.ndarray, nuisance: np.ndarray) -> dict[str, float]:
    """Shares of the variance of a quantity over members by source; empty with few members."""
    if value.size < 20:
        return {}
    shares = variance_shares(
        value - value.min() + 1e-9 if np.any(value <= 0) else value,
        found.kernel,
        nuisance[:, joint.EXPONENT],
        nuisance[:, joint.TIME],
        np.rint(np.log10(found.smoothing) * 10).astype(int) + 100 * found.tail_free + 500,
        np.zeros(value.size, dtype=int),
    )
    if not shares:
        return {}
    # the GPC's factor and baseline, and the level of the moduli, out of what was left as noise
    causes = nuisance[:, [joint.CALIBRATION, joint.BASELINE, joint.MODULUS]]
    causes = causes - causes.mean(axis=0)
    y = value - value.mean()
    held = causes.std(axis=0) > 1e-9
    explained = np.zeros(3)
    for i in np.flatnonzero(held):
        c = causes[:, i]
        explained[i] = float(c @ y) ** 2 / float(c @ c) / max(float(y @ y), 1e-300)
    explained = np.clip(explained - 1.0 / value.size, 0.0, None)
    left = shares.get("noise", 0.0)
    scale = min(1.0, left / max(explained.sum(), 1e-12))
    shares["gpc"] = float((explained[0] + explained[1]) * scale)
    shares["card"] = shares.get("card", 0.0) + float(explained[2] * scale)
    shares["noise"] = max(left - float(explained.sum() * scale), 0.0)
    return shares


def distribution_table(
    x: np.ndarray,
    nodes: np.ndarray,
    w: np.ndarray,
    alone: np.ndarray,
    centre: np.ndarray,
    level: float,
) -> dict[str, np.ndarray]:
    """Columns of distribution.csv: joint curve with its interval, GPC continuation."""
    h = float(x[1] - x[0])
    density = w[:, :-1] / h
    if w.shape[0] >= 5:
        q = [(1 - level) / 2, 0.5, (1 + level) / 2]
        low, middle, high = (
            np.array(v) for v in zip(*[quantiles(d, q) for d in density.T], strict=True)
        )
    else:
        middle = centre[:-1] / h
        low = high = np.full(middle.size, np.nan)
    return {
        "M [g/mol]": nodes,
        "dW/dlog10M": middle,
        "dW/dlog10M low": low,
        "dW/dlog10M high": high,
        "GPC continuation dW/dlog10M": np.median(alone, axis=0) / h,
    }


def gpc_table(gpc: Distribution, low: float, high: float) -> dict[str, np.ndarray]:
    """Columns of gpc_only.csv: the GPC curve over the range it was used in."""
    held = (gpc.molar_mass >= low * (1 - 1e-9)) & (gpc.molar_mass <= high * (1 + 1e-9))
    return {"M [g/mol]": gpc.molar_mass[held], "dW/dlog10M": gpc.density[held]}


def fit_table(found: Joint, sweep: Sweep) -> dict[str, np.ndarray]:
    """Columns of fit.csv: moduli as measured, fitted, and fitted without a tail."""
    n = len(sweep)
    leader = found.kernels[0]
    columns: dict[str, np.ndarray] = {
        "omega [rad/s]": sweep.omega,
        "G' [Pa]": sweep.storage,
        "G'' [Pa]": sweep.loss,
    }
    curves = {}
    for name, scan in (("model", leader.best), ("without tail", leader.smooth.best)):
        problem = leader.free.problem
        p = scan.nuisance
        log_y = problem.response.log_moduli(scan.w, p[joint.TIME], p[joint.EXPONENT])[0]
        curves[name] = np.exp(log_y + p[joint.MODULUS])
        columns[f"G' {name} [Pa]"] = curves[name][:n]
        columns[f"G'' {name} [Pa]"] = curves[name][n:]
    columns["G' residual [-]"] = np.log(sweep.storage / curves["model"][:n])
    columns["G'' residual [-]"] = np.log(sweep.loss / curves["model"][n:])
    return columns
