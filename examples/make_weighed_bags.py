"""Make the data of examples/weighed-bags (invented): python examples/make_weighed_bags.py [FOLDER]

Two invented linear polyethylenes, Brook and Crag, were weighed into six bags, mixed and measured.
Everything here is made up: the melts relax by the reptation kernel with an exponent of 2.1, which
is not what `mwdlink` takes by default; the GPC has baseline noise and a calibration that is 3 %
off, the rheometer 2 % noise and a torque that resolves no less than 0.5 Pa. One bag carries the
wrong label: it says 60 % Brook and holds 50 %. `mwdlink blendcheck` finds it.
"""

import sys
from pathlib import Path

import numpy as np
import pandas as pd

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

MODEL = Model(kernel="reptation", exponent=2.1)
OMEGA = 10.0 ** np.arange(-2, 2.01, 0.2)
BAGS = {"bag-1": 0.95, "bag-2": 0.85, "bag-3": 0.70, "bag-4": 0.60, "bag-5": 0.35, "bag-6": 0.15}
MISLABELLED = {"bag-4": 0.50}
NOTE = "# invented data, made by examples/make_weighed_bags.py\n"


def write_gpc(path: Path, melt: Distribution, rng: np.random.Generator) -> None:
    """A differential curve on the nodes of a GPC: noise of the baseline, masses 3 % off."""
    log_m = np.arange(3.0, 6.81, 0.05)
    x = np.log10(melt.molar_mass)
    signal = np.interp(log_m, x, melt.density, left=0.0, right=0.0)
    signal = signal + 0.003 * signal.max() * rng.standard_normal(log_m.size)
    table = pd.DataFrame(
        {"log10 M [g/mol]": (log_m + np.log10(1.03)).round(4), "dW/dlog10M": signal.round(5)}
    )
    path.write_text(NOTE + table.to_csv(index=False), encoding="utf-8")


def write_sweep(path: Path, melt: Distribution, rng: np.random.Generator) -> None:
    """A frequency sweep at 190 C: 2 % noise, nothing below 0.5 Pa."""
    storage, loss = Relaxation(melt, builtin("hdpe").melt(190.0), MODEL).moduli(OMEGA)
    noise = np.exp(0.02 * rng.standard_normal((2, OMEGA.size)))
    seen = storage > 0.5
    table = pd.DataFrame(
        {
            "omega [rad/s]": [f"{w:.4g}" for w in OMEGA[seen]],
            "G' [Pa]": [f"{v:.4g}" for v in (storage * noise[0])[seen]],
            "G'' [Pa]": [f"{v:.4g}" for v in (loss * noise[1])[seen]],
        }
    )
    path.write_text(NOTE + table.to_csv(index=False), encoding="utf-8")


def write_study(folder: Path) -> None:
    """All files of the example."""
    rng = np.random.default_rng(20)
    folder.mkdir(parents=True, exist_ok=True)
    parts = {
        "Brook": Distribution.from_averages(Mw=7.0e4, dispersity=3.0),
        "Crag": Distribution.from_averages(Mw=2.4e5, dispersity=3.5),
    }
    lines = [
        "# Invented: six bags of two invented polyethylenes (examples/make_weighed_bags.py)",
        'polymer = "hdpe"',
        "temperature_C = 190",
        "fraction_uncertainty = 0.002",
    ]
    for name, melt in parts.items():
        write_gpc(folder / f"{name.lower()}-gpc.csv", melt, rng)
        write_sweep(folder / f"{name.lower()}-190.csv", melt, rng)
        lines += [
            "",
            "[[component]]",
            f'name = "{name}"',
            f'distribution = "{name.lower()}-gpc.csv"',
            f'sweep = "{name.lower()}-190.csv"',
            'calibration = "absolute"',
        ]
    for bag, weighed in BAGS.items():
        held = MISLABELLED.get(bag, weighed)
        blend = Distribution.blend([(parts["Brook"], held), (parts["Crag"], 1 - held)])
        write_sweep(folder / f"{bag}.csv", blend, rng)
        lines += [
            "",
            "[[blend]]",
            f'name = "{bag}"',
            f"fractions = {{Brook = {weighed:.2f}, Crag = {1 - weighed:.2f}}}",
            f'sweep = "{bag}.csv"',
        ]
    (folder / "study.toml").write_text("\n".join(lines) + "\n", encoding="utf-8")


if __name__ == "__main__":
    write_study(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent / "weighed-bags")
