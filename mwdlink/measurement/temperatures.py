"""Sweeps sorted by temperature, steps of one temperature joined, noise pooled over them."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.measurement.noise import Weights, noise_of
from mwdlink.measurement.sweep import Sweep


def group_temperatures(
    sweeps: Sequence[Sweep], same_temperature: float = 1.0
) -> tuple[list[tuple[float, Sweep]], list[Caution]]:
    """Sweeps by temperature, those within `same_temperature` put together.

    Returns
    -------
    groups : list of (float, Sweep)
        Temperature [C], ascending, and the readings.
    notes : list of Caution

    Raises
    ------
    InputError
    """
    found: list[tuple[float, Sweep]] = []
    for s in sweeps:
        if s.temperature_C is None:
            raise InputError(
                f"the sweep {s.label or s.path or ''!r} has no temperature.",
                path=s.path,
                remedy="Give a column T [C], or a line 'Temperature: 190 C' above the table (in "
                "Python, temperature_C when it is read).",
            )
        found.append((s.temperature_C, s))
    found.sort(key=lambda pair: pair[0])
    clusters: list[list[tuple[float, Sweep]]] = []
    for pair in found:
        if clusters and pair[0] - clusters[-1][0][0] <= same_temperature:
            clusters[-1].append(pair)
        else:
            clusters.append([pair])
    if len(clusters) < 2:
        raise InputError(
            "a master curve needs sweeps at two temperatures or more, more than "
            f"{same_temperature:g} K apart.",
            remedy="Give more sweeps, or invert the single one as it is.",
        )
    groups, notes = [], []
    for cluster in clusters:
        T = [t for t, _ in cluster]
        if len(cluster) > 1:
            shown = ", ".join(f"{t:.4g}" for t in T)
            text = f"The steps at {shown} C were taken as one temperature, {np.mean(T):.4g} C."
            notes.append(Caution("temperatures_joined", text))
        joined = _joined([s for _, s in cluster], float(np.mean(T)))
        if len(joined) < 4:
            raise InputError(
                f"there are only {len(joined)} points at {np.mean(T):.4g} C.",
                path=joined.path,
                remedy="Leave this temperature out or measure at least four frequencies.",
            )
        groups.append((float(np.mean(T)), joined))
    return groups, notes


def _joined(cluster: list[Sweep], T: float) -> Sweep:
    if len(cluster) == 1:
        return cluster[0]

    def together(name: str) -> np.ndarray | None:
        columns = [getattr(s, name) for s in cluster]
        return None if any(c is None for c in columns) else np.concatenate(columns)

    sweep = Sweep.from_arrays(
        *(together(k) for k in ("omega", "storage", "loss")),
        sigma_storage=together("sigma_storage"),
        sigma_loss=together("sigma_loss"),
        rows=together("rows"),
        temperature_C=T,
        label=cluster[0].label,
        path=cluster[0].path,
    )
    own = merge_cautions(*(s.warnings for s in cluster))
    return sweep.with_(warnings=own)


def pooled_noise(parts: list[Sweep], noise: float | None) -> tuple[list[np.ndarray], list[Caution]]:
    """Relative errors of both moduli of each sweep, shape (2, n); estimates are pooled."""
    weights: list[Weights] = [noise_of(p, noise) for p in parts]
    estimated = [w for w in weights if w.source == "estimated"]
    pooled = float(np.sqrt(np.mean([w.typical**2 for w in estimated]))) if estimated else 0.0
    out, notes = [], []
    for p, w in zip(parts, weights, strict=True):
        if w.source != "estimated":
            out.append(np.vstack([w.sigma_storage, w.sigma_loss]))
            continue
        out.append(np.full((2, len(p)), pooled))
        estimate = w.estimate
        if estimate is not None and estimate.outliers:
            rows = [str(int(p.rows[i]) if p.rows is not None else i + 1) for i in estimate.outliers]
            text = (
                f"At {p.temperature_C:.4g} C the readings in row {', '.join(rows)} stand out from "
                "the others; they were kept."
            )
            notes.append(Caution("outliers", text))
    return out, notes
