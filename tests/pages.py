"""The pages of the documentation and the running of their code blocks, for the tests."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path

import mwdlink

TOP = Path(__file__).parents[1]
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


def name_of(page: Path) -> str:
    return str(page.relative_to(TOP))


def run_page(page: Path, folder: Path) -> str:
    """Follow a page from top to bottom in an empty folder; the first failure in words, or "".

    The folder holds the shipped example data as `examples`, as a reader's checkout does. Python
    blocks share one session until the next shell block, as they would in a notebook.
    """
    if (TOP / "examples").is_dir():
        (folder / "examples").symlink_to(TOP / "examples")
    environment = reader_environment(folder.parent / f"{folder.name}-bin")
    commands: list[tuple[list[str], str]] = []
    session = ""
    for language, code in [*blocks(page), ("end", "")]:
        if language == "python":
            session += code
            continue
        if session:
            commands.append(([sys.executable, "-c", session], session))
            session = ""
        if code:
            commands.append((["bash", "-euo", "pipefail", "-c", code], code))
    for command, code in commands:
        done = subprocess.run(
            command, cwd=folder, env=environment, capture_output=True, text=True, timeout=900
        )
        if done.returncode != 0:
            return f"{code}\n--- stdout\n{done.stdout}\n--- stderr\n{done.stderr}"
    return ""


def reader_environment(programs: Path) -> dict[str, str]:
    """The environment of a reader: `mwdlink` and `python` on the path are the ones under test."""
    programs.mkdir()
    command = programs / "mwdlink"
    command.write_text(f'#!/bin/sh\nexec "{sys.executable}" -m mwdlink "$@"\n')
    command.chmod(0o755)
    for name in ("python", "python3"):
        (programs / name).symlink_to(sys.executable)
    inside = [str(Path(mwdlink.__file__).parents[1]), os.environ.get("PYTHONPATH", "")]
    return os.environ | {
        "PATH": f"{programs}{os.pathsep}{os.environ['PATH']}",
        "PYTHONPATH": os.pathsep.join(filter(None, inside)),
        "MPLBACKEND": "Agg",
        "OPENBLAS_NUM_THREADS": "1",
    }
