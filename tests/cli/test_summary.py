"""The summary a person reads: names, units and intervals off the keys, within the columns."""

from __future__ import annotations

from typing import Any

import pytest

from mwdlink.cli.summary import number, summary

ANSWER = "The weight average is 1.2e5 g/mol (1.1e5 to 1.3e5); most of the tail is out of sight."


def uncertain(value: float, low: float, high: float, status: str = "resolved") -> dict[str, Any]:
    return {"value": value, "low": low, "high": high, "level": 0.9, "status": status}


RECORD: dict[str, Any] = {
    "schema": "mwdlink/invert/1",
    "inputs": [{"path": "secret", "sha256": "0"}],
    "averages": {
        "Mn_g_per_mol": uncertain(2.1e4, 1.5e4, 3e4, "assumed"),
        "Mz_g_per_mol": uncertain(5e5, 4e5, 8e5, "lower_bound"),
    },
    "terminal": {"eta0_Pa_s": 7100.0, "Je0_per_Pa": 1e-4},
    "crossover": None,
    "melt_flow": [{"load_kg": 2.16, "MFR_g_per_10min": 1.1}],
    "indices": {"eta_0.1": 6000.0},
    "bands": {
        "terminal": {"eta0_Pa_s": uncertain(7100, 6000, 9000, "lower_bound")},
        "melt_flow": [{"MFR_g_per_10min": uncertain(1.1, 0.9, 1.3)}],
    },
    "above": [
        {"M_g_per_mol": 5e5, "fraction": uncertain(0.03, 0.02, 0.04)},
        {"M_g_per_mol": 5e7, "fraction": uncertain(0.001, 0.0, 0.02, "upper_bound")},
    ],
    "kernels": [{"kernel": "power-law", "chi2_per_point": 1.0, "admissible": True}],
    "peaks": [
        {
            "M_g_per_mol": 6e4,
            "M_low_g_per_mol": 4e4,
            "M_high_g_per_mol": 7e4,
            "fraction": 0.7,
            "fraction_low": 0.6,
            "fraction_high": 0.8,
        }
    ],
    "claims": [{"quantity": "melt_flow 2.16 kg 190 C", "claimed": 1.1, "unit": "g/10 min"}],
    "failed": [{"path": "lots/a.csv", "lot": "a", "reason": "Too few points."}],
    "target": {"windows": [{"low": 0.2, "high": 0.4}]},
    "rest": [{"residual": 0.01, "after": "steady flow", "time_s": uncertain(30.0, 25, 40)}],
    "advice": ["Measure down to 0.001 rad/s.", "Give the temperature."],
    "verdict": "consistent",
}


@pytest.mark.parametrize("width", [80, 40])
def test_within_columns(width: int) -> None:
    """Interface: at most 80 columns, and readable at 40; the answer comes first."""
    lines = summary(ANSWER, RECORD, width)
    assert max(map(len, lines)) <= width
    assert " ".join(lines).startswith("The weight average is")
    assert "secret" not in "\n".join(lines)


def test_what_it_says() -> None:
    """Derived from the record by hand: each number with unit, interval and status."""
    text = [" ".join(line.split()) for line in summary(ANSWER, RECORD, 80)]
    for line in (
        "Mn 21000 g/mol 15000 to 30000, assumed",
        "Mz at least 5.00e5 g/mol 4.00e5 to 8.00e5",
        "eta0 at least 7100 Pa s 6000 to 9000",
        "Je0 1.00e-4 1/Pa",
        "2.16 kg MFR 1.10 g/10 min 0.900 to 1.30",
        "eta at 0.1 rad/s 6000 Pa s",
        "M 5.00e5 g/mol fraction 3.00 wt% 2.00 to 4.00",
        "power-law chi2 per point 1.00, admissible yes",
        "M 5.00e7 g/mol fraction less than 2.00 wt%",
        "M 60000 g/mol (40000 to 70000) fraction 70.0 wt% 60.0 to 80.0",
        "melt_flow 2.16 kg 190 C claimed 1.10 g/10 min",
        "lots/a.csv a, Too few points.",
        "windows low 0.200, high 0.400",
        "steady flow residual 0.0100, time 30.0 s (25.0 to 40.0)",
        "- Measure down to 0.001 rad/s.",
        "Verdict: consistent",
    ):
        assert any(line in t for t in text), line


@pytest.mark.parametrize(
    ("x", "text"),
    [(0.0, "0"), (0.012345, "0.0123"), (12.345, "12.3"), (123456.0, "1.23e5"), (-2e-7, "-2.00e-7"),
     (99999.0, "1.00e5"), (9.999, "10.0"), (7100.0, "7100")],
)  # fmt: skip
def test_numbers(x: float, text: str) -> None:
    """Three figures whatever the size."""
    assert number(x) == text
