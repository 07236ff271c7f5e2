"""A result's folder: old or new, never half; tables that harm nobody."""

from __future__ import annotations

import json
import os
import random
import signal
import subprocess
import sys
import textwrap
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from mwdlink.errors import MwdlinkError
from mwdlink.files import results


def frame(token: int = 1, rows: int = 50) -> pd.DataFrame:
    return pd.DataFrame({"omega [rad/s]": range(1, rows + 1), "token [-]": [token] * rows})


def write(out: Path, token: int = 1, replace: bool = False, rows: int = 50) -> None:
    results.write_result(
        out,
        {"schema": "mwdlink/test/1", "token": token},
        {"fit.csv": frame(token, rows)},
        {"moduli.svg": f"<svg>{token}</svg>".encode()},
        f"<html>{token}</html>",
        replace,
        provenance="mwdlink test",
    )


def token_of(out: Path) -> int:
    """The token that every file of a folder carries; fails when they differ or one is missing."""
    token = json.loads((out / "result.json").read_text())["token"]
    assert set(pd.read_csv(out / "fit.csv", comment="#")["token [-]"]) == {token}
    assert (out / "figures" / "moduli.svg").read_text() == f"<svg>{token}</svg>"
    assert (out / "report.html").read_text() == f"<html>{token}</html>"
    return int(token)


def hidden(folder: Path) -> list[str]:
    return [n for n in os.listdir(folder) if n.startswith(".")]


def test_written_whole_and_twice_alike(tmp_path: Path) -> None:
    """Derived: the same content gives the same bytes, and nothing hidden is left."""
    write(tmp_path / "a" / "b")
    write(tmp_path / "c")
    assert token_of(tmp_path / "a" / "b") == 1
    for name in ("result.json", "fit.csv", "report.html"):
        assert (tmp_path / "a" / "b" / name).read_bytes() == (tmp_path / "c" / name).read_bytes()
    assert hidden(tmp_path) == hidden(tmp_path / "a") == []
    assert (tmp_path / "c" / "fit.csv").read_text().startswith("# mwdlink test\nomega [rad/s],")


def test_not_empty_needs_replace(tmp_path: Path) -> None:
    """Interface: a non-empty folder is refused without --replace; with it the new one stands."""
    out = tmp_path / "out"
    out.mkdir()
    write(out)  # an empty folder is no obstacle
    assert "not empty" in str(results.why_not(out))
    with pytest.raises(MwdlinkError, match="--replace"):
        write(out, 2)
    assert token_of(out) == 1
    write(out, 2, replace=True)
    assert token_of(out) == 2
    assert hidden(tmp_path) == []


def test_replace_destroys_only_results(tmp_path: Path) -> None:
    """Derived: --replace on a home folder, say, must not remove what no run has written."""
    out = tmp_path / "thesis"
    out.mkdir()
    (out / "chapter.tex").write_text("years of work")
    with pytest.raises(MwdlinkError, match="no earlier result"):
        write(out, replace=True)
    write(tmp_path / "out")
    (tmp_path / "out" / "notes.txt").write_text("mine")
    with pytest.raises(MwdlinkError, match=r"notes\.txt"):
        write(tmp_path / "out", 2, replace=True)
    assert (out / "chapter.tex").exists() and (tmp_path / "out" / "notes.txt").exists()


