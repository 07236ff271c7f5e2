"""Each cause that the words can name: found in an invented sheet with just that fault, through the
command line, and not in the same sheet without it."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from click.testing import CliRunner

from mwdlink.chains.polymer import builtin
from mwdlink.cli.main import main
from mwdlink.decisions.datasheet_claims import Claim
from mwdlink.decisions.datasheet_model import sheet_model

HDPE = builtin("hdpe")
MELT = 0.759  # g/cm3, the card's melt density at 190 C
CLAIMS = {
    "Mn": Claim("Mn", "Mn", 1.0, 0.1),
    "Mw": Claim("Mw", "Mw", 1.0, 0.1),
    "Mz": Claim("Mz", "Mz", 1.0, 0.1),
    "eta0": Claim("eta0", "eta0", 1.0, 0.1, temperature_C=190.0),
    "eta0 150": Claim("eta0 150", "eta0", 1.0, 0.1, temperature_C=150.0),
    "wc": Claim("wc", "crossover omega", 1.0, 0.1, temperature_C=190.0),
    "Gc": Claim("Gc", "crossover G", 1.0, 0.1, temperature_C=190.0),
    "iv": Claim("iv", "intrinsic viscosity", 1.0, 0.1),
    "Ea": Claim("Ea", "activation energy", 1.0, 0.1),
    "ratio": Claim(
        "ratio", "flow rate ratio", 1.0, 0.1, temperature_C=190.0, load_kg=21.6,
        second_load_kg=2.16,
    ),
}  # fmt: skip
for _omega in (0.1, 0.1 * 2 * math.pi, 100.0, 100.0 * 2 * math.pi):
    CLAIMS[f"v {_omega:.4g}"] = Claim(
        f"v {_omega:.4g}", "viscosity", 1.0, 0.1, temperature_C=190.0, omega=_omega
    )
for _load in (2.16, 5.0, 21.6):
    for _T in (190.0, 230.0):
        CLAIMS[f"mfr {_load:g} {_T:g}"] = Claim(
            f"mfr {_load:g} {_T:g}", "melt flow", 1.0, 0.1, temperature_C=_T, load_kg=_load
        )


def _numbers(*, mass: float = 0.0, breadth: float = 0.0) -> dict[str, float]:
    """All numbers of an invented log-normal melt; the prior's middle is Mw 1.3e5, dispersity 4."""
    z = np.zeros((1, 9))
    z[0, :2] = mass, breadth
    y = sheet_model(HDPE, tuple(CLAIMS.values()), "power-law").predict(z, "log-normal")[0]
    return dict(zip(CLAIMS, np.exp(y), strict=True))


TRUE = _numbers()


@dataclass
class Case:
    """A sheet: numbers, tolerance, what was changed, and words that must appear."""

    keys: str
    changed: dict[str, float]
    words: tuple[str, ...]
    odd: str | None
    tolerance: float = 0.1
    more: dict[str, Any] = field(default_factory=dict)


def _text(numbers: dict[str, float], tolerance: float, **more: Any) -> str:
    """The sheet as TOML."""
    t = f"tolerance = {tolerance}"
    scale = f', calibration = "{more["calibration"]}"' if "calibration" in more else ""
    lines, flows, points, crossing = [], [], [], []
    for key, value in numbers.items():
        c = CLAIMS[key.removesuffix(" volume")]
        v = f"{value:.6g}"
        at = f"temperature_C = {c.temperature_C}"
        if c.kind in ("Mn", "Mw", "Mz"):
            lines.append(f"{c.kind}_g_per_mol = {{value = {v}, {t}{scale}}}")
        elif c.kind == "eta0":
            lines.append(f"eta0_Pa_s = {{value = {v}, {at}, {t}}}")
        elif c.kind == "intrinsic viscosity":
            lines.append(f"intrinsic_viscosity = {{value_dL_per_g = {v}, {t}}}")
        elif c.kind == "activation energy":
            lines.append(f"activation_energy = {{value_kJ_per_mol = {v}, {t}}}")
        elif c.kind == "flow rate ratio":
            lines.append(f"flow_rate_ratio = {{loads_kg = [21.6, 2.16], value = {v}, {at}, {t}}}")
        elif c.kind == "melt flow":
            unit = "MVR_cm3_per_10min" if key.endswith("volume") else "MFR_g_per_10min"
            flows.append(f"{{load_kg = {c.load_kg}, {at}, {unit} = {v}, {t}}}")
        elif c.kind == "viscosity":
            points.append(f"{{omega_rad_per_s = {c.omega}, {at}, value_Pa_s = {v}, {t}}}")
        else:
            crossing.append(f"{'omega_rad_per_s' if key == 'wc' else 'G_Pa'} = {v}")
    if flows:
        lines.append(f"melt_flow = [{', '.join(flows)}]")
    if points:
        lines.append(f"viscosity = [{', '.join(points)}]")
    if crossing:
        lines.append(f"crossover = {{{', '.join(crossing)}, temperature_C = 190, {t}}}")
    return "\n".join(['polymer = "hdpe"', "[claims]", *lines]) + "\n"


