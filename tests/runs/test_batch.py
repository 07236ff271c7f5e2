"""Many inputs to one table: what it holds, what a fault costs, what a second run does."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pandas as pd
import pytest
from lots_made import QUICK, contents, sweep_table, write_lots
from melts import mean_within

import mwdlink
from mwdlink.chains.families import lognormal
from mwdlink.errors import InputError, MwdlinkError
from mwdlink.files.results import csv_text
from mwdlink.runs.batch import Progress, batch, partial_of
from mwdlink.runs.lock import RunLock


def test_summary_is_what_invert_gives(lots: Path, whole: Path) -> None:
    """Each row and each folder hold what the same call for one sweep gives (derived)."""
    table = pd.read_csv(whole / "summary.csv", comment="#")
    assert list(table["lot"]) == [f"lot {i}" for i in range(1, 9)]
    alone = mwdlink.invert(
        mwdlink.read_sweep(lots / "lot 3.csv"), mwdlink.read_polymer("hdpe"), **QUICK
    )
    assert table["Mw [g/mol]"][2] == pytest.approx(alone.averages["Mw_g_per_mol"].value, rel=1e-9)
    record = json.loads((whole / "lot_3" / "result.json").read_text())
    assert record["averages"]["Mz_g_per_mol"]["value"] == pytest.approx(
        alone.averages["Mz_g_per_mol"].value, rel=1e-9
    )
    assert record["labels"]["lot"] == "lot 3"
    top = json.loads((whole / "result.json").read_text())
    assert top["schema"] == "mwdlink/batch/1" and top["done"] == 8 and top["failed"] == []
    assert len(top["inputs"]) == 8 and top["throughput_per_s"] > 0
    assert (whole / "figures" / "trend-mw.svg").is_file() and (whole / "report.html").is_file()
    assert not partial_of(whole).exists()


def test_outlying_lot_is_named(lots: Path, whole: Path) -> None:
    """The lot made 1.6 times as long is the one outside the limits; answer and page name it."""
    top = json.loads((whole / "result.json").read_text())
    assert {o["lot"] for o in top["outlying"]} == {"lot 6"}
    assert "lot 6" in (whole / "report.html").read_text()


@pytest.mark.parametrize("kind", ["processes", "threads"])
def test_any_hands_same_bytes(lots: Path, whole: Path, tmp_path: Path, kind: str) -> None:
    """Every file is the same to the byte for one process, two, and an executor that was given."""
    out = tmp_path / "out"
    if kind == "processes":
        batch([lots], "hdpe", out=out, workers=2, **QUICK)
    else:
        with ThreadPoolExecutor(2) as pool:
            batch([lots], "hdpe", out=out, executor=pool, **QUICK)
    assert contents(out) == contents(whole)


def test_one_fault_stops_none_of_the_others(lots: Path, tmp_path: Path) -> None:
    """Files of every bad kind are listed with their reasons; the good ones are done."""
    home = tmp_path / "in"
    home.mkdir()
    good = (lots / "lot 1.csv").read_bytes()
    names = ["=cmd|'x'!A1", "-dash", "new\nline", '<b>"&', "quote's ", "a b", "+A1", "@x"]
    for name in names:
        (home / f"{name}.csv").write_bytes(good)
    (home / os.fsdecode(b"raw\xff.csv")).write_bytes(good)
    (home / "empty.csv").touch()
    with open(home / "huge.csv", "wb") as stream:
        stream.truncate(2 * 1024**3)
    os.mkfifo(home / "pipe.csv")
    (home / "loop.csv").symlink_to("loop.csv")
    (home / "text.csv").write_text("no table at all")
    (home / "gpc.csv").write_text("M [g/mol],dW/dlog10M\n1e4,0.1\n1e5,1\n1e6,0.1\n")
    bad = pd.read_csv(lots / "lot 1.csv").astype(object)
    bad.loc[3, "G' [Pa]"] = "oops"
    bad.to_csv(home / "cell.csv", index=False)
    rows = pd.concat([pd.read_csv(lots / "lot 1.csv").iloc[[0]]] * 3000)
    rows["omega [rad/s]"] *= 1.0 + 1e-3 * pd.Series(range(3000), index=rows.index)
    rows.to_csv(home / "many.csv", index=False)
    out = tmp_path / "out"
    result = batch([home], "hdpe", out=out, **QUICK)
    assert len(result.rows) == len(names) + 1
    reasons = {f["lot"]: f["reason"] for f in result.failed}
    assert set(reasons) == {"empty", "huge", "pipe", "loop", "text", "gpc", "cell", "many"}
    assert "empty" in reasons["empty"] and "2147 MB" in reasons["huge"]
    assert "ordinary" in reasons["pipe"] and "distribution" in reasons["gpc"]
    assert "row 5" in reasons["cell"] and "points" in reasons["many"]
    assert all(f["kind"] == "input" for f in result.failed)
    written = pd.read_csv(out / "failed.csv", comment="#")
    assert list(written["lot"]) == [f["lot"] for f in result.failed]
    # no cell of the table runs in a spreadsheet, and no line is broken by a name
    text = (out / "summary.csv").read_text()
    assert len(text.splitlines()) == len(names) + 3
    for cell in pd.read_csv(out / "summary.csv", comment="#", dtype=str)["lot"]:
        assert cell[0] not in "=+-@\t\r"
    page = (out / "report.html").read_text()
    assert "<b>" not in page.split("<svg")[0] and "=cmd" in page


def test_file_that_vanishes(lots: Path, tmp_path: Path) -> None:
    """An input taken away after the list was made is one failure among results."""
    home = write_lots(tmp_path / "in", 3)

    def take_away(p: Progress) -> None:
        (home / "lot 3.csv").unlink(missing_ok=True)

    result = batch([home], "hdpe", progress=take_away, **QUICK)
    assert [f["reason"] for f in result.failed] == ["there is no such file."]
    assert len(result.rows) == 2


class BreakOff(BaseException):
    """Stands for Ctrl-C and SIGTERM, which unwind the stack in the same way."""


def broken_off(home: Path, out: Path, after: int, **options: object) -> None:
    def stop(p: Progress) -> None:
        if p.done == after:
            raise BreakOff

    with pytest.raises(BreakOff):
        batch([home], "hdpe", out=out, progress=stop, **(QUICK | options))  # type: ignore[arg-type]


def test_goes_on_where_it_was(lots: Path, whole: Path, tmp_path: Path) -> None:
    """After a break nothing is done again, nothing is lost, and the bytes are the same."""
    out = tmp_path / "out"
    broken_off(lots, out, 3)
    assert not out.exists() and len([p for p in partial_of(out).iterdir() if p.is_dir()]) == 3
    said: list[str] = []
    result = batch([lots], "hdpe", out=out, note=said.append, **QUICK)
    assert result.reused == 3 and "Going on" in said[0]
    assert contents(out) == contents(whole)
    assert not partial_of(out).exists()


def test_only_the_same_is_taken_over(lots: Path, tmp_path: Path) -> None:
    """Other settings, other bytes or a damaged folder are computed anew."""
    home = write_lots(tmp_path / "in", 3)
    out = tmp_path / "out"
    batch([home], "hdpe", out=out, **QUICK)
    (home / "lot 1.csv").write_bytes((lots / "lot 6.csv").read_bytes())
    (out / "lot_2" / "fit.csv").unlink()
    assert batch([home], "hdpe", out=out, replace=True, **QUICK).reused == 1
    again = batch([home], "hdpe", out=out, replace=True, **QUICK)
    assert again.reused == 3 and again.throughput_per_s is None
    other = QUICK | {"noise": 0.03}
    assert batch([home], "hdpe", out=out, replace=True, **other).reused == 0
    assert not partial_of(out).exists()


def test_lots_no_longer_asked_for(lots: Path, tmp_path: Path) -> None:
    """Folders of inputs that are gone do not stand beside a summary that has them not."""
    home = write_lots(tmp_path / "in", 4)
    out = tmp_path / "out"
    broken_off(home, out, 3)
    (home / "lot 1.csv").unlink()
    batch([home], "hdpe", out=out, **QUICK)
    assert sorted(p.name for p in out.iterdir() if p.name.startswith("lot")) == [
        "lot_2", "lot_3", "lot_4",
    ]  # fmt: skip


def test_earlier_result_stays_until_the_new_one_is_whole(lots: Path, tmp_path: Path) -> None:
    """A broken --replace leaves the old folder as it was, byte for byte."""
    home = write_lots(tmp_path / "in", 3)
    out = tmp_path / "out"
    batch([home], "hdpe", out=out, **QUICK)
    before = contents(out)
    broken_off(home, out, 2, noise=0.05, replace=True)
    assert contents(out) == before
    with pytest.raises(MwdlinkError, match="not empty"):
        batch([home], "hdpe", out=out, **QUICK)


def test_two_runs_into_one_folder(lots: Path, tmp_path: Path) -> None:
    """The second is refused in words that name the first; a dead one's lock is no obstacle."""
    out = tmp_path / "out"
    partial = partial_of(out)
    partial.mkdir()
    held = RunLock(partial, "out")
    with pytest.raises(MwdlinkError, match=f"process {os.getpid()} on .* is writing"):
        batch([lots], "hdpe", out=out, **QUICK)
    held.release()
    (partial / ".lock").write_text('{"process": 4194300, "host": "elsewhere", "since": "1970"}')
    said: list[str] = []
    home = write_lots(tmp_path / "in", 2)
    assert len(batch([home], "hdpe", out=out, note=said.append, **QUICK).rows) == 2
    assert any("died" in text and "4194300" in text for text in said)


