"""Faults brought about on purpose: folders, files, clocks and signals that turn against a batch."""

from __future__ import annotations

import csv
import io
import json
import os
import resource
import shutil
import signal
import subprocess
import sys
import threading
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import pytest
from lots_made import QUICK, QUICK_OPTIONS, contents, write_lots

import mwdlink
from mwdlink.errors import InputError, MwdlinkError
from mwdlink.runs.batch import Progress, batch, partial_of
from mwdlink.runs.lots import find_lots

HOME = str(Path(mwdlink.__file__).parents[1])
ENVIRONMENT = {**os.environ, "PYTHONPATH": HOME, "OPENBLAS_NUM_THREADS": "1"}


def command(home: Path, out: Path, *more: str) -> list[str]:
    """A quick batch on the command line."""
    run = [sys.executable, "-m", "mwdlink", "batch", str(home), *QUICK_OPTIONS]
    return [*run, "--workers", "1", "--out", str(out), *more]


def started(asked: list[str], partial: Path) -> subprocess.Popen[str]:
    """A run of which at least one input is finished and others are not."""
    run = subprocess.Popen(
        asked, env=ENVIRONMENT, stderr=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )
    end = time.monotonic() + 120
    while time.monotonic() < end and run.poll() is None:
        if partial.is_dir() and any(partial.glob("lot*")):
            break
        time.sleep(0.005)
    return run


# ------------------------------------------------------------------------------ signals, two runs


@pytest.fixture(scope="module")
def many(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, bytes]]:
    """Thirty lots, and what an undisturbed run of the command makes of them."""
    top = tmp_path_factory.mktemp("many")
    home = write_lots(top / "in", 30)
    subprocess.run(command(home, top / "out"), env=ENVIRONMENT, check=True, capture_output=True)
    return home, contents(top / "out")


@pytest.mark.parametrize(
    "number, status", [(signal.SIGTERM, 143), (signal.SIGINT, 130)], ids=["SIGTERM", "Ctrl-C"]
)
def test_signal_then_again(
    many: tuple[Path, dict[str, bytes]], tmp_path: Path, number: int, status: int
) -> None:
    """Contract: 143 and 130; the same command completes, nothing twice, the same to the byte."""
    home, wanted = many
    out = tmp_path / "out"
    run = started(command(home, out), partial_of(out))
    run.send_signal(number)
    _, said = run.communicate(timeout=60)
    assert run.returncode == status, said
    assert "Traceback" not in said and "the same command goes on from there" in said
    kept = {p.parent.name: p.stat().st_mtime_ns for p in partial_of(out).glob("lot*/result.json")}
    count = len(list(partial_of(out).glob("lot*")))
    assert 0 < count < 30 and not out.exists()
    again = subprocess.run(command(home, out), env=ENVIRONMENT, capture_output=True, text=True)
    assert again.returncode == 0 and "Going on" in again.stderr
    assert json.loads((out / "result.json").read_text())["taken_over"] == count
    assert contents(out) == wanted
    assert all((out / n / "result.json").stat().st_mtime_ns == t for n, t in kept.items())


def test_two_runs_at_once(many: tuple[Path, dict[str, bytes]], tmp_path: Path) -> None:
    """The second of two real runs into one folder is refused; the first does not notice."""
    home, wanted = many
    out = tmp_path / "out"
    first = started(command(home, out), partial_of(out))
    first.send_signal(signal.SIGSTOP)  # so that it surely is not done before the second asks
    second = subprocess.run(command(home, out), env=ENVIRONMENT, capture_output=True, text=True)
    first.send_signal(signal.SIGCONT)
    assert second.returncode == 1
    assert f"another run (process {first.pid} on" in second.stderr
    assert first.wait(120) == 0
    first.communicate()
    assert contents(out) == wanted


# -------------------------------------------------------------------------------- output folders


READ_ONLY = """
import os, sys
from pathlib import Path
sys.path[:0] = [{tests!r}]
from lots_made import QUICK
import mwdlink.figures.gather
import mwdlink.runs.one
from mwdlink.runs.batch import batch, partial_of
mwdlink.figures.gather.pictures_of = lambda *parts: {{}}
mwdlink.runs.one.WAITS = (0.0,)
out = Path({out!r})
def shut(p):
    if p.done == 2:
        os.chmod(partial_of(out), 0o555)
def tried(progress=None):
    try:
        batch([{lots!r}], "hdpe", out=out, progress=progress, **QUICK)
    except mwdlink.MwdlinkError as error:
        print(error)
tried(shut)
print(sorted(p.name for p in partial_of(out).glob("lot*")))
os.chmod(partial_of(out), 0o755)
os.chmod(out.parent, 0o555)
tried()
os.chmod(out.parent, 0o755)
tried()
"""


