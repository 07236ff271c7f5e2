"""The card that `calibrate` writes: the old one with the fitted numbers in place."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from mwdlink.chains.melt import Melt
from mwdlink.decisions.calibrate_fit import Fitted, Sample, changed
from mwdlink.decisions.components import Study
from mwdlink.decisions.trust import toml_text

WIDENED = 1.645
"""From a standard error to half a 90 % interval."""


def scatter_of(f: Fitted, samples: Sequence[Sample]) -> float | None:
    """Scatter of the samples about the law [decades]."""
    n = len(samples)
    if n < 3:
        return None
    return float(np.sqrt(np.sum(f.shifts**2) / (n - 2)) / np.log(10.0))


def fitted_card(
    study: Study,
    f: Fitted,
    spread: np.ndarray,
    melt: Melt,
    pivot: float,
    kept: Mapping[str, str],
    samples: Sequence[Sample],
    masses: np.ndarray,
) -> dict[str, Any]:
    """The old card with the fitted numbers in place, status `fitted` and the data's names."""
    card: dict[str, Any] = {}
    for section, block in study.polymer.to_dict().items():
        card[section] = dict(block) if isinstance(block, Mapping) else block
    card["name"] = f"{study.polymer.name}-own"
    card["title"] = f"{study.polymer.title}, fitted to own samples"
    source = "fitted to " + ", ".join(s.name for s in samples)

    def put(section: str, key: str, value: Any) -> None:
        block = card.setdefault(section, {})
        block[key] = value
        block[f"{key}_status"], block[f"{key}_source"] = "fitted", source

    def drop(section: str, key: str) -> None:
        for tail in ("", "_status", "_source"):
            card.get(section, {}).pop(key + tail, None)

    new = changed(melt, f.values, pivot)
    own = study.polymer
    if "level" not in kept or "exponent" not in kept:
        # the coefficient at the card's own temperature: times and moduli shift back
        factor = new.law_coefficient / (melt.a_T * melt.b_T)
        put("viscosity", "coefficient", float(factor))
        if "exponent" not in kept:
            put("viscosity", "exponent", float(new.law_exponent))
            put("viscosity", "range_g_per_mol", [float(masses.min()), float(masses.max())])
        scatter = scatter_of(f, samples)
        error = float(spread[0] / np.log(10.0))
        put("viscosity", "scatter_decades", max(scatter or 0.0, error, 0.02))
    drop("network", "molar_mass_g_per_mol")
    if "plateau_modulus" not in kept:
        g = float(own.get("network.plateau_modulus_Pa") * np.exp(f.values[2]))
        put("network", "plateau_modulus_Pa", g)
        s = WIDENED * float(spread[2])
        put("network", "plateau_modulus_range_Pa", [g * np.exp(-s), g * np.exp(s)])
        drop("network", "plateau_modulus_disputed_Pa")
        # a strand's friction stands: tau_e goes with the square of its length
        tau_e = card.get("network", {}).get("equilibration_time_s")
        if tau_e is not None and card["network"].get("equilibration_time_s_status") != "computed":
            put("network", "equilibration_time_s", tau_e * float(np.exp(f.values[0])))
            card["network"]["equilibration_time_s"] *= float(np.exp(-2.0 * f.values[2]))
            drop("network", "equilibration_time_molar_mass_g_per_mol")
    if card.get("network", {}).get("equilibration_time_s_status") == "computed":
        drop("network", "equilibration_time_s")
    if "mixing_exponent" not in kept:
        beta, s = float(f.values[3]), WIDENED * float(spread[3])
        put("kernel", "mixing_exponent", beta)
        put("kernel", "mixing_exponent_range", [max(beta - s, 1.0), beta + s])
    for block in card.values():
        if isinstance(block, dict):
            for key in [k for k, v in block.items() if k.endswith("_status") and v == "assumed"]:
                name = key.removesuffix("_status")
                for tail in ("", "_status", "_source"):
                    block.pop(name + tail, None)
    return {k: v for k, v in card.items() if not (isinstance(v, dict) and not v)}


def card_toml(card: Mapping[str, Any]) -> str:
    """Text of card.toml."""
    return "# Written by `mwdlink calibrate`.\n" + toml_text(card)
