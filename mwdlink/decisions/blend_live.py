"""What a page needs to let the reader move the fraction (see `mwdlink.report.blend_live`)."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from mwdlink.decisions.blend_compute import TERMINAL
from mwdlink.decisions.blend_routes import along, column_of
from mwdlink.quantity import to_plain

if TYPE_CHECKING:
    from mwdlink.decisions.blend_result import Blend

GRID = 41


def live_payload(blend: Blend) -> dict[str, Any] | None:
    """Curves, properties, band and target for two components; None otherwise."""
    if len(blend.components) != 2:
        return None
    c = blend.computed
    asked = np.asarray(blend.outputs.curves["sweep.csv"]["omega [rad/s]"])
    omega = asked if asked.size <= 90 else asked[:: int(np.ceil(asked.size / 90))]
    out: dict[str, Any] = {
        "components": list(blend.names),
        "fraction": float(blend.fractions[0]),
        "omega": omega,
    }
    if c.quadratic is not None:
        three = c.central.central(np.array([[1.0, 0.0], [0.0, 1.0], [0.5, 0.5]]))
        up, loss = three.moduli(omega)
        mix = np.array([[1.0, 0.0, 0.0], [0.0, 1.0, 0.0], [-0.5, -0.5, 2.0]])
        up, loss = mix @ up, mix @ loss
        out["mode"] = "quadratic"
        out["curves"] = {
            name: {"storage": up[i], "loss": loss[i]}
            for i, name in enumerate(("first", "second", "cross"))
        }
    else:
        phi = np.linspace(0.0, 1.0, GRID)
        up, loss = c.central.central(along(phi, blend.fractions)).moduli(omega)
        out["mode"] = "grid"
        out["curves"] = {"fraction": phi, "storage": up, "loss": loss}
    band = _band(blend, asked, omega)
    if band:
        out["band"] = band
    out["properties"] = _properties(blend)
    if blend.target is not None and blend.target.target.wanted is not None:
        out["target"] = {
            "key": blend.target.target.key,
            "wanted": blend.target.target.wanted,
            "fractions": [f.value for f in blend.target.fractions],
        }
    plain: dict[str, Any] = to_plain(out)
    return plain


def _band(blend: Blend, asked: np.ndarray, omega: np.ndarray) -> dict[str, Any]:
    """Factors on the central curve at the fraction asked for."""
    table = blend.outputs.curves["sweep.csv"]
    keep = np.isin(asked, omega)
    out: dict[str, Any] = {}
    for part, name, unit in (
        ("storage", "G'", "Pa"),
        ("loss", "G''", "Pa"),
        ("viscosity", "|eta*|", "Pa s"),
    ):
        centre = table[f"{name} [{unit}]"]
        low, high = table.get(f"{name} low [{unit}]"), table.get(f"{name} high [{unit}]")
        if low is None or high is None:
            continue
        out[part] = {"low": [(low / centre)[keep]], "high": [(high / centre)[keep]]}
    return {"fraction": [float(blend.fractions[0])], **out} if out else {}


def _properties(blend: Blend) -> list[dict[str, Any]]:
    m = blend.map
    # of sweeps that do not reach terminal flow these are lower bounds, and never shown without it
    bounds = () if blend.route == "distributions" or blend.computed.terminal else TERMINAL
    step = slice(None, None, 2)
    rows = []
    order = sorted(m.values, key=lambda k: (k != "eta0_Pa_s", not k.startswith("MFR")))
    for key in order:
        v = m.values[key]
        if not np.all(np.isfinite(v)):
            continue
        name, unit = column_of(key)
        row: dict[str, Any] = {
            "key": key,
            "label": name,
            "unit": "" if unit == "-" else unit,
            "kind": "grid",
            "fraction": m.first[step],
            "value": v[step],
            "at_least": key in bounds,
        }
        low, high = m.low.get(key), m.high.get(key)
        if low is not None and high is not None and np.all(np.isfinite(low + high)):
            row["low"], row["high"] = low[step], high[step]
        rows.append(row)
    return rows