def _run(tmp_path: Path, text: str) -> dict[str, Any]:
    path = tmp_path / "sheet.toml"
    path.write_text(text, encoding="utf-8")
    done = CliRunner().invoke(main, ["datasheet", str(path), "--json"])
    assert done.exit_code == 0, done.output
    return json.loads(done.stdout)


MFR, MFR5, MFR21 = "mfr 2.16 190", "mfr 5 190", "mfr 21.6 190"
VISBROKEN = _numbers(mass=-0.6, breadth=-1.5)
FULL = "Mn,Mw,Mz,eta0,v 0.1,wc,mfr 2.16 190,mfr 21.6 190"
CASES = {
    "poise": Case(FULL, {"eta0": 10 * TRUE["eta0"]}, ("factor 10 ", "poise"), "eta0_Pa_s"),
    "kg/mol": Case(FULL, {"Mw": 1e-3 * TRUE["Mw"]}, ("factor 0.001 ", "kg/mol"), "Mw_g_per_mol"),
    "averages in kg/mol": Case(
        FULL.removeprefix("Mn,"), {k: 1e-3 * TRUE[k] for k in ("Mw", "Mz")},
        ("factor 0.001 in all of them", "kg/mol"), "Mw_g_per_mol",
    ),
    "viscosities in poise": Case(
        FULL, {"eta0": 10 * TRUE["eta0"], "v 0.1": 10 * TRUE["v 0.1"]},
        ("factor 10 in all of them", "poise"), "viscosity 0.1 rad/s 190 C",
    ),
    "crossover in Hz": Case(
        FULL, {"wc": TRUE["wc"] / (2 * math.pi)}, ("Hz",), "crossover_omega_rad_per_s",
    ),
    "frequency in Hz": Case(
        "Mw,eta0,v 0.1,v 100,wc,mfr 21.6 190", {"v 100": TRUE["v 628.3"]}, ("in Hz",),
        "viscosity 100 rad/s 190 C", 0.05,
    ),
    "mL/g": Case("Mw,eta0,iv,mfr 2.16 190", {"iv": 100 * TRUE["iv"]}, ("mL/g",),
                 "intrinsic_viscosity"),
    "kcal/mol": Case("Mw,eta0,Ea,mfr 2.16 190", {"Ea": TRUE["Ea"] / 4.184}, ("kcal/mol",),
                     "activation_energy"),
    "another load": Case(
        FULL, {MFR: TRUE[MFR5]}, ("measured at 5 kg",), "melt_flow 2.16 kg 190 C",
    ),
    "another temperature": Case(
        FULL, {MFR: TRUE["mfr 2.16 230"]}, ("measured at 230 C",), "melt_flow 2.16 kg 190 C",
    ),
    "viscosity at another temperature": Case(
        "Mw,eta0,v 0.1,v 100,wc,mfr 2.16 190", {"eta0": TRUE["eta0 150"]}, ("measured at 150 C",),
        "eta0_Pa_s", 0.05,
    ),
    "volume for mass": Case(
        FULL, {MFR: TRUE[MFR] / MELT}, ("volume rate in cm3/10 min",), "melt_flow 2.16 kg 190 C",
        0.02,
    ),
    "solid density": Case(
        "Mw,eta0,mfr 2.16 190,mfr 2.16 190 volume", {"mfr 2.16 190 volume": TRUE[MFR] / 0.95},
        ("density of 0.95 g/cm3", "solid's"), None,
    ),
    "polystyrene, one": Case(
        "Mw,eta0,v 0.1,wc,mfr 2.16 190", {"Mw": 2.2 * TRUE["Mw"]}, ("relative to polystyrene",),
        "Mw_g_per_mol",
    ),
    "polystyrene, all": Case(
        FULL, {k: 2.2 * TRUE[k] for k in ("Mn", "Mw", "Mz")},
        ("all averages were relative to polystyrene",), "Mn_g_per_mol",
    ),
    "absolute after all": Case(
        FULL, {k: TRUE[k] for k in ("Mn", "Mw", "Mz")},
        ("all averages were absolute",), None, more={"calibration": "equivalent"},
    ),
    "number for weight average": Case(
        "Mw,eta0,v 0.1,wc,mfr 2.16 190", {"Mw": TRUE["Mn"]}, ("the number average",),
        "Mw_g_per_mol",
    ),
    "averages exchanged": Case(
        FULL, {"Mw": TRUE["Mn"], "Mn": TRUE["Mw"]},
        ("Mn and Mw had been exchanged", "which no distribution allows"), "Mw_g_per_mol",
    ),
    "branching": Case(
        FULL + ",iv,Ea",
        {"eta0": 4 * TRUE["eta0"], "v 0.1": 2.5 * TRUE["v 0.1"], "Ea": 1.4 * TRUE["Ea"]},
        ("long-chain branching", "branching index", "activation energy than the linear"), None,
    ),
    "additive": Case(
        "Mn,Mw,iv,eta0,v 0.1,v 100,wc,mfr 2.16 190",
        {MFR: 2.0 * TRUE[MFR]}, ("additive",), "melt_flow 2.16 kg 190 C",
    ),
    "visbroken": Case(
        "Mn,Mw,Mz,mfr 2.16 190,mfr 21.6 190",
        {k: VISBROKEN[k] for k in (MFR, MFR21)}, ("visbreaking",), None,
    ),
    "ratio of other lots": Case(
        "Mw,eta0,v 0.1,v 100,wc,ratio", {"ratio": 1.9 * TRUE["ratio"]}, ("rates from two lots",),
        "flow_rate_ratio",
    ),
    "typical value": Case(
        FULL, {"eta0": 1.5 * TRUE["eta0"]}, ("typical values rather than limits",), "eta0_Pa_s",
    ),
}  # fmt: skip


