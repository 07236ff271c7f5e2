"""Slips, bad readings, drift and branching flags as the commands say them; nothing is changed."""

from __future__ import annotations

import json
import time
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner
from melts import FAMILIES, exact_card, measured, melt_of

from mwdlink.chains.families import lognormal
from mwdlink.chains.polymer import builtin
from mwdlink.chains.shift import arrhenius_factor
from mwdlink.cli.main import main
from mwdlink.errors import InputError
from mwdlink.files.tables import read_sweep
from mwdlink.inversion.invert import invert
from mwdlink.measurement.checks import slips
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.spectrum import Spectrum

HDPE = builtin("hdpe")
OMEGA = np.logspace(-2, 2, 21)
FIRST_ROW = 2  # under one line of headers


@pytest.fixture(scope="module")
def melt() -> Spectrum:
    """An invented linear polyethylene at 190 C."""
    return Relaxation(lognormal(1.2e5, 3.0), HDPE.melt(190.0)).spectrum()


@pytest.fixture(scope="module")
def sweep(melt: Spectrum) -> Sweep:
    return scattered(melt, 4)


def scattered(melt: Spectrum, seed: int, a_T: float = 1.0, T: float = 190.0) -> Sweep:
    storage, loss = melt.moduli(OMEGA * a_T)
    noise = np.exp(0.02 * np.random.default_rng(seed).standard_normal((2, OMEGA.size)))
    return Sweep(OMEGA, storage * noise[0], loss * noise[1], temperature_C=T)


def written(path: Path, columns: dict[str, Any]) -> Path:
    pd.DataFrame(columns).to_csv(path, index=False, float_format="%.10g")
    return path


def plain(s: Sweep) -> dict[str, Any]:
    return {"omega [rad/s]": s.omega, "G' [Pa]": s.storage, "G'' [Pa]": s.loss}


def run(*words: Any) -> dict[str, Any]:
    done = CliRunner().invoke(main, [str(w) for w in (*words, "--json", "--quiet")])
    assert done.exit_code == 0, done.stderr
    return json.loads(done.stdout)


def spectrum(path: Path, *more: Any) -> dict[str, Any]:
    return run("spectrum", path, "--members", 0, "--temperature", 190, *more)


def codes(found: list[dict[str, Any]]) -> set[str]:
    return {f["code"] for f in found}


def test_a_good_sweep(sweep: Sweep, tmp_path: Path) -> None:
    """Derived: positive modes with 2 % noise; nothing is proposed, and the key holds its place."""
    record = spectrum(written(tmp_path / "s.csv", plain(sweep)), "--polymer", "hdpe")
    found = record["consistency"]
    assert found["kramers_kronig"]["passed"] and found["passed"]
    assert found["proposals"] == [] and found["outliers"] == []
    assert "drift" not in found
    assert record["polymer"]["name"] == "hdpe"
    assert not codes(record["warnings"]) & {"outliers", "swapped_columns", "hertz_for_radians"}


def test_swapped_columns_and_hertz_end_to_end(sweep: Sweep, tmp_path: Path) -> None:
    """Derived: swapped moduli fail as they are and pass the other way; Hz under rad/s beside
    |eta*| is a factor 2 pi. Both are proposed, file and fitted data stay as they are.
    """
    hertz = OMEGA / (2 * np.pi)
    columns = {
        "omega [rad/s]": hertz,
        "G' [Pa]": sweep.loss,
        "G'' [Pa]": sweep.storage,
        "|eta*| [Pa s]": sweep.complex_viscosity,
    }
    path = written(tmp_path / "s.csv", columns)
    before = path.read_bytes()
    record = spectrum(path, "--out", tmp_path / "out")
    found = {p["code"]: p for p in record["consistency"]["proposals"]}
    assert set(found) == {"swapped_columns", "hertz_for_radians"}
    assert found["hertz_for_radians"]["evidence"] == pytest.approx(2 * np.pi, rel=0.01)
    for code in found:
        (said,) = [w["text"] for w in record["warnings"] if w["code"] == code]
        assert "othing was changed" in said
    assert not record["consistency"]["kramers_kronig"]["passed"]
    assert path.read_bytes() == before
    fit = pd.read_csv(tmp_path / "out" / "fit.csv", comment="#")
    assert np.allclose(fit["omega [rad/s]"], hertz, rtol=1e-6)
    assert np.allclose(fit["G' [Pa]"], sweep.loss, rtol=1e-6)
    assert np.allclose(fit["G'' [Pa]"], sweep.storage, rtol=1e-6)


