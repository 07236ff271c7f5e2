"""Each command end to end: what it writes, what it prints, how it ends."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner, Result

import mwdlink
from mwdlink.chains.families import lognormal
from mwdlink.cli.main import main

COMMON = (
    "schema",
    "version",
    "command",
    "inputs",
    "labels",
    "polymer",
    "model",
    "seed",
    "warnings",
)


STUDY = """\
polymer = "hdpe"
temperature_C = 190
[[component]]
name = "A"
sweep = "sweep.csv"
distribution = "gpc.csv"
calibration = "absolute"
[[component]]
name = "B"
sweep = "b-sweep.csv"
distribution = "b.csv"
calibration = "absolute"
[[blend]]
name = "A50B50"
fractions = {A = 0.5, B = 0.5}
sweep = "ab-sweep.csv"
[[blend]]
name = "A25B75"
fractions = {A = 0.25, B = 0.75}
sweep = "aab-sweep.csv"
"""


SHEET = """\
polymer = "hdpe"
[claims]
Mw_g_per_mol = {value = 1.2e5, tolerance = 0.10, calibration = "absolute"}
dispersity = {value = 4.0, tolerance = 0.15}
eta0_Pa_s = {value = 2.0e4, tolerance = 0.15, temperature_C = 190}
"""


def measured(melt: Any, T: float, chance: np.random.Generator) -> pd.DataFrame:
    """A sweep of a made-up melt with 2 % noise."""
    omega = np.geomspace(1e-2, 1e2, 17)
    at_T = mwdlink.read_polymer("hdpe").melt(T)
    storage, loss = mwdlink.Relaxation(melt, at_T, mwdlink.Model()).moduli(omega)
    noise = 1 + 0.02 * chance.standard_normal((2, omega.size))
    return pd.DataFrame(
        {
            "T [C]": T,
            "omega [rad/s]": omega,
            "G' [Pa]": storage * noise[0],
            "G'' [Pa]": loss * noise[1],
        }
    )


@pytest.fixture(scope="module")
def inputs(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two made-up grades: GPC tables, sweeps, a study of their blends."""
    folder = tmp_path_factory.mktemp("inputs")
    chance = np.random.default_rng(3)
    grade, other = lognormal(Mw=1.2e5, dispersity=4.0), lognormal(Mw=6e4, dispersity=2.5)
    grade.to_frame().to_csv(folder / "gpc.csv", index=False)
    other.to_frame().to_csv(folder / "b.csv", index=False)
    tables = [measured(grade, T, chance) for T in (170.0, 190.0, 210.0)]
    pd.concat(tables).to_csv(folder / "all.csv", index=False)
    tables[1].to_csv(folder / "sweep.csv", index=False)
    melts = {
        "b": other,
        "ab": mwdlink.Distribution.blend([(grade, 0.5), (other, 0.5)]),
        "aab": mwdlink.Distribution.blend([(grade, 0.25), (other, 0.75)]),
    }
    for name, melt in melts.items():
        measured(melt, 190.0, chance).to_csv(folder / f"{name}-sweep.csv", index=False)
    (folder / "study.toml").write_text(STUDY)
    (folder / "sheet.toml").write_text(SHEET)
    return folder


@pytest.fixture
def run(inputs: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Callable[..., Result]]:
    """Call the command line in the folder of the inputs."""
    monkeypatch.chdir(inputs)

    def call(line: str, *more: str, status: int = 0) -> Result:
        done = CliRunner().invoke(main, [*line.split(), *more], terminal_width=80)
        if done.exception is not None and not isinstance(done.exception, SystemExit):
            raise done.exception
        assert done.exit_code == status, done.output
        return done

    yield call


# command line -> tables of the interface, keys of the interface
WRITTEN = {
    "predict gpc.csv --polymer hdpe --members 20": (
        "sweep.csv spectrum.csv relaxation.csv flow.csv distribution.csv",
        "averages terminal crossover melt_flow indices bands",
    ),
    "invert sweep.csv --polymer hdpe --members 20 --kernel power-law --above 5e5": (
        "distribution.csv fit.csv smoothing.csv",
        "averages window outside_window above fit kernels cross_check peaks advice",
    ),
    "blend gpc.csv b.csv --fractions 70,30 --polymer hdpe --members 20": (
        "sweep.csv spectrum.csv relaxation.csv flow.csv distribution.csv fractions.csv",
        "averages terminal crossover melt_flow indices bands blend target",
    ),
    "blendcheck study.toml": (
        "residuals.csv blends.csv",
        "blends exponent left_out rules verdict",
    ),
    "tail gpc.csv sweep.csv --polymer hdpe --members 0 --kernel power-law --beyond 1e6": (
        "distribution.csv gpc_only.csv fit.csv",
        "tail time_law_factor explanations averages advice",
    ),
    "datasheet sheet.toml --kernel power-law": ("claims.csv", "claims odd_one_out verdict"),
    "calibrate study.toml --kernel power-law": (
        "residuals.csv",
        "viscosity network exponent",
    ),
    "rest gpc.csv --polymer hdpe --members 20 --residual 1%": ("rest.csv", "rest"),
    "spectrum sweep.csv --members 20": (
        "spectrum.csv continuous.csv fit.csv",
        "terminal supported consistency",
    ),
    "master all.csv --reference 190 --members 20": (
        "master.csv shifts.csv",
        "reference_C shift superposition branching",
    ),
}


