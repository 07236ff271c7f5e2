"""Made-up lots for the tests of a batch, and settings that make one quick to invert."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from mwdlink.chains.families import lognormal
from mwdlink.chains.polymer import builtin
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

# one kernel, exponent and smoothing fixed: a few hundredths of a second an input
QUICK: dict[str, Any] = {
    "kernels": ("power-law",),
    "exponent": 2.0,
    "smoothing": 1e-2,
    "members": 0,
    "noise": 0.02,
}
QUICK_OPTIONS = (
    "--polymer hdpe --kernel power-law --exponent 2 --smoothing 1e-2 --members 0 --noise 0.02"
).split()


def sweep_table(Mw: float, rng: np.random.Generator, factor: float = 1.0) -> pd.DataFrame:
    """A sweep of a log-normal melt with 2 % noise, at 190 C."""
    omega = np.geomspace(1e-2, 1e2, 13)
    storage, loss = Relaxation(lognormal(Mw, 4.0), builtin("hdpe").melt(190.0), Model()).moduli(
        omega
    )
    noise = factor * (1 + 0.02 * rng.standard_normal((2, omega.size)))
    return pd.DataFrame(
        {
            "T [C]": 190.0,
            "omega [rad/s]": omega,
            "G' [Pa]": storage * noise[0],
            "G'' [Pa]": loss * noise[1],
        }
    )


def write_lots(folder: Path, count: int, seed: int = 1, odd: int | None = None) -> Path:
    """A folder of lots alike but for noise and 2 % in Mw; the one numbered `odd` is longer."""
    folder.mkdir(parents=True, exist_ok=True)
    rng = np.random.default_rng(seed)
    for i in range(1, count + 1):
        mass = 1.2e5 * np.exp(0.02 * rng.standard_normal()) * (1.6 if i == odd else 1.0)
        sweep_table(mass, rng).to_csv(folder / f"lot {i}.csv", index=False)
    return folder


def contents(folder: Path) -> dict[str, bytes]:
    """Every table and every input's record, by path (the batch's own record holds the pace)."""
    return {
        str(p.relative_to(folder)): p.read_bytes()
        for p in sorted(folder.rglob("*"))
        if p.is_file()
        and str(p.relative_to(folder)) not in ("result.json", "report.html")
        and p.parent.name != "figures"
    }