def test_refusals_name_the_reason(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Common practice: a file in the way, or the folder one stands in, is said in words."""
    (tmp_path / "file").write_text("")
    assert "is a file" in str(results.why_not(tmp_path / "file"))
    assert "not a folder" in str(results.why_not(tmp_path / "file" / "out"))
    monkeypatch.chdir(tmp_path)
    assert "folder you are in" in str(results.why_not("."))
    assert "folder you are in" in str(results.why_not("..", replace=True))


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write everywhere")
def test_read_only_parent(tmp_path: Path) -> None:
    """Common practice: no right to write is found before anything is computed."""
    (tmp_path / "locked").mkdir(mode=0o555)
    assert "no right" in str(results.why_not(tmp_path / "locked" / "out"))


@pytest.mark.parametrize("code", ["ENOSPC", "EROFS", "EACCES"])
def test_failing_disk_leaves_the_old(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, code: str
) -> None:
    """Derived: an error of the system in the middle of writing leaves the old folder as it was."""
    import errno

    out = tmp_path / "out"
    write(out)
    real, calls = Path.write_bytes, []

    def failing(self: Path, data: bytes) -> int:
        calls.append(self)
        if len(calls) == 3:
            raise OSError(getattr(errno, code), "no")
        return real(self, data)

    monkeypatch.setattr(Path, "write_bytes", failing)
    with pytest.raises(MwdlinkError, match="Nothing there was changed"):
        write(out, 2, replace=True)
    monkeypatch.undo()
    assert token_of(out) == 1
    assert hidden(tmp_path) == []


def test_full_disk_for_real(tmp_path: Path) -> None:
    """A small disk that really is full: clear words, the old folder intact."""
    disk = tmp_path / "disk"
    disk.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", "size=256k", "tmpfs", str(disk)]
    try:
        mounted = subprocess.run(mount, capture_output=True, text=True)
    except FileNotFoundError:
        pytest.skip("no mount command")
    if mounted.returncode:
        pytest.skip(f"a small disk cannot be mounted here: {mounted.stderr.strip()}")
    try:
        write(disk / "out")
        with pytest.raises(MwdlinkError, match="disk is full"):
            write(disk / "out", 2, replace=True, rows=100_000)
        assert token_of(disk / "out") == 1
        assert hidden(disk) == []
    finally:
        subprocess.run(["umount", str(disk)], check=False)


def test_swap_without_exchange(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Derived: where names cannot be exchanged in one step, two renames do the same."""
    monkeypatch.setattr(results, "_exchange", lambda a, b: False)
    write(tmp_path / "out")
    write(tmp_path / "out", 2, replace=True)
    assert token_of(tmp_path / "out") == 2
    assert hidden(tmp_path) == []


def test_put_back_after_a_kill_between_renames(tmp_path: Path) -> None:
    """Derived: an old folder that was left aside is put back by the next look at the place."""
    write(tmp_path / "out")
    os.rename(tmp_path / "out", tmp_path / ".out.mwdlink-old")
    (tmp_path / ".out.mwdlink-new-abc").mkdir()
    assert "not empty" in str(results.why_not(tmp_path / "out"))
    assert token_of(tmp_path / "out") == 1
    assert hidden(tmp_path) == []


WRITER = """
    import itertools, sys
    sys.path.insert(0, {here!r})
    import test_results
    from pathlib import Path
    out = Path(sys.argv[1])
    print("ready", flush=True)
    for token in itertools.count(2):
        test_results.write(out, token, replace=True, rows=2000)
"""


def test_kill_at_random_times(tmp_path: Path, full: bool) -> None:
    """Derived: a writer killed by signal 9 at any moment leaves one whole folder, old or new."""
    chance = random.Random(7)
    out = tmp_path / "out"
    write(out)
    code = textwrap.dedent(WRITER.format(here=str(Path(__file__).parent)))
    for _ in range(100 if full else 6):
        writer = subprocess.Popen(
            [sys.executable, "-c", code, str(out)], stdout=subprocess.PIPE, text=True
        )
        assert writer.stdout is not None
        writer.stdout.readline()
        time.sleep(chance.uniform(0.0, 0.15))
        writer.send_signal(signal.SIGKILL)
        writer.wait()
        writer.stdout.close()
        assert token_of(out) >= 1
    write(out, 0, replace=True)
    assert token_of(out) == 0
    assert hidden(tmp_path) == []


def test_formulas_become_text(tmp_path: Path) -> None:
    """Common practice: a text cell that a spreadsheet would run gets an apostrophe."""
    table = pd.DataFrame(
        {
            "name": ["=1+1", "@cmd", "-lot", "+x", "-5", "plain", None],
            "=x [-]": [-1.5, 2.0, 3.0, 4.0, 5.0, 6.0, 7.0],
        }
    )
    lines = results.csv_text(table, "from a,=b;\ttwo\nlines").splitlines()
    assert lines[0] == "# from a_=b_two_lines"
    assert lines[1] == "name,'=x [-]"
    cells = [line.split(",")[0] for line in lines[2:]]
    assert cells == ["'=1+1", "'@cmd", "'-lot", "'+x", "-5", "plain", ""]
    assert lines[2].endswith(",-1.5")
    # a spreadsheet that splits at semicolons or tabs would find a formula behind them
    text = results.csv_text(pd.DataFrame({"name": ["a;=1+1", "b; @x", "c\t-y", "d; e"]}))
    assert "a;'=1+1" in text and "b; '@x" in text and "c\t'-y" in text and "d; e" in text


def test_numbers_are_written_as_pandas_writes_them() -> None:
    """Compared with pandas.DataFrame.to_csv, byte for byte."""
    rng = np.random.default_rng(0)
    x = 10.0 ** rng.uniform(-300, 300, 500) * rng.choice([-1.0, 1.0], 500)
    x[:8] = [np.nan, np.inf, -np.inf, 0.0, -0.0, 1e16, 1e-5, 123456789012345680.0]
    for table in (
        pd.DataFrame({"a [g]": x, "b": np.arange(500), "c": x.round(3)}),
        pd.DataFrame({"a": [np.nan]}),
        pd.DataFrame({"a": [1.0], "b, c": [2.0]}),
        pd.DataFrame({"a": [1.0], "b": [np.float32(0.1)]}),
        pd.DataFrame({"a": [True], "b": [1.5]}),
        pd.DataFrame({"a": [], "b": []}, dtype=float),
    ):
        assert results.csv_text(table) == table.to_csv(index=False, lineterminator="\n")


def test_json_has_no_nan() -> None:
    """Interface: numbers in result.json are finite or null."""
    with pytest.raises(ValueError):
        results.json_text({"x": float("nan")})
