"""Starting and ending: version, help, nothing heavy on the way, and every exit status."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import textwrap
import time
from pathlib import Path

import pytest
from click.testing import CliRunner

import mwdlink
from mwdlink.cli import main as front


def call(*arguments: str, code: str = "", **environment: str) -> subprocess.CompletedProcess[str]:
    """Run ``python -m mwdlink`` (or some code) as a process of its own."""
    command = [sys.executable, "-c", textwrap.dedent(code)] if code else [
        sys.executable, "-m", "mwdlink"
    ]  # fmt: skip
    return subprocess.run(
        [*command, *arguments], capture_output=True, text=True, env=os.environ | environment
    )


def test_version_and_help() -> None:
    """Interface: ``--version``, ``-h`` and ``--help`` answer on stdout with status 0."""
    assert call("--version").stdout == f"mwdlink {mwdlink.__version__}\n"
    short, long = call("-h"), call("--help")
    assert short.returncode == long.returncode == 0
    assert short.stdout == long.stdout
    assert all(name in long.stdout for name in front.COMMANDS)
    assert "Exit status" in long.stdout


def test_bare_call_shows_help() -> None:
    """Common practice: without a command the help is shown, with the status of a usage error."""
    done = call()
    assert done.returncode == 2
    assert "Commands:" in done.stderr


@pytest.mark.parametrize("arguments", [["--version"], ["--help"]])
def test_nothing_heavy_is_loaded(arguments: list[str]) -> None:
    """House habit: version and help import click only."""
    code = f"""
        import sys
        from mwdlink.cli.main import main
        main({arguments!r}, standalone_mode=False)
        heavy = [m for m in ("numpy", "scipy", "pandas", "matplotlib") if m in sys.modules]
        sys.exit(f"loaded: {{heavy}}" if heavy else 0)
    """
    done = call(code=code)
    assert done.returncode == 0, done.stderr


def test_version_is_quick(full: bool, record_property: pytest.RecordProperty) -> None:
    """Target: ``mwdlink --version`` takes at most twice ``python -c "import click"``.

    The best of several runs is compared; asserted with --full only, as a busy machine lies.
    """

    def best(*command: str) -> float:
        times = []
        for _ in range(15 if full else 5):
            start = time.perf_counter()
            subprocess.run([sys.executable, *command], capture_output=True, check=True)
            times.append(time.perf_counter() - start)
        return min(times)

    ratio = best("-m", "mwdlink", "--version") / best("-c", "import click")
    record_property("version_to_click", ratio)
    print(f"mwdlink --version takes {ratio:.2f} times python -c 'import click'")
    assert ratio <= 2.0 or not full


def test_every_command_has_a_file() -> None:
    """House habit: one file a command, and no file without its command."""
    files = {p.stem for p in Path(front.__file__).parent.glob("*.py")}
    assert files - {"__init__", "main", "options", "inputs", "deliver", "summary"} == set(
        front.COMMANDS
    )


def test_did_you_mean() -> None:
    """Common practice: a near miss is answered with the nearest name, and status 2."""
    done = call("invrt")
    assert done.returncode == 2
    assert "invert" in done.stderr
    done = call("polymers", "hdpee")
    assert done.returncode == 2
    assert "'hdpe'" in done.stderr


STATUSES = [
    ("InputError('bad', path='a.csv', row=3, column='G', remedy='Mend it.')", 3),
    ("ModelError('no such constant')", 3),
    ("NotConverged('stuck')", 4),
    ("MwdlinkError('the disk is full')", 1),
    ("KeyError('x')", 1),
    ("KeyboardInterrupt()", 130),
]


@pytest.mark.parametrize(("error", "status"), STATUSES)
def test_statuses(error: str, status: int) -> None:
    """Interface: each kind of ending has its exit status, and one line says why."""
    code = f"""
        import click
        from mwdlink.errors import *
        from mwdlink.cli import main as front, polymers
        def fail(**kwargs):
            raise {error}
        polymers.command.callback = fail
        front.run(["polymers"])
    """
    done = call(code=code)
    assert done.returncode == status
    assert "Traceback" not in done.stderr
    assert len(done.stderr.strip().splitlines()) == 1
    if "InputError" in error:
        assert "a.csv, row 3, column 'G': bad Mend it." in done.stderr
    if "KeyError" in error:
        assert "report" in done.stderr
        assert "Traceback" in call(code=code, MWDLINK_DEBUG="1").stderr


SLEEPER = """
    import time
    from mwdlink.cli import main as front, polymers
    from mwdlink.files.results import folder_beside
    def sleep(**kwargs):
        with folder_beside({out!r}) as new:
            (new / "half").write_text("half")
            print("ready", flush=True)
            time.sleep(60)
    polymers.command.callback = sleep
    front.run(["polymers"])
"""


@pytest.mark.parametrize(("number", "status"), [(signal.SIGINT, 130), (signal.SIGTERM, 143)])
def test_signals(tmp_path: Path, number: int, status: int) -> None:
    """Interface: Ctrl-C ends with 130, SIGTERM with 143; a half-written folder is cleared away."""
    code = textwrap.dedent(SLEEPER.format(out=str(tmp_path / "out")))
    process = subprocess.Popen(
        [sys.executable, "-c", code], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    assert process.stdout is not None
    assert process.stdout.readline() == "ready\n"
    process.send_signal(number)
    _, errors = process.communicate(timeout=20)
    assert process.returncode == status
    assert "Traceback" not in errors
    assert os.listdir(tmp_path) == []


def test_reader_that_leaves() -> None:
    """Common practice: ``mwdlink ... | head -1`` ends quietly."""
    done = subprocess.run(
        ["bash", "-c", f"set -o pipefail; '{sys.executable}' -m mwdlink polymers --json | head -1"],
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0
    assert done.stderr == ""


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="no /dev/full")
def test_output_that_cannot_be_written() -> None:
    """Common practice: a full disk under standard output is one line and a status, no traceback."""
    for arguments, status in (("> /dev/full", 1), (">&-", 0)):
        line = f"'{sys.executable}' -m mwdlink polymers hdpe {arguments}"
        done = subprocess.run(["bash", "-c", line], capture_output=True, text=True)
        assert done.returncode == status
        assert "Traceback" not in done.stderr


def test_completion() -> None:
    """Interface: the shell completes commands and polymer names."""

    def complete(words: str, position: int) -> str:
        return call(
            code="import sys; from mwdlink.cli.main import run; run()",
            _MWDLINK_COMPLETE="bash_complete",
            COMP_WORDS=words,
            COMP_CWORD=str(position),
        ).stdout

    assert "plain,invert" in complete("mwdlink in", 1)
    assert "plain,polystyrene" in complete("mwdlink polymers polys", 2)
    assert "plain,hdpe" in complete("mwdlink predict x.csv --polymer hd", 4)


def test_no_colour_outside_a_terminal() -> None:
    """NO_COLOR's convention: no escape codes when it is set, nor into a pipe."""
    result = CliRunner().invoke(front.main, ["polymers"], color=True, env={"NO_COLOR": "1"})
    assert "\x1b" not in result.output
    assert "\x1b" not in call("polymers", "hdpe").stdout


def test_narrow_terminal() -> None:
    """A terminal of 40 columns is kept to."""
    done = call("polymers", "hdpe", COLUMNS="40")
    assert max(map(len, done.stdout.splitlines())) <= 40