def test_read_only_folder(lots: Path, whole: Path, tmp_path: Path) -> None:
    """No right to write, from the start or from the middle on: said, what is done is kept.

    Root may write anywhere; this run gives that right up.
    """
    out = tmp_path / "home" / "out"
    out.parent.mkdir()
    script = READ_ONLY.format(tests=str(Path(__file__).parent), out=str(out), lots=str(lots))
    run = [sys.executable, "-c", script]
    if os.geteuid() == 0:
        if shutil.which("setpriv") is None:
            pytest.skip("root may write anywhere, and setpriv is not here")
        less = "-dac_override,-dac_read_search"
        run = ["setpriv", f"--bounding-set={less}", f"--inh-caps={less}", *run]
    done = subprocess.run(run, env=ENVIRONMENT, capture_output=True, text=True)
    if os.geteuid() == 0 and "setpriv" in done.stderr:
        pytest.skip(f"this root cannot give up its rights: {done.stderr[:200]}")
    assert done.returncode == 0, done.stderr
    middle, names, start = done.stdout.splitlines()
    assert "there is no right to write in" in middle and "2 of 8 inputs" in middle
    assert names == "['lot_1', 'lot_2']"
    assert "there is no right to write in" in start
    assert contents(out) == contents(whole)


def test_folder_that_is_away_for_a_moment(lots: Path, whole: Path, tmp_path: Path) -> None:
    """A share that comes back within a second costs that second and nothing else."""
    out, away = tmp_path / "out", tmp_path / "away"
    timers = []

    def take_away(p: Progress) -> None:
        if p.done == 3 and not timers:
            partial_of(out).rename(away)
            timers.append(threading.Timer(0.2, lambda: away.rename(partial_of(out))))
            timers[0].start()

    result = batch([lots], "hdpe", out=out, progress=take_away, **QUICK)
    timers[0].join()
    assert len(result.rows) == 8 and contents(out) == contents(whole)


def test_finished_folder_that_vanishes(lots: Path, tmp_path: Path) -> None:
    """A lot's folder taken away after it was done is noticed before the whole takes its name."""
    home = write_lots(tmp_path / "in", 3)
    out = tmp_path / "out"

    def take_away(p: Progress) -> None:
        if p.done == 2:
            shutil.rmtree(partial_of(out) / "lot_1")

    with pytest.raises(MwdlinkError, match=r"have vanished .* the first is lot_1. Run again"):
        batch([home], "hdpe", out=out, progress=take_away, **QUICK)
    assert not out.exists()
    assert batch([home], "hdpe", out=out, **QUICK).reused == 2


# --------------------------------------------------------------------------------- input folders


def test_input_folder_that_vanishes(lots: Path, tmp_path: Path) -> None:
    """The inputs not yet read are listed as failed; what was done stays."""
    home = write_lots(tmp_path / "in", 4)

    def take_away(p: Progress) -> None:
        shutil.rmtree(home, ignore_errors=True)

    result = batch([home], "hdpe", out=tmp_path / "out", progress=take_away, **QUICK)
    assert len(result.rows) == 1 and (tmp_path / "out" / "lot_1" / "result.json").is_file()
    assert {f["reason"] for f in result.failed} == {"there is no such file."}


def test_links_in_a_circle(lots: Path, tmp_path: Path) -> None:
    """Folders that lead into each other, and files that lead to each other, end at once."""
    home = write_lots(tmp_path / "in", 1)
    (home / "a").mkdir()
    (home / "b").mkdir()
    (home / "a" / "to b").symlink_to("../b")
    (home / "b" / "to a").symlink_to("../a")
    (home / "a" / "up").symlink_to(home)
    (home / "one.csv").symlink_to("two.csv")
    (home / "two.csv").symlink_to("one.csv")
    result = batch([home], "hdpe", **QUICK)
    assert [r["lot"] for r in result.rows] == ["lot 1"]
    assert [f["lot"] for f in result.failed] == ["one", "two"]
    assert all("symbolic links" in f["reason"] for f in result.failed)


