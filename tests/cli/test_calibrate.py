"""The command calibrate from end to end, on the shipped example."""

from __future__ import annotations

import json
from pathlib import Path

from click.testing import CliRunner

from mwdlink.chains.polymer import Polymer
from mwdlink.cli.main import main
from mwdlink.files.cards import read_polymer

STUDY = Path(__file__).parents[2] / "examples" / "weighed-bags" / "study.toml"


def test_calibrate_writes_a_card_that_other_commands_read(tmp_path):
    """Compared with the contract: card.toml, residuals.csv, uncertain quantities in result.json."""
    out = tmp_path / "own"
    done = CliRunner().invoke(
        main, ["calibrate", str(STUDY), "--kernel", "power-law", "--out", str(out)]
    )
    assert done.exit_code == 0, done.output
    card = read_polymer(out / "card.toml")
    assert isinstance(card, Polymer)
    assert card.constants["viscosity.coefficient"].status == "fitted"
    assert (out / "residuals.csv").is_file() and (out / "report.html").is_file()
    record = json.loads((out / "result.json").read_text(encoding="utf-8"))
    assert record["schema"] == "mwdlink/calibrate/1"
    assert len(record["inputs"]) == 11
    for quantity in (record["viscosity"]["exponent"], record["exponent"]):
        assert set(quantity) >= {"value", "low", "high", "level", "status"}