@pytest.mark.parametrize("line", WRITTEN)
def test_folder_as_promised(
    run: Callable[..., Result],
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    line: str,
    full: bool,
) -> None:
    """Interface: tables, keys, figures and report of each command.

    Drawing is slow: the PNG files, which repeat the SVG, and the SVG of `predict`, which repeat
    those of `blend`, are real with --full only.
    """
    from mwdlink.figures import Picture

    if not full:
        monkeypatch.setattr(Picture, "png", lambda self: b"PNG")
        if line.startswith("predict"):
            monkeypatch.setattr(Picture, "svg", lambda self: b"<svg></svg>")
    tables, keys = WRITTEN[line]
    out = tmp_path / "out"
    done = run(line, "--out", str(out), "--label", "sample=made up", "--quiet")
    record = json.loads((out / "result.json").read_text())
    assert [k for k in (*COMMON, *keys.split()) if k not in record] == []
    assert record["schema"] == f"mwdlink/{line.split()[0]}/1"
    assert record["labels"] == {"sample": "made up"}
    assert record["inputs"][0]["path"] == line.split()[1]
    for name in tables.split():
        table = pd.read_csv(out / name, comment="#")
        assert len(table)
        assert (out / name).read_text().startswith("# mwdlink")
    assert "made up" in (out / "report.html").read_text()
    pictures = {p.name for p in (out / "figures").iterdir()}
    assert pictures
    assert {p.removesuffix(".svg") + ".png" for p in pictures if p.endswith(".svg")} <= pictures
    assert max(map(len, done.stdout.splitlines())) <= 80
    assert done.stderr == ""