def test_viscosity_column_is_a_witness_only(sweep: Sweep, tmp_path: Path) -> None:
    """Derived: a right |eta*| column is kept with the sweep and changes no number of it."""
    with_it = plain(sweep) | {"|eta*| [Pa s]": sweep.complex_viscosity}
    a = read_sweep(written(tmp_path / "a.csv", with_it))
    b = read_sweep(written(tmp_path / "b.csv", plain(sweep)))
    assert b.stated_viscosity is None and a.stated_viscosity is not None
    assert np.allclose(a.stated_viscosity, sweep.complex_viscosity)
    assert np.array_equal(a.storage, b.storage) and np.array_equal(a.loss, b.loss)
    assert np.allclose(a.shifted(3.0, 2.0).stated_viscosity, a.shifted(3.0, 2.0).complex_viscosity)


def test_kilopascal_needs_the_polymer(sweep: Sweep, tmp_path: Path) -> None:
    """Common practice: melts cross above a hundredth of G_N; without the card nothing shows."""
    columns = plain(sweep)
    columns |= {"G' [Pa]": sweep.storage / 1000, "G'' [Pa]": sweep.loss / 1000}
    path = written(tmp_path / "s.csv", columns)
    assert spectrum(path)["consistency"]["proposals"] == []
    found = spectrum(path, "--polymer", "hdpe")["consistency"]["proposals"]
    assert codes(found) == {"kilopascal_for_pascal"}


def test_outliers_and_overload_by_row(sweep: Sweep, tmp_path: Path) -> None:
    """Derived: a reading 40 % off and three that fall off at the top are named by their rows."""
    storage = sweep.storage.copy()
    storage[8] *= 1.4
    path = written(tmp_path / "s.csv", plain(sweep) | {"G' [Pa]": storage})
    done = CliRunner().invoke(main, ["spectrum", str(path), "--members", "0", "--json"])
    assert done.exit_code == 0
    said = " ".join(done.stderr.split())
    assert f"row {FIRST_ROW + 8} (" in said and "leave them out by their row" in said
    assert said.count("stand out:") == 1
    record = json.loads(done.stdout)
    assert [(o["row"], o["modulus"]) for o in record["consistency"]["outliers"]] == [
        (FIRST_ROW + 8, "G'")
    ]
    assert record["consistency"]["passes_without_outliers"]

    fading = np.ones(OMEGA.size)
    fading[-3:] = [0.80, 0.60, 0.40]
    columns = plain(sweep) | {"G' [Pa]": sweep.storage * fading, "G'' [Pa]": sweep.loss * fading}
    found = spectrum(written(tmp_path / "o.csv", columns))["consistency"]["proposals"]
    (overload,) = [p for p in found if p["code"] == "overload_points"]
    last = FIRST_ROW + OMEGA.size - 1
    assert last in overload["rows"] and min(overload["rows"]) >= last - 3


def test_drift(melt: Spectrum, sweep: Sweep, tmp_path: Path) -> None:
    """Derived: times 15 % longer are a change, another scatter of the same melt is none."""
    before = written(tmp_path / "before.csv", plain(sweep))
    slower = Spectrum(melt.tau * 1.15, melt.strength)
    changed = written(tmp_path / "changed.csv", plain(scattered(slower, 5)))
    same = written(tmp_path / "same.csv", plain(scattered(melt, 6)))
    record = spectrum(before, "--after", changed, "--out", tmp_path / "out")
    drift = record["consistency"]["drift"]
    assert drift["changed"] and 0.05 < drift["change"]["value"] < 0.15
    assert drift["low_end_change"]["low"] > 0.1
    assert "sample_changed" in codes(record["warnings"])
    assert [Path(i["path"]).name for i in record["inputs"]] == ["before.csv", "changed.csv"]
    assert (tmp_path / "out" / "drift.csv").is_file()
    assert (tmp_path / "out" / "figures" / "drift.svg").is_file()
    record = spectrum(before, "--after", same)
    assert not record["consistency"]["drift"]["changed"]
    assert "sample_changed" not in codes(record["warnings"])
    words = ["spectrum", str(before), "--after", str(changed), "--members", "0", "--enforce"]
    done = CliRunner().invoke(main, words)
    assert done.exit_code == 4 and "the sample changed" in done.stderr


