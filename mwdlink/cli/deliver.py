"""From a result to the user: the record, the summary or the JSON, and the folder."""

from __future__ import annotations

import contextlib
import importlib
import shlex
import shutil
import sys
import threading
from collections.abc import Collection, Iterable, Iterator, Mapping
from pathlib import Path
from typing import Any

import click

import mwdlink
from mwdlink.cli.main import NOT_DONE
from mwdlink.cli.options import Output
from mwdlink.cli.summary import summary, wrapped
from mwdlink.files.results import json_text, sha256_of, write_result


def deliver(
    result: Any,
    output: Output,
    *,
    inputs: Iterable[Path | str],
    polymer: Any = None,
    model: Mapping[str, Any] | None = None,
    seed: int | None = None,
    checks: Iterable[tuple[bool | None, str]] = (),
    without: Collection[str] = (),
) -> None:
    """Print a result and write its folder, as the output options ask.

    Parameters
    ----------
    result : Result
    output : Output
    inputs : iterable of path
        Every file that was read, in order.
    polymer : Polymer, optional
        The card as used.
    model : mapping, optional
        kernels, exponent, rouse.
    seed : int, optional
    checks : iterable of (passed, words)
        Checks that the user enforces: one that is False ends the run with status 4, after
        everything has been written and said.
    without : collection of str
        Tables not to write.
    """
    record = record_of(result, inputs, output.labels, polymer=polymer, model=model, seed=seed)
    if output.out is not None:
        with working("Drawing and writing", output):
            tables = {k: v for k, v in result.tables().items() if k not in without}
            pictures = pictures_of(record, tables)
            figures: dict[str, bytes] = {}
            for name, picture in pictures.items():
                figures[f"{name}.svg"] = picture.svg()
                figures[f"{name}.png"] = picture.png()
                figures[f"{name}.csv"] = picture.csv()
            write_result(
                output.out,
                record,
                tables,
                figures,
                report_of(result, record, pictures),
                output.replace,
                provenance=provenance(record),
            )
    if output.json:
        click.echo(json_text(record), nl=False)
    else:
        first, *rest = paragraphs(summary(result.answer(), record, columns()))
        click.secho(first, bold=True)
        click.echo("\n".join(rest), nl=bool(rest))
    for caution in result.warnings:
        note(caution.text, output)
    if output.out is not None:
        note(f"written to {output.out}", output, kind="done")
    failed = [words for passed, words in checks if passed is False]
    if failed:
        for words in failed:
            click.echo(f"Check failed: {words}", err=True)
        click.get_current_context().exit(NOT_DONE)


def record_of(
    result: Any,
    inputs: Iterable[Path | str],
    labels: Mapping[str, str],
    *,
    polymer: Any = None,
    model: Mapping[str, Any] | None = None,
    seed: int | None = None,
) -> dict[str, Any]:
    """result.json's content: the keys common to all commands, then the command's own."""
    from mwdlink.quantity import to_plain

    record: dict[str, Any] = {
        "schema": f"mwdlink/{result.command}/1",
        "version": mwdlink.__version__,
        "command": result.command,
        "inputs": [{"path": str(p), "sha256": sha256_of(p)} for p in inputs],
        "labels": dict(labels),
        "polymer": None if polymer is None else to_plain(polymer.to_dict()),
        "model": None if model is None else to_plain(model),
        "seed": seed,
    }
    return record | result.to_dict()


def provenance(record: Mapping[str, Any]) -> str:
    """The line on top of each table: what made it, from what."""
    sources = " ".join(
        f"{Path(i['path']).name} sha256 {i['sha256'][:16]}" for i in record["inputs"]
    )
    return f"mwdlink {record['version']} {record['command']} from {sources or 'no file'}"


def pictures_of(record: Mapping[str, Any], tables: Mapping[str, Any]) -> dict[str, Any]:
    """The pictures that belong to a result, by name."""
    figures = importlib.import_module("mwdlink.figures")
    frames = {name: table for name, table in tables.items() if not isinstance(table, str)}
    pictures = figures.pictures_of(record["command"], record, frames)
    return {name: DrawnOnce(picture) for name, picture in pictures.items()}


class DrawnOnce:
    """A picture whose SVG is made once: the file and the report show the same, and it is slow."""

    def __init__(self, picture: Any) -> None:
        self._picture = picture
        self._svg: bytes | None = None

    def __getattr__(self, name: str) -> Any:
        return getattr(self._picture, name)

    def svg(self) -> bytes:
        if self._svg is None:
            self._svg = self._picture.svg()
        return self._svg


def report_of(result: Any, record: Mapping[str, Any], pictures: Mapping[str, Any]) -> str | None:
    """The self-contained page.

    Who calls a command from a program gives what a user would have typed as the context's `obj`,
    a list of words.
    """
    report = importlib.import_module("mwdlink.report")
    if not hasattr(report, "render"):
        return None
    # without what changes nothing in the result, so that a repeated run gives the same page
    context = click.get_current_context(silent=True)
    told = None if context is None else context.find_root().obj
    words = told if isinstance(told, list) else sys.argv[1:]
    typed = [a for a in words if a not in ("--replace", "--quiet", "--json")]
    line = "mwdlink " + shlex.join(typed)
    page: str = report.render(result, record, pictures, command_line=line)
    return page


# ------------------------------------------------------------------------------ terminal


def columns() -> int:
    """Width to print within: the terminal's, at most 80."""
    return max(30, min(80, shutil.get_terminal_size().columns))


def paragraphs(lines: list[str]) -> list[str]:
    """The first paragraph as one text, then the other lines."""
    cut = lines.index("") if "" in lines else len(lines)
    return ["\n".join(lines[:cut]), *lines[cut:]]


def note(text: str, output: Output, kind: str = "note") -> None:
    """Say something beside the result, on stderr."""
    if output.quiet:
        return
    width = columns()
    head = click.style(f"{kind}:", fg="yellow" if kind == "note" else "green")
    first, *rest = wrapped(f"{kind}: {text}", width, "  ")
    click.echo(head + first[len(kind) + 1 :], err=True)
    for line in rest:
        click.echo(line, err=True)


@contextlib.contextmanager
def working(what: str, output: Output, after: float = 1.0) -> Iterator[None]:
    """Say on stderr what is being done if it takes longer than a second."""
    if output.quiet:
        yield
        return
    timer = threading.Timer(after, lambda: click.echo(f"{what} ...", err=True))
    timer.daemon = True
    timer.start()
    try:
        yield
    finally:
        timer.cancel()
