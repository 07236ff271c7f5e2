"""Tables, rows and cautions of an `Inversion`."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from mwdlink.chains.melt import Melt
from mwdlink.errors import Caution
from mwdlink.inversion.ensemble import Branch
from mwdlink.inversion.pool import Pool
from mwdlink.inversion.quantities import Cells
from mwdlink.measurement.sweep import Sweep
from mwdlink.quantity import Uncertain
from mwdlink.relaxation.validity import frequency_cautions

# a lambda this near the free end of the scan was chosen by the scan, not by the data
AT_END_ROUGH = 1


def fit_cautions(centre: Branch, method: str) -> tuple[Caution, ...]:
    scan = centre.scan
    if scan.smoothing.size > 1 and scan.best >= scan.smoothing.size - AT_END_ROUGH:
        return (
            Caution(
                "smoothing_at_end",
                "The smoothing chosen is the least of the scan: the data ask for more detail than "
                "the scan allows, or their noise is understated.",
            ),
        )
    return ()


def sweep_cautions(sweep: Any, melt: Melt) -> tuple[Caution, ...]:
    omega = getattr(sweep, "omega", None)
    return () if omega is None else frequency_cautions(float(np.max(omega)), melt)


def bound_cautions(
    averages: Mapping[str, Uncertain], outside: Mapping[str, Uncertain]
) -> tuple[Caution, ...]:
    out = []
    most = outside["above"].high or outside["above"].value or 0.0
    if averages["Mz_g_per_mol"].status == "lower_bound":
        out.append(
            Caution(
                "weight_above_window",
                f"Up to {100 * most:.2g} % of the weight is in chains too long to be sized: Mz "
                "(and Mw where so marked) are lower bounds. Long-chain branching or a second phase "
                "would look the same.",
            )
        )
    out.append(
        Caution(
            "branching_rival",
            "The reading takes linear chains. Long-chain branching changes the low-frequency "
            "end as a high-molar-mass tail does; a second temperature or the intrinsic viscosity "
            "would tell them apart.",
        )
    )
    return tuple(out)


def peak_row(peak: Any) -> dict[str, Any]:
    return dict(peak.to_dict())


def fit_table(sweep: Any, centre: Branch) -> dict[str, np.ndarray]:
    problem = centre.problem
    model = problem.forward.values(centre.fit.w)
    residual = problem.data - np.log(model)
    if isinstance(sweep, Sweep):
        n = len(sweep)
        return {
            "omega [rad/s]": sweep.omega,
            "G' [Pa]": sweep.storage,
            "G'' [Pa]": sweep.loss,
            "G' fit [Pa]": model[:n],
            "G'' fit [Pa]": model[n:],
            "G' residual [-]": residual[:n],
            "G'' residual [-]": residual[n:],
            "sigma' used [-]": problem.sigma[:n],
            "sigma'' used [-]": problem.sigma[n:],
        }
    frame = sweep.to_frame()
    first, second = list(frame.columns)[:2]
    return {
        first: frame[first].to_numpy(),
        second: frame[second].to_numpy(),
        f"fit {second}": model,
        "residual [-]": residual,
        "sigma used [-]": problem.sigma,
    }


def smoothing_table(centre: Branch) -> dict[str, np.ndarray]:
    scan = centre.scan
    if centre.curve is not None:
        return dict(centre.curve)
    return {
        "smoothing [-]": scan.smoothing,
        "chi2 per point [-]": np.array([f.chi2 for f in scan.fits]) / centre.problem.data.size,
        "roughness [-]": scan.roughness,
        "freedom [-]": scan.freedom,
        "log evidence [-]": scan.log_evidence,
        "weight [-]": scan.weights,
        "chosen": np.arange(scan.smoothing.size) == scan.best,
    }


def kernel_rows(
    branches: Sequence[Branch],
    allowed: Sequence[bool],
    low: float,
    high: float,
    pool: Pool | None,
    used: Sequence[Branch],
) -> tuple[dict[str, Any], ...]:
    rows = []
    for b, ok in zip(branches, allowed, strict=True):
        cells = Cells.make(b.problem.window.edges, b.fit.w)
        values = cells.averages()
        row: dict[str, Any] = {
            "kernel": b.kernel,
            "chi2_per_point": b.chi2_per_point,
            "admissible": bool(ok),
            "exponent": b.model.exponent,
            "Mw_g_per_mol": float(values["Mw"][0]),
            "Mz_g_per_mol": float(values["Mz"][0]),
            "Mw_within_window_g_per_mol": float(cells.mean_within(low, high)[0]),
            "Mw_low_g_per_mol": None,
            "Mw_high_g_per_mol": None,
        }
        if ok and pool is not None:
            parts = [c for c, u in zip(pool.cells, used, strict=True) if u.kernel == b.kernel]
            held = np.concatenate([c.averages()["Mw"] for c in parts])
            row["Mw_low_g_per_mol"], row["Mw_high_g_per_mol"] = (
                float(x) for x in np.quantile(held, [0.05, 0.95])
            )
        rows.append(row)
    return tuple(rows)


def member_table(
    pool: Pool | None, used: Sequence[Branch], low: float, high: float
) -> dict[str, np.ndarray]:
    if pool is None:
        return {}
    parts = [c.averages() for c in pool.cells]
    joined = {k: np.concatenate([p[k] for p in parts]) for k in parts[0]}
    return {
        "kernel": np.array([used[i].kernel for i in pool.branch]),
        "plateau modulus factor [-]": pool.plateau / 1000.0,
        "exponent [-]": pool.exponent,
        "time-law factor [-]": np.exp(pool.ln_time),
        "Mn [g/mol]": joined["Mn"],
        "Mw [g/mol]": joined["Mw"],
        "Mz [g/mol]": joined["Mz"],
        "Mw within window [g/mol]": pool.gather(lambda c: c.mean_within(low, high)),
        "weight above window [-]": pool.gather(lambda c: c.above(high)),
        "weight below window [-]": 1.0 - pool.gather(lambda c: c.above(low)),
    }
