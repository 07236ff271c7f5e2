"""How far a GPC's curve may be off, and curves that are off by that much.

One model serves every question that rests on a GPC table: `tail` weighs the rows with it, `predict`
and `blend` draw whole curves from it for their bands.
"""

from __future__ import annotations

RELATIVE_ERROR = 0.03
"""Error of a row as a part of itself [-] (assumed)."""

BASELINE_ERROR = 0.003
"""Error of a row as a part of the curve's peak [-] (assumed)."""

SIGNAL = 1e-3
"""The curve supports what stands above this part of its peak [-]."""

CALIBRATION_SPREAD = {"absolute": 0.01, "universal": 0.02, "equivalent": 0.05, "unstated": 0.05}
"""Error of ln M by what the molar masses are [-] (assumed; 0.05 recalled)."""