def test_rows_left_out_are_those_of_the_sweep(
    sweep: Sweep, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Derived: --omit names rows of SWEEP; the second sweep keeps all of its own."""
    seen = []

    def look(data: Sweep, **more: Any) -> None:
        seen.append((len(data), len(more["after"])))
        raise InputError("seen")

    monkeypatch.setattr("mwdlink.measurement.checks.check_sweep", look)
    before = written(tmp_path / "before.csv", plain(sweep))
    after = written(tmp_path / "after.csv", plain(sweep))
    words = ["spectrum", str(before), "--after", str(after), "--omit", "2-6"]
    assert isinstance(CliRunner().invoke(main, words).exception, InputError)
    assert seen == [(OMEGA.size - 5, OMEGA.size)]


def test_a_second_sweep_that_does_not_belong(sweep: Sweep, tmp_path: Path) -> None:
    """House habit: sweeps at 190 and 210 C are refused with the file and what to do."""
    before = written(tmp_path / "before.csv", plain(sweep) | {"T [C]": 190.0})
    after = written(tmp_path / "after.csv", plain(sweep) | {"T [C]": 210.0})
    done = CliRunner().invoke(main, ["spectrum", str(before), "--after", str(after)])
    assert isinstance(done.exception, InputError)  # status 3
    assert "after.csv" in str(done.exception) and "one temperature" in str(done.exception)


def test_master_takes_what_else_is_known(melt: Spectrum, tmp_path: Path) -> None:
    """Derived: Mw, dispersity and [eta] each add their flag; half the true Mw departs."""
    tables = []
    for k, T in enumerate((170.0, 190.0, 210.0)):
        s = scattered(melt, 10 + k, float(arrhenius_factor(26.8e3, T, 190.0)), T)
        tables.append(pd.DataFrame(plain(s) | {"T [C]": T}))
    path = tmp_path / "all.csv"
    pd.concat(tables).to_csv(path, index=False)
    words = ("master", path, "--reference", 190, "--polymer", "hdpe", "--members", 20)

    def flags(*more: Any) -> dict[str, dict[str, Any]]:
        found = run(*words, *more)["branching"]["flags"]
        return {f["code"]: f for f in found}

    known = flags("--Mw", 1.2e5, "--dispersity", 3, "--intrinsic-viscosity", 1.7)
    assert known["zero_shear_viscosity"]["state"] != "departs"
    assert known["branching_index"]["value"]["value"] is not None
    half = flags("--Mw", 0.6e5, "--dispersity", 3)
    assert half["zero_shear_viscosity"]["state"] == "departs"
    assert "branching_index" not in half


def test_invert_says_what_looks_wrong(sweep: Sweep) -> None:
    """Derived: a reading 40 % off and Hz beside |eta*| are among the inversion's cautions."""
    storage = sweep.storage.copy()
    storage[8] *= 1.4
    bad = sweep.with_(
        rows=np.arange(OMEGA.size) + FIRST_ROW,
        storage=storage,
        omega=OMEGA / (2 * np.pi),
        stated_viscosity=sweep.complex_viscosity,
    )
    result = invert(bad, HDPE, members=0, kernels=["power-law"], exponent=2.0)
    said = {c.code: c.text for c in result.warnings}
    assert f"row {FIRST_ROW + 8} (" in said["outliers"]
    assert "2 pi" in said["hertz_for_radians"]


def test_slips_of_a_swapped_and_a_kilopascal_sweep(sweep: Sweep) -> None:
    """Derived: the cheap check names them, and is silent where it cannot be made."""
    swapped = sweep.with_(storage=sweep.loss, loss=sweep.storage)
    assert {c.code for c in slips(swapped)} == {"kramers_kronig_failed", "swapped_columns"}
    low = sweep.with_(storage=sweep.storage / 1e3, loss=sweep.loss / 1e3)
    assert {c.code for c in slips(low, plateau_modulus=1.58e6)} == {"kilopascal_for_pascal"}
    assert slips(sweep.select([0, 1, 2])) == ()


def test_slips_raise_no_false_alarm() -> None:
    """Derived: sweeps from the chain model, four families, 1 to 5 % noise, 3 to 10 a decade, show
    no slip. A good reading is called an outlier in 1 of 60 such sweeps [measured]; here in no more.
    """
    card = exact_card()
    plateau = card.melt().plateau_modulus
    named = 0
    for k in range(12):
        rng = np.random.default_rng(k)
        s = measured(
            melt_of(FAMILIES[k % 4], rng), card, Model(), rng,
            noise=(0.01, 0.03, 0.05)[k % 3], per_decade=(3, 5, 10)[k // 4],
        )  # fmt: skip
        found = {c.code for c in slips(s, plateau_modulus=plateau)}
        assert found <= {"outliers"}, k
        named += bool(found)
    assert named <= 1


def test_slips_cost_little(sweep: Sweep, full: bool) -> None:
    """House target: under 0.1 s for a usual sweep, and no more than a few for any number."""
    omega = np.logspace(-2, 2, 2000)
    dense = Sweep(
        omega,
        np.exp(np.interp(np.log(omega), np.log(OMEGA), np.log(sweep.storage))),
        np.exp(np.interp(np.log(omega), np.log(OMEGA), np.log(sweep.loss))),
    )
    for s, most in ((sweep, 0.1), (dense, 0.5)):
        start = time.process_time()
        slips(s)
        assert not full or time.process_time() - start < most


def test_help_names_the_checks() -> None:
    """Interface: the options are there and said in the help."""
    shown = CliRunner().invoke(main, ["spectrum", "--help"]).stdout
    assert "--after" in shown and "--polymer" in shown
    shown = CliRunner().invoke(main, ["master", "--help"]).stdout
    assert all(o in shown for o in ("--Mw", "--dispersity", "--intrinsic-viscosity"))
