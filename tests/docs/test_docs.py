"""What the pages show works: every code block runs, every command is there and explains itself."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner

import mwdlink
from mwdlink.cli.main import COMMANDS, main

TOP = Path(__file__).parents[2]
PAGES = [TOP / "README.md", TOP / "DEVELOPERS.md", *sorted((TOP / "docs").glob("**/*.md"))]
BLOCK = re.compile(r"^```(\w+)[^\n]*\n(.*?)^```\s*$", re.MULTILINE | re.DOTALL)
# a block below this line is shown, not run: it installs, takes long, or is a fragment
NOT_RUN = re.compile(r"<!-- not run[^>]*-->\s*$")


def blocks(page: Path) -> list[tuple[str, str]]:
    """(language, code) of a page's runnable blocks, in order."""
    text = page.read_text(encoding="utf-8")
    found = []
    for match in BLOCK.finditer(text):
        if match[1] in ("python", "sh", "bash") and not NOT_RUN.search(text[: match.start()]):
            found.append((match[1], match[2]))
    return found


def pages_with_code() -> list[Path]:
    return [p for p in PAGES if p.is_file() and blocks(p)]


@pytest.mark.parametrize("page", pages_with_code(), ids=lambda p: str(p.relative_to(TOP)))
def test_code_blocks_run(page: Path, tmp_path: Path) -> None:
    """A reader who follows a page from top to bottom in an empty folder gets no error.

    The folder holds the shipped example data as `examples`, as a reader's checkout does. Python
    blocks of a page share one session, as they would in a notebook.
    """
    if (TOP / "examples").is_dir():
        (tmp_path / "examples").symlink_to(TOP / "examples")
    programs = tmp_path.parent / f"{tmp_path.name}-bin"
    programs.mkdir()
    command = programs / "mwdlink"
    command.write_text(f'#!/bin/sh\nexec "{sys.executable}" -m mwdlink "$@"\n')
    command.chmod(0o755)
    for name in ("python", "python3"):
        (programs / name).symlink_to(sys.executable)
    inside = [str(Path(mwdlink.__file__).parents[1]), os.environ.get("PYTHONPATH", "")]
    environment = os.environ | {
        "PATH": f"{programs}{os.pathsep}{os.environ['PATH']}",
        "PYTHONPATH": os.pathsep.join(filter(None, inside)),
        "MPLBACKEND": "Agg",
    }
    session = ""
    for language, code in blocks(page):
        if language == "python":
            session += code
            continue
        if session:
            run([sys.executable, "-c", session], tmp_path, environment, session)
            session = ""
        run(["bash", "-euo", "pipefail", "-c", code], tmp_path, environment, code)
    if session:
        run([sys.executable, "-c", session], tmp_path, environment, session)


def run(command: list[str], folder: Path, environment: dict[str, str], code: str) -> None:
    done = subprocess.run(command, cwd=folder, env=environment, capture_output=True, text=True)
    assert done.returncode == 0, f"{code}\n--- stdout\n{done.stdout}\n--- stderr\n{done.stderr}"


@pytest.mark.parametrize("name", COMMANDS)
def test_command_has_help(name: str) -> None:
    """House habit: each command says what it is for, with an example, in 80 columns."""
    done = CliRunner().invoke(main, [name, "--help"], terminal_width=80)
    assert done.exit_code == 0
    assert f"mwdlink {name}" in done.stdout.split("Options:")[0].partition("\n")[2]
    assert max(map(len, done.stdout.splitlines())) <= 80


@pytest.mark.parametrize("name", COMMANDS)
def test_options_have_help(name: str) -> None:
    """House habit: no option without a word on what it does."""
    command = main.get_command(None, name)  # type: ignore[arg-type]
    assert command is not None
    silent = [p.name for p in command.params if p.param_type_name == "option" and not p.help]
    assert not silent


@pytest.mark.parametrize("name", COMMANDS)
def test_command_is_documented(name: str) -> None:
    """Each command is named in the README's table and shown on a page of docs."""
    assert f"`{name}" in (TOP / "README.md").read_text(encoding="utf-8")
    pages = [p.read_text(encoding="utf-8") for p in PAGES if p.is_file() and p.parent != TOP]
    assert any(f"mwdlink {name}" in page for page in pages)


def test_links_lead_somewhere() -> None:
    """Every relative link of a page names a file that is there."""
    dead = []
    for page in PAGES:
        if not page.is_file():
            continue
        for link in re.findall(r"\]\(([^)#\s]+)(?:#[^)]*)?\)", page.read_text(encoding="utf-8")):
            if "://" not in link and not link.startswith("mailto:"):
                if not (page.parent / link).exists():
                    dead.append(f"{page.relative_to(TOP)}: {link}")
    assert not dead, "\n".join(dead)


def test_readme_and_check_agree() -> None:
    """The check installs and tests with the very commands of the README."""
    check = (TOP / ".ci" / "run").read_text(encoding="utf-8")
    readme = (TOP / "README.md").read_text(encoding="utf-8")
    assert "pip install '.[test]'" in readme
    assert re.search(r"pip\" install [^\n]*'\.\[test\]'", check)
    assert ".venv/bin/pytest" in readme
    assert '"$bin/pytest"' in check