def test_folder_of_someone_else(lots: Path, tmp_path: Path) -> None:
    """A folder that no batch made is neither written into nor replaced."""
    (tmp_path / "out.partial").mkdir()
    (tmp_path / "out.partial" / "thesis.txt").write_text("x")
    with pytest.raises(MwdlinkError, match="in the way"):
        batch([lots], "hdpe", out=tmp_path / "out", **QUICK)
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine" / "thesis.txt").write_text("x")
    with pytest.raises(MwdlinkError, match="--replace leaves it alone"):
        batch([lots], "hdpe", out=tmp_path / "mine", replace=True, **QUICK)
    assert (tmp_path / "mine" / "thesis.txt").read_text() == "x"


def test_folder_that_vanishes(lots: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A work folder taken away stops the run in clear words; it is not made anew half empty."""
    import shutil

    monkeypatch.setattr("mwdlink.runs.one.WAITS", (0.0,))
    out = tmp_path / "out"

    def take_away(p: Progress) -> None:
        shutil.rmtree(partial_of(out), ignore_errors=True)

    with pytest.raises(MwdlinkError, match=r"has vanished.* 1 of 8 inputs"):
        batch([lots], "hdpe", out=out, progress=take_away, **QUICK)
    assert not out.exists() and not partial_of(out).exists()


FULL = """
mount -t tmpfs -o size=60k small "$1" && cd "$1" || exit 77
"$2" -m mwdlink batch "$3" {options} --workers 1 --out out > /dev/null
echo "status $?"; ls
mount -o remount,size=20m "$1"
"$2" -m mwdlink batch "$3" {options} --workers 1 --out out --quiet > /dev/null
echo "status $?"; ls
"""


def test_full_disk(lots: Path, tmp_path: Path) -> None:
    """On a disk of 60 kB the run stops, keeps what is done, and goes on when there is room."""
    from lots_made import QUICK_OPTIONS

    script = FULL.format(options=" ".join(QUICK_OPTIONS))
    (tmp_path / "small").mkdir()
    try:
        done = subprocess.run(
            ["unshare", "-rm", "sh", "-c", script, "sh", tmp_path / "small", sys.executable, lots],
            capture_output=True,
            text=True,
            timeout=300,
            env={**os.environ, "PYTHONPATH": str(Path(mwdlink.__file__).parents[1])},
        )
    except FileNotFoundError:
        pytest.skip("unshare is not here")
    if done.returncode == 77 or "status" not in done.stdout:
        pytest.skip(f"no small disk can be mounted here: {done.stderr[:200]}")
    first, second = done.stdout.split("status ")[1:]
    assert first.split() == ["1", "out.partial"]
    assert "the disk is full" in done.stderr and "finished and kept" in done.stderr
    assert second.split() == ["0", "out"]


def test_against_a_reference(lots: Path, tmp_path: Path) -> None:
    """The reference against another noise of itself agrees; a lot 10 % stiffer differs by that."""
    import numpy as np

    home = tmp_path / "in"
    home.mkdir()
    rng = np.random.default_rng(5)
    sweep_table(1.2e5, rng).to_csv(tmp_path / "retained.csv", index=False)
    sweep_table(1.2e5, rng).to_csv(home / "alike.csv", index=False)
    sweep_table(1.2e5, rng, 1.1).to_csv(home / "stiffer.csv", index=False)
    sweep_table(1.5e5, rng).to_csv(home / "longer.csv", index=False)
    options = QUICK | {"members": 40}
    result = batch([home], "hdpe", against=tmp_path / "retained.csv", **options)
    rows = {r["lot"]: r for r in result.rows}
    assert rows["alike"]["differs from reference"] == "no"
    assert rows["stiffer"]["differs from reference"] == "yes"
    assert rows["longer"]["differs from reference"] == "yes"
    low, high = (rows["stiffer"][f"G ratio {end} [-]"] for end in ("low", "high"))
    assert low < 1.1 < high or abs(rows["stiffer"]["G ratio [-]"] - 1.1) < 0.02
    assert rows["alike"]["Mw ratio low [-]"] < 1.0 < rows["alike"]["Mw ratio high [-]"]
    window = [rows["longer"][f"M window {end} [g/mol]"] for end in ("low", "high")]
    true = mean_within(lognormal(1.5e5, 4.0), *window) / mean_within(lognormal(1.2e5, 4.0), *window)
    assert rows["longer"]["Mw ratio low [-]"] < true < rows["longer"]["Mw ratio high [-]"]
    assert "2 differ from the reference" in result.answer()


def test_nothing_written_without_a_folder(lots: Path, tmp_path: Path) -> None:
    """No `out`, no files; no polymer, no run."""
    os.chdir(tmp_path)
    result = batch([lots / "lot 1.csv"], "hdpe", **QUICK)
    assert len(result.rows) == 1 and not any(tmp_path.iterdir())
    assert "lot 1" in csv_text(result.to_frame())
    with pytest.raises(InputError, match="no polymer"):
        batch([lots / "lot 1.csv"], **QUICK)
