"""What the pages show works: every code block runs, every command is there and explains itself."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import CliRunner
from pages import PAGES, TOP, name_of, pages_with_code

from mwdlink.cli.main import COMMANDS, main


@pytest.mark.parametrize("page", pages_with_code(), ids=name_of)
def test_code_blocks_run(page: Path, outcome_of: Callable[[Path], str]) -> None:
    """A reader who follows a page from top to bottom in an empty folder gets no error."""
    failure = outcome_of(page)
    assert not failure, failure


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