def test_trust_is_carried_on(
    run: Callable[..., Result], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Interface: blendcheck writes trust.toml, and blend takes it; all files read are listed."""
    no_pictures(monkeypatch)
    run("blendcheck study.toml --quiet", "--out", str(tmp_path / "check"))
    trust = tmp_path / "check" / "trust.toml"
    line = "blend study.toml --fractions 0.6,0.4 --members 20 --json --quiet --trust"
    record = json.loads(run(line, str(trust)).stdout)
    paths = [i["path"] for i in record["inputs"]]
    assert "study.toml" in paths and str(trust) in paths and "b-sweep.csv" in paths
    assert record["blend"]["route"] == "sweeps"


def test_own_card_is_used(
    run: Callable[..., Result], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Interface: calibrate writes card.toml, which every command takes as --polymer."""
    no_pictures(monkeypatch)
    run("calibrate study.toml --kernel power-law --quiet", "--out", str(tmp_path / "own"))
    card = str(tmp_path / "own" / "card.toml")
    line = "predict gpc.csv --members 0 --json --quiet --polymer"
    record = json.loads(run(line, card).stdout)
    assert record["polymer"]["viscosity"]["coefficient"] > 0
    assert "plateau modulus" in run("polymers", card).stdout


def test_same_input_same_bytes(run: Callable[..., Result], tmp_path: Path) -> None:
    """Interface: a second run, in place of the first, gives the same bytes in every file."""
    line = f"spectrum sweep.csv --members 20 --out {tmp_path / 'out'}"
    run(line)
    before = {p: p.read_bytes() for p in (tmp_path / "out").rglob("*") if p.is_file()}
    run(line, "--replace")
    assert {p: p.read_bytes() for p in before} == before


def test_members_only_when_asked(
    run: Callable[..., Result], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Interface: members.csv is written with --write-members only."""
    no_pictures(monkeypatch)
    line = "invert sweep.csv --polymer hdpe --members 20 --kernel power-law --exponent 2 --quiet"
    run(line, "--out", str(tmp_path / "a"))
    run(line, "--write-members", "--out", str(tmp_path / "b"))
    assert not (tmp_path / "a" / "members.csv").exists()
    assert len(pd.read_csv(tmp_path / "b" / "members.csv", comment="#"))


def test_wrong_kind_of_table(inputs: Path) -> None:
    """Common practice: a table of another kind is named, with the kinds that would do."""
    from mwdlink.cli.inputs import MEASURED, read_one
    from mwdlink.errors import InputError

    reading = dict(
        columns=None, omit=set(), omit_unreadable=False, decimal=None, block=None, sheet=None
    )
    with pytest.raises(InputError, match=r"is a distribution\. This command takes a sweep"):
        read_one(inputs / "gpc.csv", MEASURED, reading)


def test_json_is_all_of_stdout(run: Callable[..., Result]) -> None:
    """Interface: --json prints the record and nothing else; notes go to stderr, unless quiet."""
    line = "predict gpc.csv --polymer hdpe --members 0 --omega 1e-2:1e2:5 --json"
    done = run(line)
    record = json.loads(done.stdout)
    assert record["command"] == "predict" and record["model"]["kernels"]
    assert record["warnings"] and "note:" in done.stderr
    assert run(line, "--quiet").stderr == ""


def no_pictures(monkeypatch: pytest.MonkeyPatch) -> None:
    """Leave out the drawing, which takes longest, where it is not what is tested."""
    monkeypatch.setattr("mwdlink.cli.deliver.pictures_of", lambda record, tables: {})


def test_written_tables_are_read_again(
    run: Callable[..., Result], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Interface: written tables are accepted as input again, and say the same."""
    no_pictures(monkeypatch)
    out = tmp_path / "out"
    line = "--polymer hdpe --members 0 --calibration absolute --json --quiet"
    first: dict[str, Any] = json.loads(
        run(f"predict gpc.csv {line} --omega 1e-2:1e2:5", "--out", str(out)).stdout
    )
    assert (out / "result.json").read_text() == json.dumps(
        first, indent=2, ensure_ascii=False
    ) + "\n"
    assert len(pd.read_csv(out / "sweep.csv", comment="#")) == 21
    second = json.loads(run(f"predict {out / 'distribution.csv'} {line}").stdout)
    for key in ("averages", "terminal"):
        for name, value in first[key].items():
            assert second[key][name] == pytest.approx(value, rel=1e-3)
    run(f"spectrum {out / 'sweep.csv'} --members 0")


def test_used_folder_is_refused_before_computing(
    run: Callable[..., Result], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Interface: a non-empty --out without --replace is a usage error, found at once."""
    import mwdlink.measurement.spectrum_fit as module

    monkeypatch.setattr(module, "fit_spectrum", lambda *a, **k: pytest.fail("was computed"))
    (tmp_path / "old.txt").write_text("")
    done = run("spectrum sweep.csv", "--out", str(tmp_path), status=2)
    assert "--replace" in done.stderr


@pytest.mark.parametrize(
    "line",
    [
        "predict gpc.csv",
        "predict gpc.csv --polymer hdpee",
        "predict gpc.csv --polymer hdpe --exponent 0.3",
        "predict nowhere.csv --polymer hdpe",
        "spectrum sweep.csv --members -1",
        "master all.csv",
        "spectrum sweep.csv --no-such-option",
    ],
)
def test_usage(run: Callable[..., Result], line: str) -> None:
    """Interface: usage errors end with 2 and leave stdout empty."""
    done = run(line, status=2)
    assert done.stdout == ""
    assert "Error" in done.stderr


def test_bad_table_ends_with_3(inputs: Path) -> None:
    """Interface: input that cannot be used ends with 3, naming file, row and column."""
    import subprocess
    import sys

    (inputs / "bad.csv").write_text("omega [rad/s],G' [Pa],G'' [Pa]\n1,2,3\n2,x,3\n3,4,5\n4,5,6\n")
    done = subprocess.run(
        [sys.executable, "-m", "mwdlink", "spectrum", "bad.csv"],
        cwd=inputs,
        capture_output=True,
        text=True,
    )
    assert done.returncode == 3
    assert done.stdout == ""
    assert "bad.csv, row 3" in done.stderr and "G'" in done.stderr


def test_enforced_check_ends_with_4(run: Callable[..., Result], inputs: Path) -> None:
    """Interface: --enforce turns a failed check into status 4, after everything was said."""
    table = pd.read_csv(inputs / "sweep.csv")
    table["G' [Pa]"] *= np.where(np.arange(len(table)) % 2, 2.0, 0.5)
    table.to_csv(inputs / "inconsistent.csv", index=False)
    line = "spectrum inconsistent.csv --members 0 --noise 2%"
    assert "Kramers" in run(f"{line} --enforce", status=4).stderr
    run(line)


def test_exchanged_inputs_of_tail_are_told_their_order(inputs: Path) -> None:
    """House rule: an error says what to do; the distribution comes first."""
    from mwdlink.errors import InputError

    names = [str(inputs / n) for n in ("sweep.csv", "gpc.csv")]
    done = CliRunner().invoke(main, ["tail", *names, "--polymer", "hdpe"])
    assert isinstance(done.exception, InputError)
    assert "takes a distribution first and a sweep second" in str(done.exception.remedy)