def test_clock_set_back(
    lots: Path, whole: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Times of files and of the clock decide nothing: finished inputs are taken over by content."""
    home = tmp_path / "in"
    shutil.copytree(lots, home)
    out = tmp_path / "out"
    names = sorted(p.name for p in home.iterdir())

    class BreakOff(BaseException):
        pass

    def back(p: Progress) -> None:
        # the clock goes from now to 1970 while the batch runs
        monkeypatch.setattr(time, "time", lambda: 0.0)
        if p.done == 4:
            raise BreakOff

    with pytest.raises(BreakOff):
        batch([home], "hdpe", out=out, progress=back, **QUICK)
    # results older than anything, inputs that come from the future
    for path in partial_of(out).rglob("*"):
        os.utime(path, (0, 0))
    for name in names:
        os.utime(home / name, (4e9, 4e9))
    # a finished input of the same size and age, but of other bytes
    head, first, rest = (home / names[0]).read_text().split("\n", 2)
    (home / names[0]).write_text("\n".join([head, rest.rstrip("\n"), first, ""]))
    assert (home / names[0]).stat().st_size == (lots / names[0]).stat().st_size
    os.utime(home / names[0], (4e9, 4e9))
    result = batch([home], "hdpe", out=out, **QUICK)
    assert result.reused == 3 and len(result.rows) == 8
    wanted = list(csv.DictReader((whole / "summary.csv").read_text().splitlines()[1:]))
    for row, there in zip(result.rows, wanted, strict=True):
        assert (row["sha256"] == there["sha256"]) == (row["lot"] != "lot 1")
        assert row["Mw [g/mol]"] == pytest.approx(float(there["Mw [g/mol]"]), rel=1e-9)


# ----------------------------------------------------------------------------------- input files


def test_no_bytes_at_all(tmp_path: Path) -> None:
    """A batch of nothing but empty files: reasons, status 5, a summary that is a table."""
    home = tmp_path / "in"
    home.mkdir()
    for name in ("a.csv", "b.txt"):
        (home / name).touch()
    out = tmp_path / "out"
    done = subprocess.run(
        command(home, out, "--json"), env=ENVIRONMENT, capture_output=True, text=True
    )
    record = json.loads(done.stdout)
    assert done.returncode == 5 and record["done"] == 0
    assert all("empty" in f["reason"] for f in record["failed"]) and len(record["failed"]) == 2
    assert (out / "summary.csv").read_text().splitlines()[1] == "lot,path"
    assert len((out / "failed.csv").read_text().splitlines()) == 4


def test_two_gigabytes(lots: Path, tmp_path: Path) -> None:
    """Refused by size within a second, nothing of it read; its neighbour is done."""
    home = write_lots(tmp_path / "in", 1)
    with open(home / "huge.csv", "wb") as stream:
        stream.truncate(2 * 1024**3)
    began = time.process_time()
    result = batch([home / "huge.csv"], "hdpe", **QUICK)
    assert time.process_time() - began < 1.0
    assert "2147 MB, more than the" in result.failed[0]["reason"]
    assert len(batch([home], "hdpe", **QUICK).rows) == 1


def test_a_million_rows(tmp_path: Path) -> None:
    """Read, counted and refused with what to do: under 2 GB of memory and 2 minutes of work."""
    path = tmp_path / "many.csv"
    with open(path, "w") as stream:
        stream.write("T [C],omega [rad/s],G' [Pa],G'' [Pa]\n")
        stream.write("\n".join(map("190,{0},1e4,1e4".format, range(1, 10**6 + 1))))
    done = subprocess.run(
        command(path, tmp_path / "out", "--quiet"), env=ENVIRONMENT, capture_output=True, text=True
    )
    assert done.returncode == 5
    assert "Give at most 2000" in (tmp_path / "out" / "failed.csv").read_text()
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    assert used.ru_maxrss < 2e6  # kB; the largest of all runs so far


NAMES = [
    "=cmd|'x'!A1", "+1+1", "-1+1", "@SUM(A1)", "--workers", "-h", "new\nline", "cr\rhere", "\ttab",
    "<script>alert(1)<!script>", '"quoted"', "it's", "a b", "a,=1+1", "&amp;", "é",
]  # fmt: skip


def test_names_no_spreadsheet_or_browser_runs(lots: Path, tmp_path: Path) -> None:
    """Hostile names, of good files and of bad ones, through the command line to table and page.

    A cell that begins as a formula would is the danger (common practice; OWASP: CSV injection).
    """
    home = tmp_path / "in"
    home.mkdir()
    good = (lots / "lot 1.csv").read_bytes()
    for name in NAMES:
        name = name.replace("!script", "\u2215script")
        (home / f"{name}.csv").write_bytes(good)
        (home / f"{name} bad.csv").write_bytes(b"nothing\n")
    out = tmp_path / "out"
    # from inside the folder, so that the names themselves are what is typed
    names = [lot.path for lot in find_lots([home])[0]]
    typed = [os.path.relpath(n, home) for n in names]
    run = [sys.executable, "-m", "mwdlink", "batch", *QUICK_OPTIONS]
    run += ["--workers", "1", "--out", str(out), "--", *typed]
    done = subprocess.run(run, env=ENVIRONMENT, capture_output=True, cwd=home)
    assert done.returncode == 5, done.stderr
    for table in ("summary.csv", "failed.csv"):
        text = (out / table).read_text(encoding="utf-8")
        assert len(text.splitlines()) == len(NAMES) + 2
        rows = list(csv.reader(io.StringIO(text.split("\n", 1)[1])))
        assert len({len(row) for row in rows}) == 1
        for cell in (c for row in rows for c in row):
            harmless = cell[:1] not in ("=", "+", "-", "@", "\t", "\r")
            assert harmless or cell.replace(".", "").lstrip("-").replace("e-", "").isdigit(), cell
    page = (out / "report.html").read_text(encoding="utf-8")
    assert "<script>alert" not in page and "&lt;script&gt;alert" in page
    assert b"\x1b" not in done.stdout and b"Traceback" not in done.stderr


# ------------------------------------------------------------------------------------ time limit


def test_time_limit(lots: Path, monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """A lot that takes too long is given up with a reason; the others are done, as without."""
    from mwdlink.runs import one

    real = one.invert

    def slow(curve: Any, *rest: Any, **options: Any) -> Any:
        if "lot 3" in str(curve.path):
            # its minute is over at once: no other lot may meet the limit, however slow the machine
            left, again = signal.getitimer(signal.ITIMER_REAL)
            assert 0 < left <= 60 and again == 1.0
            signal.setitimer(signal.ITIMER_REAL, 0.05, again)
        while "lot 3" in str(curve.path):
            try:
                time.sleep(60)
            except Exception:  # what guards against faults must not hold the limit up
                continue
        return real(curve, *rest, **options)

    monkeypatch.setattr(one, "invert", slow)
    before = signal.getsignal(signal.SIGALRM)
    result = batch([lots], "hdpe", out=tmp_path / "out", limit_seconds=60.0, **QUICK)
    assert [f["lot"] for f in result.failed] == ["lot 3"] and len(result.rows) == 7
    assert (
        result.failed[0]["kind"] == "time" and "longer than the 60 s" in result.failed[0]["reason"]
    )
    assert not (tmp_path / "out" / "lot_3").exists()
    assert signal.getsignal(signal.SIGALRM) is before
    assert signal.getitimer(signal.ITIMER_REAL) == (0.0, 0.0)


def test_time_limit_of_workers(lots: Path, whole: Path, tmp_path: Path) -> None:
    """In processes: none in time, all listed; all in time, the same to the byte."""
    some = [lots / f"lot {i}.csv" for i in (1, 2, 3)]
    slow = QUICK | {"members": 2000, "smoothing": None, "exponent": None}
    result = batch(some, "hdpe", workers=2, limit_seconds=0.05, **slow)
    assert [f["kind"] for f in result.failed] == ["time"] * 3 and not result.rows
    batch([lots], "hdpe", out=tmp_path / "out", workers=2, limit_seconds=600.0, **QUICK)
    assert contents(tmp_path / "out") == contents(whole)


def test_time_limit_that_cannot_be_kept(lots: Path) -> None:
    """Threads cannot be stopped safely: said before anything is done."""
    with ThreadPoolExecutor(1) as pool, pytest.raises(InputError, match="processes of this"):
        batch([lots], "hdpe", executor=pool, limit_seconds=5.0, **QUICK)
    with pytest.raises(InputError, match="cannot be kept"):
        batch([lots], "hdpe", limit_seconds=0.0, **QUICK)


def test_public_name() -> None:
    """Interface: what the command does is one Python call, found at the top."""
    assert mwdlink.batch is batch
