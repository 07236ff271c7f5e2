"""Made-up results with the documented tables and keys, for the tests of pictures and pages.

Nothing here is measured: the melt is a sum of a few Maxwell modes, its "interval" a fixed share.
The classes know only what every result offers: command, tables(), to_dict() and the sentences.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

TAU = np.logspace(-4, 2, 13)
STRENGTH = 2.0e5 * np.exp(-0.5 * ((np.log10(TAU) + 2.5) / 1.1) ** 2)


class MadeUp:
    """A result with nothing behind it but its tables and keys."""

    def __init__(
        self, command: str, record: dict[str, Any], tables: dict[str, pd.DataFrame], **words: Any
    ) -> None:
        self.command = command
        self._record = record
        self._tables = tables
        self._words = words

    def to_dict(self) -> dict[str, Any]:
        return dict(self._record)

    def tables(self) -> dict[str, pd.DataFrame]:
        return dict(self._tables)

    def answer(self) -> str:
        return self._words.get("answer", "The answer is 1 (0.9 to 1.1, 90 %).")

    def paragraph(self) -> str:
        return self._words.get("paragraph", "A neutral paragraph that can be copied into a mail.")

    def cannot_say(self) -> tuple[str, ...]:
        return self._words.get("cannot_say", ("What lies outside the window.",))

    def live_data(self) -> Any:
        return self._words.get("live")


def uncertain(
    value: float | None, spread: float = 0.1, status: str = "resolved", **budget: float
) -> dict[str, Any]:
    low = None if value is None else value * (1 - spread)
    high = None if value is None else value * (1 + spread)
    out: dict[str, Any] = {"value": value, "low": low, "high": high, "level": 0.9, "status": status}
    if budget:
        out["budget"] = budget
    return out


def maxwell(
    omega: np.ndarray, tau: np.ndarray = TAU, strength: np.ndarray = STRENGTH
) -> tuple[np.ndarray, np.ndarray]:
    """Moduli of Maxwell modes."""
    x = omega[:, None] * tau[None, :]
    return (strength * x**2 / (1 + x**2)).sum(1), (strength * x / (1 + x**2)).sum(1)


def banded(frame: dict[str, np.ndarray], header: str, y: np.ndarray, spread: float = 0.15) -> None:
    name, unit = header.split(" [") if " [" in header else (header, "")
    tail = f" [{unit}" if unit else ""
    frame[header] = y
    frame[f"{name} low{tail}"] = y * (1 - spread)
    frame[f"{name} high{tail}"] = y * (1 + spread)


def sweep_table(low: float = 1e-4, high: float = 1e4, shift: float = 1.0) -> pd.DataFrame:
    omega = np.logspace(np.log10(low), np.log10(high), 81)
    storage, loss = maxwell(omega * shift)
    out: dict[str, np.ndarray] = {"omega [rad/s]": omega}
    banded(out, "G' [Pa]", storage)
    banded(out, "G'' [Pa]", loss)
    banded(out, "|eta*| [Pa s]", np.hypot(storage, loss) / omega)
    banded(out, "tan delta [-]", loss / storage)
    return pd.DataFrame(out)


def distribution_table(
    mw: float = 1.2e5, width: float = 0.45, tail: float = 0.0, high: float = 2e7
) -> pd.DataFrame:
    mass = np.logspace(2.5, np.log10(high), 120)
    x = np.log10(mass / mw)
    density = np.exp(-0.5 * (x / width) ** 2) / (width * np.sqrt(2 * np.pi))
    density += (
        tail * np.exp(-0.5 * ((np.log10(mass / 3e6)) / 0.15) ** 2) / (0.15 * np.sqrt(2 * np.pi))
    )
    out: dict[str, np.ndarray] = {"M [g/mol]": mass}
    out["dW/dlog10M"] = density
    out["dW/dlog10M low"] = np.maximum(density * 0.85 - 0.01, 0.0)
    out["dW/dlog10M high"] = density * 1.15 + 0.01
    return pd.DataFrame(out)


def relaxation_table() -> pd.DataFrame:
    time = np.logspace(-4, 3, 71)
    out: dict[str, np.ndarray] = {"t [s]": time}
    banded(out, "G [Pa]", (STRENGTH * np.exp(-time[:, None] / TAU)).sum(1))
    return pd.DataFrame(out)


def flow_table() -> pd.DataFrame:
    rate = np.logspace(-3, 4, 71)
    storage, loss = maxwell(rate)
    out: dict[str, np.ndarray] = {"rate [1/s]": rate}
    banded(out, "eta [Pa s]", np.hypot(storage, loss) / rate)
    return pd.DataFrame(out)


def spectrum_table() -> pd.DataFrame:
    return pd.DataFrame({"tau [s]": TAU, "g [Pa]": STRENGTH})


def continuous_table() -> pd.DataFrame:
    tau = np.logspace(-4.5, 2.5, 70)
    out: dict[str, np.ndarray] = {"tau [s]": tau}
    banded(out, "H [Pa]", 8e4 * np.exp(-0.5 * ((np.log10(tau) + 2.5) / 1.1) ** 2), 0.3)
    return pd.DataFrame(out)


def fit_table() -> pd.DataFrame:
    omega = np.logspace(-2, 2, 21)
    storage, loss = maxwell(omega)
    noise = np.random.default_rng(7).normal(0, 0.03, (2, 21))
    noise[0, 4] = 0.35
    return pd.DataFrame(
        {
            "row": np.arange(2, 23),
            "omega [rad/s]": omega,
            "G' [Pa]": storage * np.exp(noise[0]),
            "G'' [Pa]": loss * np.exp(noise[1]),
            "G' model [Pa]": storage,
            "G'' model [Pa]": loss,
            "residual G' [-]": noise[0],
            "residual G'' [-]": noise[1],
        }
    )


def smoothing_table() -> pd.DataFrame:
    lam = np.logspace(-4, 4, 17)
    x = np.log10(lam)
    return pd.DataFrame(
        {
            "lambda [-]": lam,
            "log evidence [-]": 60 - 2.1 * (x - 0.8) ** 2,
            "chi2 per point [-]": 0.9 + 0.05 * 10 ** (0.35 * x),
        }
    )


BUDGET = {"noise": 0.15, "smoothing": 0.2, "kernel": 0.3, "exponent": 0.25, "card": 0.1}
AVERAGES = {
    "Mn_g_per_mol": uncertain(2.4e4, 0.5, "upper_bound", **BUDGET),
    "Mw_g_per_mol": uncertain(1.2e5, 0.08, "resolved", **BUDGET),
    "Mz_g_per_mol": uncertain(
        4.6e5, 0.2, "lower_bound", **{**BUDGET, "kernel": 0.1, "exponent": 0.45}
    ),
    "dispersity": uncertain(5.0, 0.5, "assumed"),
    "Mw_within_window_g_per_mol": uncertain(1.18e5, 0.05),
}
KERNELS = [
    {
        "kernel": "exponential",
        "chi2_per_point": 14.2,
        "admissible": False,
        "Mw_g_per_mol": uncertain(1.31e5, 0.05),
    },
    {
        "kernel": "reptation",
        "chi2_per_point": 1.3,
        "admissible": True,
        "Mw_g_per_mol": uncertain(1.25e5, 0.07),
    },
    {
        "kernel": "power-law",
        "chi2_per_point": 1.0,
        "admissible": True,
        "Mw_g_per_mol": uncertain(1.18e5, 0.06),
    },
    {
        "kernel": "fluctuation",
        "chi2_per_point": 1.1,
        "admissible": True,
        "Mw_g_per_mol": uncertain(1.21e5, 0.06),
    },
]


def predict() -> MadeUp:
    record = {
        "averages": {
            "Mn_g_per_mol": 2.4e4,
            "Mw_g_per_mol": 1.2e5,
            "Mz_g_per_mol": 4.6e5,
            "dispersity": 5.0,
        },
        "terminal": {"eta0_Pa_s": 9.1e4, "Je0_per_Pa": 3.3e-5, "mean_time_s": 3.0},
        "crossover": {"omega_rad_per_s": 60.0, "G_Pa": 3.0e4},
        "melt_flow": [
            {"load_kg": 2.16, "MFR_g_per_10min": 1.1},
            {"load_kg": 21.6, "MFR_g_per_10min": 38.0},
        ],
        "indices": {"eta_0.1": 6.0e4, "eta_1": 3.0e4, "thinning_0.1_100": 12.0},
        "bands": {
            "terminal": {"eta0_Pa_s": uncertain(9.1e4, 0.3, "resolved", kernel=0.5, card=0.5)}
        },
        "warnings": [
            {
                "code": "calibration_unstated",
                "text": "The GPC's molar masses are taken as absolute.",
            }
        ],
    }
    tables = {
        "sweep.csv": sweep_table(),
        "spectrum.csv": spectrum_table(),
        "relaxation.csv": relaxation_table(),
        "flow.csv": flow_table(),
        "distribution.csv": distribution_table(),
    }
    return MadeUp(
        "predict", record, tables, answer="Zero-shear viscosity 9.1e4 Pa s (6.4e4 to 1.2e5, 90 %)."
    )


def invert() -> MadeUp:
    record = {
        "averages": AVERAGES,
        "window": {"M_low_g_per_mol": 1.1e4, "M_high_g_per_mol": 6.5e5},
        "outside_window": {
            "above": {"fraction": uncertain(0.021, 0.3)},
            "below": {"fraction": uncertain(0.05, 0.9, "assumed")},
        },
        "above": [{"M_g_per_mol": 5e5, "fraction": uncertain(0.034, 0.2, **BUDGET)}],
        "fit": {
            "chi2_per_point": 1.04,
            "points": 42,
            "smoothing": 6.3,
            "method": "smooth",
            "converged": True,
        },
        "kernels": KERNELS,
        "cross_check": {"spectrum_relation": {"Mw_g_per_mol": 1.31e5, "Mz_g_per_mol": 4.9e5}},
        "peaks": [
            {"M_g_per_mol": 8.1e4, "M_g_per_mol_low": 7e4, "M_g_per_mol_high": 9e4, "fraction": 1.0}
        ],
        "advice": ["Measure down to 0.001 rad/s to bring Mz within 10 %."],
        "warnings": [
            {"code": "smoothing_at_end", "text": "The smoothing was picked at the end of its scan."}
        ],
    }
    tables = {
        "distribution.csv": distribution_table(),
        "fit.csv": fit_table(),
        "smoothing.csv": smoothing_table(),
    }
    return MadeUp("invert", record, tables, answer="Mw is 1.20e5 g/mol (1.10e5 to 1.30e5, 90 %).")


def spectrum() -> MadeUp:
    record = {
        "terminal": {"eta0_Pa_s": 9.1e4, "Je0_per_Pa": 3.3e-5},
        "supported": {"tau_low_s": 0.048, "tau_high_s": 20.8},
        "consistency": {"kramers_kronig": {"chi2_per_point": 1.1, "passed": True}},
        "warnings": [],
    }
    return MadeUp(
        "spectrum",
        record,
        {
            "spectrum.csv": spectrum_table(),
            "continuous.csv": continuous_table(),
            "fit.csv": fit_table(),
        },
    )


def master() -> MadeUp:
    parts = []
    temperatures = (150.0, 170.0, 190.0, 210.0, 230.0)
    shifts = np.exp(26800 / 8.314 * (1 / (np.array(temperatures) + 273.15) - 1 / 463.15))
    rng = np.random.default_rng(3)
    for t, a in zip(temperatures, shifts, strict=True):
        omega = np.logspace(-2, 2, 13) * a
        storage, loss = maxwell(omega)
        parts.append(
            pd.DataFrame(
                {
                    "omega [rad/s]": omega,
                    "G' [Pa]": storage * np.exp(rng.normal(0, 0.03, 13)),
                    "G'' [Pa]": loss * np.exp(rng.normal(0, 0.03, 13)),
                    "T [C]": t,
                }
            )
        )
    table = pd.DataFrame(
        {
            "T [C]": temperatures,
            "a_T [-]": shifts * np.exp([0.02, -0.01, 0, 0.02, -0.02]),
            "a_T low [-]": shifts * 0.93,
            "a_T high [-]": shifts * 1.07,
            "b_T [-]": np.ones(5),
            "a_T Arrhenius [-]": shifts,
            "a_T WLF [-]": shifts**1.04,
        }
    )
    record = {
        "reference_C": 190.0,
        "shift": {"kind": "arrhenius", "energy_kJ_per_mol": uncertain(26.8, 0.05)},
        "superposition": {"residual": 0.021, "passed": True, "low_frequency_residual": 0.03},
        "branching": {"flags": []},
        "warnings": [],
    }
    return MadeUp(
        "master", record, {"master.csv": pd.concat(parts, ignore_index=True), "shifts.csv": table}
    )


def rest() -> MadeUp:
    time = np.logspace(-3, 3, 90)
    step = (STRENGTH * np.exp(-time[:, None] / TAU)).sum(1) / STRENGTH.sum()
    weight = STRENGTH * TAU
    steady = (weight * np.exp(-time[:, None] / TAU)).sum(1) / weight.sum()
    out: dict[str, np.ndarray] = {"t [s]": time}
    banded(out, "after step [-]", step, 0.3)
    banded(out, "after steady flow [-]", steady, 0.3)
    record = {
        "rest": [
            {
                "residual": 0.01,
                "after": "step",
                "time_s": uncertain(float(time[np.argmax(step < 0.01)]), 0.3),
            },
            {
                "residual": 0.01,
                "after": "steady flow",
                "time_s": uncertain(float(time[np.argmax(steady < 0.01)]), 0.3),
            },
        ],
        "warnings": [],
    }
    return MadeUp("rest", record, {"rest.csv": pd.DataFrame(out)})


def fractions_table() -> pd.DataFrame:
    phi = np.linspace(0, 1, 101)
    out: dict[str, np.ndarray] = {"fraction A [-]": phi}
    eta0 = (phi * 4e5**0.5 + (1 - phi) * 3e3**0.5) ** 2
    banded(out, "eta0 [Pa s]", eta0, 0.25)
    banded(out, "eta 0.1 [Pa s]", eta0**0.93, 0.2)
    banded(out, "Je0 [1/Pa]", 3e-5 * (1 + 8 * phi * (1 - phi)), 0.3)
    banded(out, "MFR 2.16 [g/10min]", 3e4 / eta0, 0.3)
    return pd.DataFrame(out)


def live_quadratic() -> dict[str, Any]:
    omega = np.logspace(-2, 2, 41)
    first = maxwell(omega, TAU * 12)
    second = maxwell(omega, TAU / 6)
    cross = maxwell(omega, TAU * 1.7)
    table = fractions_table()
    return {
        "mode": "quadratic",
        "components": ["A", "B"],
        "fraction": 0.7,
        "omega": omega.tolist(),
        "curves": {
            "first": {"storage": first[0].tolist(), "loss": first[1].tolist()},
            "second": {"storage": second[0].tolist(), "loss": second[1].tolist()},
            "cross": {"storage": cross[0].tolist(), "loss": cross[1].tolist()},
        },
        "band": {
            "fraction": [0.0, 0.5, 1.0],
            "storage": {
                "low": [[0.95] * 41, [0.8] * 41, [0.95] * 41],
                "high": [[1.05] * 41, [1.25] * 41, [1.05] * 41],
            },
            "viscosity": {
                "low": [[0.96] * 41, [0.85] * 41, [0.96] * 41],
                "high": [[1.04] * 41, [1.18] * 41, [1.04] * 41],
            },
        },
        "properties": [
            {
                "key": "eta0_Pa_s",
                "label": "zero-shear viscosity",
                "unit": "Pa s",
                "fraction": table["fraction A [-]"].tolist(),
                "value": table["eta0 [Pa s]"].tolist(),
                "low": table["eta0 low [Pa s]"].tolist(),
                "high": table["eta0 high [Pa s]"].tolist(),
            },
            {
                "key": "zero",
                "label": "zero-shear viscosity, exact",
                "unit": "Pa s",
                "kind": "quadratic",
                "first": 9.0e4,
                "second": 1.0e3,
                "cross": 2.0e4,
                "band": {"fraction": [0, 1], "low": [0.9, 0.9], "high": [1.1, 1.1]},
            },
            {
                "key": "Je0_per_Pa",
                "label": "steady compliance",
                "unit": "1/Pa",
                "kind": "compliance",
                "first": 2.7e5,
                "second": 30.0,
                "cross": 6.0e4,
                "eta0": {"first": 9.0e4, "second": 1.0e3, "cross": 2.0e4},
            },
            {
                "key": "eta_1",
                "label": "viscosity at 1 rad/s",
                "unit": "Pa s",
                "kind": "viscosity",
                "omega": 1.0,
            },
            {
                "key": "tan_1",
                "label": "tan δ at 1 rad/s",
                "unit": "",
                "kind": "tan_delta",
                "omega": 1.0,
            },
            {
                "key": "wc",
                "label": "crossover frequency",
                "unit": "rad/s",
                "kind": "crossover_omega",
            },
            {"key": "gc", "label": "crossover modulus", "unit": "Pa", "kind": "crossover_G"},
            {
                "key": "MFR_g_per_10min@2.16",
                "label": "melt flow rate, 2.16 kg",
                "unit": "g/10 min",
                "fraction": table["fraction A [-]"].tolist(),
                "value": table["MFR 2.16 [g/10min]"].tolist(),
            },
        ],
        "target": {"key": "eta0_Pa_s", "wanted": 1.5e5, "fractions": [0.55]},
    }


def live_grid() -> dict[str, Any]:
    data = live_quadratic()
    omega = np.asarray(data["omega"])
    phi = np.linspace(0, 1, 11)
    curves = [maxwell(omega, TAU * 12**p / 6 ** (1 - p)) for p in phi]
    data.update(
        mode="grid",
        curves={
            "fraction": phi.tolist(),
            "storage": [c[0].tolist() for c in curves],
            "loss": [c[1].tolist() for c in curves],
        },
    )
    return data


def blend(live: Any = None) -> MadeUp:
    base = predict()
    record = {
        **base.to_dict(),
        "blend": {"fractions": {"A": 0.7, "B": 0.3}, "route": "distributions", "Gr": 0.02},
        "target": {
            "quantity": "viscosity_Pa_s@0.1",
            "wanted": 4e4,
            "fractions": [uncertain(0.52, 0.1)],
            "reachable": [1.7e3, 1.6e5],
            "reason": None,
        },
    }
    return MadeUp("blend", record, {**base.tables(), "fractions.csv": fractions_table()}, live=live)


def blendcheck() -> MadeUp:
    rows = []
    rng = np.random.default_rng(5)
    for name in ("A75B25", "A50B50", "A25B75"):
        for low in (0.01, 0.1, 1.0, 10.0):
            rows.append(
                {
                    "blend": name,
                    "omega low [rad/s]": low,
                    "omega high [rad/s]": 10 * low,
                    "bias G' [decades]": rng.normal(0.01, 0.02),
                    "scatter G' [decades]": 0.012,
                    "bias G'' [decades]": rng.normal(0.0, 0.015),
                    "scatter G'' [decades]": 0.01,
                }
            )
    blends = [
        {
            "name": "A75B25",
            "weighed": {"A": 0.75, "B": 0.25},
            "recovered": {"A": uncertain(0.76, 0.04), "B": uncertain(0.24, 0.1)},
            "agrees": True,
            "bias_decades": 0.01,
            "scatter_decades": 0.02,
            "eta0_ratio": 1.03,
        },
        {
            "name": "A50B50",
            "weighed": {"A": 0.5, "B": 0.5},
            "recovered": {"A": uncertain(0.31, 0.1), "B": uncertain(0.69, 0.05)},
            "agrees": False,
            "bias_decades": -0.2,
            "scatter_decades": 0.03,
            "eta0_ratio": 0.6,
        },
        {
            "name": "A25B75",
            "weighed": {"A": 0.25, "B": 0.75},
            "recovered": {"A": uncertain(0.24, 0.2), "B": uncertain(0.76, 0.06)},
            "agrees": None,
            "bias_decades": 0.01,
            "scatter_decades": 0.02,
            "eta0_ratio": 1.0,
        },
    ]
    rules = [
        {"kernel": k, "exponent": e, "scatter_decades": s}
        for k, e, s in (
            ("power-law", 2.0, 0.021),
            ("reptation", 2.0, 0.03),
            ("power-law", 2.25, 0.034),
            ("exponential", 2.0, 0.06),
            ("measured spectra, log-additive", None, 0.3),
        )
    ]
    record = {
        "blends": blends,
        "exponent": uncertain(2.05, 0.05),
        "left_out": {"scatter_decades": 0.03},
        "rules": rules,
        "verdict": "The rule holds for two of three blends; A50B50 is not what its bag says.",
        "warnings": [],
    }
    return MadeUp("blendcheck", record, {"residuals.csv": pd.DataFrame(rows)})


def tail() -> MadeUp:
    joint = distribution_table(tail=0.03)
    gpc = distribution_table()
    joint["GPC continuation dW/dlog10M"] = gpc["dW/dlog10M"]
    fit = fit_table()
    fit["G' without tail [Pa]"] = 0.7 * fit["G' model [Pa]"]
    fit["G'' without tail [Pa]"] = 0.8 * fit["G'' model [Pa]"]
    gpc = gpc[gpc["M [g/mol]"] < 1.2e6][["M [g/mol]", "dW/dlog10M"]]
    record = {
        "tail": {
            "M_g_per_mol": 1.2e6,
            "fraction": uncertain(0.031, 0.2, noise=0.4, time_law=0.4, gpc=0.2),
            "excess": uncertain(0.025, 0.3),
            "detection_limit": 0.003,
        },
        "window": {"M_low_g_per_mol": 1.1e4, "M_high_g_per_mol": 4e6},
        "kernels": [
            {
                "kernel": "reptation",
                "chi2_per_point": 0.97,
                "admissible": True,
                "fraction": uncertain(0.03, 0.2),
            },
            {
                "kernel": "power-law",
                "chi2_per_point": 3.1,
                "admissible": False,
                "fraction": uncertain(0.05, 0.2),
            },
        ],
        "time_law_factor": uncertain(1.06, 0.05),
        "explanations": [
            {"name": "tail", "support": 0.93},
            {"name": "time law", "support": 0.04},
            {"name": "gpc baseline", "support": 0.02},
            {"name": "none", "support": 0.01},
            {"name": "branching", "support": None},
        ],
        "averages": AVERAGES,
        "advice": ["Measure at a second temperature."],
        "warnings": [],
    }
    return MadeUp("tail", record, {"distribution.csv": joint, "gpc_only.csv": gpc, "fit.csv": fit})


def datasheet() -> MadeUp:
    entries = [
        ("Mw_g_per_mol", 1.2e5, 0.1, uncertain(1.25e5, 0.08), -0.4, "consistent"),
        ("Mz_g_per_mol", 5e5, 0.2, uncertain(5.3e5, 0.5), -0.2, "cannot judge"),
        ("eta0_Pa_s", 7.1e3, 0.15, uncertain(6.5e3, 0.3), 0.3, "consistent"),
        ("melt_flow 2.16 kg 190 C", 11.0, 0.1, uncertain(1.15, 0.2), 9.2, "inconsistent"),
        ("viscosity 0.1 rad/s 190 C", 6.5e3, 0.1, uncertain(5.1e3, 0.15), 2.4, "strained"),
        ("Mn_g_per_mol", 2.1e4, 0.15, None, None, "cannot judge"),
    ]
    claims = [
        dict(zip(("quantity", "claimed", "tolerance", "expected", "z", "verdict"), e, strict=True))
        for e in entries
    ]
    record = {
        "claims": claims,
        "odd_one_out": "melt_flow 2.16 kg 190 C",
        "verdict": "One claim does not hang together with the rest.",
        "warnings": [],
    }
    frame = pd.DataFrame([{k: v for k, v in c.items() if k != "expected"} for c in claims])
    return MadeUp("datasheet", record, {"claims.csv": frame})


def calibrate() -> MadeUp:
    law = np.array([2.1e3, 7.0e3, 4.1e4, 3.3e5])
    table = pd.DataFrame(
        {
            "sample": ["F1", "F2", "F3", "F4"],
            "Mw [g/mol]": [5e4, 1e5, 2e5, 4e5],
            "eta0 measured [Pa s]": law * [1.05, 0.94, 1.02, 0.99],
            "eta0 law [Pa s]": law,
            "bias G' [decades]": [0.01, -0.02, 0.0, 0.004],
            "scatter G' [decades]": [0.03, 0.02, 0.02, 0.05],
            "bias G'' [decades]": [0.0, -0.01, 0.01, 0.004],
            "scatter G'' [decades]": [0.02, 0.02, 0.03, 0.02],
        }
    )
    return MadeUp(
        "calibrate",
        {"viscosity": {"exponent": uncertain(3.5, 0.03)}, "warnings": []},
        {"residuals.csv": table},
    )


def batch() -> MadeUp:
    rng = np.random.default_rng(11)
    mw = 1.2e5 * np.exp(rng.normal(0, 0.03, 24))
    mw[17] = 1.52e5
    out: dict[str, Any] = {"lot": [f"lot {i + 1:03d}" for i in range(24)]}
    banded(out, "Mw [g/mol]", mw, 0.04)
    out["outlying"] = [i == 17 for i in range(24)]
    record = {
        "done": 24,
        "failed": [],
        "throughput_per_s": 3.1,
        "control": {"Mw [g/mol]": {"centre": 1.2e5, "low": 1.08e5, "high": 1.33e5}},
        "warnings": [],
    }
    return MadeUp("batch", record, {"summary.csv": pd.DataFrame(out)})


def consistency() -> MadeUp:
    return MadeUp("consistency", {"warnings": []}, {"residuals.csv": fit_table()})


def drift() -> MadeUp:
    omega = np.logspace(-2, 2, 21)
    table = pd.DataFrame(
        {
            "omega [rad/s]": omega,
            "G' after/before [-]": 0.9 + 0.02 * np.log10(omega),
            "G'' after/before [-]": 0.97 + 0.01 * np.log10(omega),
        }
    )
    return MadeUp("drift", {"warnings": []}, {"drift.csv": table})


ALL = {
    f.__name__: f
    for f in (
        predict,
        invert,
        spectrum,
        master,
        rest,
        blend,
        blendcheck,
        tail,
        datasheet,
        calibrate,
        batch,
        consistency,
        drift,
    )
}