def _sheet(case: Case, *, faulty: bool) -> str:
    numbers = {}
    for key in case.keys.split(","):
        plain = key.removesuffix(" volume")
        numbers[key] = TRUE[plain] / (MELT if key != plain else 1.0)
        if case.more.get("calibration") == "equivalent" and key in ("Mn", "Mw", "Mz"):
            numbers[key] *= 2.3
    if faulty:
        numbers.update(case.changed)
    return _text(numbers, case.tolerance, **case.more)


@pytest.mark.parametrize("name", CASES)
def test_cause_is_found(tmp_path: Path, name: str) -> None:
    """A sheet with just this fault: the words name it (faults derived from the model)."""
    case = CASES[name]
    r = _run(tmp_path, _sheet(case, faulty=True))
    said = " ".join(r["explanations"])
    for words in case.words:
        assert words in said, (r["verdict"], said)
    if case.odd is not None:
        assert r["odd_one_out"] == case.odd


@pytest.mark.parametrize("name", CASES)
def test_cause_is_not_found_in_a_clean_sheet(tmp_path: Path, name: str) -> None:
    """The same sheet without the fault: nothing is explained, nothing stands out."""
    r = _run(tmp_path, _sheet(CASES[name], faulty=False))
    assert r["odd_one_out"] is None and r["also_off"] == [] and r["rivals"] == []
    assert r["explanations"] == []
    assert all(c["verdict"] in ("consistent", "cannot judge") for c in r["claims"])
