"""``mwdlink batch`` from the command line: statuses, streams, signals."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner

import mwdlink
from mwdlink.chains.families import lognormal
from mwdlink.cli.batch import in_words
from mwdlink.cli.main import main

QUICK = (
    "--polymer hdpe --kernel power-law --exponent 2 --smoothing 1e-2 --members 0 --noise 0.02 "
    "--workers 1"
).split()


@pytest.fixture(scope="module")
def lots(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Six made-up lots."""
    folder = tmp_path_factory.mktemp("lots")
    rng = np.random.default_rng(2)
    omega = np.geomspace(1e-2, 1e2, 13)
    melt = mwdlink.read_polymer("hdpe").melt(190.0)
    storage, loss = mwdlink.Relaxation(lognormal(1.2e5, 4.0), melt, mwdlink.Model()).moduli(omega)
    for i in range(6):
        noise = 1 + 0.02 * rng.standard_normal((2, omega.size))
        pd.DataFrame(
            {"omega [rad/s]": omega, "G' [Pa]": storage * noise[0], "G'' [Pa]": loss * noise[1]}
        ).to_csv(folder / f"lot {i}.csv", index=False)
    return folder


@pytest.fixture(autouse=True)
def threads_as_before() -> Iterator[None]:
    """The command holds BLAS to one thread for the rest of its process; not for other tests."""
    before = dict(os.environ)
    yield
    os.environ.clear()
    os.environ.update(before)


def test_part_failed(lots: Path, tmp_path: Path) -> None:
    """Contract: exit 5 when a part failed; JSON alone on stdout; a second run into it is usage."""
    bad = tmp_path / "bad.csv"
    bad.touch()
    out = tmp_path / "out"
    asked = ["batch", str(lots / "lot 1.csv"), str(bad), *QUICK, "--out", str(out)]
    asked += ["--label", "plant=made-up"]
    done = CliRunner().invoke(main, [*asked, "--json"])
    record = json.loads(done.stdout)
    assert (record["schema"], record["done"]) == ("mwdlink/batch/1", 1)
    assert record["failed"][0]["path"] == str(bad) and "empty" in record["failed"][0]["reason"]
    assert record["labels"] == {"plant": "made-up"}
    assert done.exit_code == 5
    assert (out / "failed.csv").is_file() and (out / "lot_1" / "distribution.csv").is_file()
    again = CliRunner().invoke(main, asked)
    assert again.exit_code == 2 and "not empty" in again.stderr
    over = CliRunner().invoke(main, [*asked, "--replace", "--quiet"])
    assert over.exit_code == 5 and over.stderr == ""
    assert "1 of 2 inputs were inverted" in over.stdout
    assert json.loads((out / "result.json").read_text())["taken_over"] == 1


def test_bad_usage(lots: Path, tmp_path: Path) -> None:
    """Contract: no inputs and no such kernel are usage; an empty folder is bad input."""
    assert CliRunner().invoke(main, ["batch"]).exit_code == 2
    done = CliRunner().invoke(main, ["batch", str(lots), "--kernel", "none"])
    assert done.exit_code == 2
    (tmp_path / "empty").mkdir()
    done = CliRunner().invoke(main, ["batch", str(tmp_path / "empty"), *QUICK])
    assert isinstance(done.exception, mwdlink.InputError)


def test_time_limit(lots: Path, tmp_path: Path) -> None:
    """Contract: what takes too long is a part that failed (5), said in the table; never a crash."""
    out = tmp_path / "out"
    asked = ["batch", str(lots / "lot 1.csv"), *QUICK, "--limit-seconds", "0.001"]
    done = CliRunner().invoke(main, [*asked, "--out", str(out)])
    assert done.exit_code == 5 and "0 of 1 inputs" in done.stdout
    assert "longer than the 0.001 s allowed" in (out / "failed.csv").read_text()
    assert CliRunner().invoke(main, [*asked[:-1], "-1"]).exit_code == 2
    done = CliRunner().invoke(main, [*asked, "--cluster", "tcp://127.0.0.1:1"])
    assert isinstance(done.exception, mwdlink.InputError)


@pytest.mark.parametrize(
    "number, status", [(signal.SIGTERM, 143), (signal.SIGINT, 130)], ids=["SIGTERM", "Ctrl-C"]
)
def test_broken_off(lots: Path, tmp_path: Path, number: int, status: int) -> None:
    """Contract: 143 and 130; what is finished stays and is said; the same command goes on."""
    workers = "2" if number == signal.SIGINT else "1"
    asked = [
        sys.executable, "-m", "mwdlink", "batch", str(lots), "--polymer", "hdpe",
        "--kernel", "power-law", "--members", "20",
        "--workers", workers, "--out", str(tmp_path / "out"),
    ]  # fmt: skip
    run = subprocess.Popen(
        asked,
        env={**os.environ, "PYTHONPATH": str(Path(mwdlink.__file__).parents[1])},
        stderr=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    partial = tmp_path / "out.partial"
    end = time.monotonic() + 120
    while time.monotonic() < end and not (partial.is_dir() and any(partial.glob("lot*"))):
        time.sleep(0.02)
    # a terminal sends Ctrl-C to all processes of the run
    os.killpg(run.pid, number) if number == signal.SIGINT else run.send_signal(number)
    _, said = run.communicate(timeout=60)
    assert run.returncode == status
    assert "Traceback" not in said and "inputs were dealt with" in said
    assert not (tmp_path / "out").exists() and not (partial / ".lock").exists()
    for folder in partial.glob("lot*"):
        assert json.loads((folder / "result.json").read_text())["command"] == "invert"
    assert not [p for p in partial.iterdir() if "mwdlink-new" in p.name]


def test_times_in_words() -> None:
    """As people say them."""
    assert [in_words(s) for s in (0.2, 42.4, 100, 5000, 12000)] == [
        "1 s", "42 s", "2 min", "83 min", "3 h 20 min",
    ]  # fmt: skip
