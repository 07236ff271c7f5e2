"""``mwdlink batch``: many measured curves to one table."""

from __future__ import annotations

import os
import shlex
import sys
import time
from pathlib import Path
from typing import Any

import click

from mwdlink.cli.deliver import columns, note, paragraphs
from mwdlink.cli.options import (
    INPUT,
    Number,
    Output,
    above_option,
    ensemble_options,
    exponent_option,
    kernel_option,
    method_options,
    noise_option,
    output_options,
    polymer_option,
    reading_options,
    rouse_option,
    temperature_option,
)
from mwdlink.cli.summary import summary

PART_FAILED = 5
# seconds between two lines of progress where the stream is no terminal
EVERY = 15.0


@click.command()
@click.argument(
    "inputs", metavar="INPUTS...", nargs=-1, required=True, type=click.Path(path_type=str)
)
@polymer_option(required=False)
@temperature_option
@kernel_option
@exponent_option
@rouse_option
@noise_option
@above_option
@method_options
@click.option("--against", type=INPUT, help="Sweep of a retained sample: compare each lot with it.")
@ensemble_options
@reading_options
@click.option(
    "--workers",
    type=click.IntRange(1, 1024),
    help="Processes side by side. Default: the cores there are. Results do not depend on it.",
)
@click.option("--cluster", metavar="ADDRESS", help="Work on the dask cluster of this scheduler.")
@click.option("--anywhere", is_flag=True, help="A manifest may name files outside its folder.")
@click.option("--figures", is_flag=True, help="Pictures for each input too.")
@click.option("--report", is_flag=True, help="A page for each input too.")
@click.option("--write-members", is_flag=True, help="Every input's members.csv too.")
@click.option(
    "--limit-seconds",
    type=Number("S", 0),
    help="Give an input up, with a reason, when it takes longer. Default: no limit.",
)
@output_options
def command(
    inputs: tuple[str, ...],
    polymer: str | None,
    temperature: float | None,
    kernels: tuple[str, ...],
    exponent: Any,
    rouse: bool,
    noise: float | None,
    above: tuple[float, ...],
    method: str,
    choose: str,
    smoothing: float | None,
    against: Path | None,
    members: int,
    seed: int,
    reading: dict[str, Any],
    workers: int | None,
    cluster: str | None,
    anywhere: bool,
    figures: bool,
    report: bool,
    write_members: bool,
    limit_seconds: float | None,
    output: Output,
) -> None:
    """Invert many INPUTS into one table, with a folder for each.

    \b
    mwdlink batch lots/ --polymer hdpe --temperature 190 --out release
    mwdlink batch manifest.csv --against retained.csv --out release
    mwdlink batch 'lots/*.csv' --polymer hdpe --members 0 --workers 2

    INPUTS are files, folders, patterns, or tables with a column `path` (and
    `lot`, `polymer`, `temperature [C]`). One that cannot be used stops none of
    the others: it is listed in failed.csv, and the exit status is 5. A run that
    was broken off goes on where it was when the command is given again, and
    --replace takes over from an earlier result what is unchanged.
    """
    for name in ("OPENBLAS", "OMP", "MKL"):
        # before numpy loads: a second thread gains nothing on matrices this small, and the last
        # digit must not depend on who does the work
        os.environ[f"{name}_NUM_THREADS"] = "1"
    from mwdlink.files.results import json_text
    from mwdlink.runs.batch import batch, record_of, why_not_batch

    out = output.out
    if out is not None:
        reason = why_not_batch(out, output.replace)
        if reason:
            raise click.UsageError(reason)
    bar = _Progress(output.quiet)
    try:
        result = batch(
            inputs,
            polymer,
            out=out,
            replace=output.replace,
            workers=workers,
            cluster=cluster,
            limit_seconds=limit_seconds,
            anywhere=anywhere,
            against=against,
            temperature_C=temperature,
            reading=reading,
            labels=output.labels,
            figures=figures,
            report=report,
            write_members=write_members,
            progress=bar,
            note=lambda text: note(text, output),
            command_line=_typed(),
            kernels=kernels or None,
            exponent=exponent,
            rouse=rouse,
            members=members,
            above=above,
            seed=seed,
            noise=noise,
            method=method,
            choose=choose,
            smoothing=smoothing,
        )
    except BaseException:
        bar.end()
        bar.broken_off(out)
        raise
    bar.end()
    record = record_of(result, output.labels)
    if output.json:
        click.echo(json_text(record), nl=False)
    else:
        told = {k: v for k, v in record.items() if k not in ("throughput_per_s", "taken_over")}
        first, *rest = paragraphs(summary(result.answer(), told, columns()))
        click.secho(first, bold=True)
        click.echo("\n".join(rest), nl=bool(rest))
    for caution in result.warnings:
        note(caution.text, output)
    if out is not None:
        note(f"written to {out}", output, kind="done")
    if result.failed:
        click.get_current_context().exit(PART_FAILED)


def _typed() -> str:
    # without what changes nothing in the result, so that a repeated run gives the same page
    typed = [a for a in sys.argv[1:] if a not in ("--replace", "--quiet", "--json")]
    return "mwdlink " + shlex.join(typed)


class _Progress:
    """Progress on stderr: one line that changes on a terminal, else a line now and then."""

    def __init__(self, quiet: bool) -> None:
        self.quiet = quiet
        self.live = not quiet and sys.stderr is not None and sys.stderr.isatty()
        self.last, self.began, self.open = time.monotonic(), time.monotonic(), False
        self.done = self.total = 0

    def __call__(self, p: Any) -> None:
        self.done, self.total = p.done, p.total
        if self.quiet:
            return
        now = time.monotonic()
        final = p.done == p.total
        if self.live:
            if final or now - self.last > 0.1 or not self.open:
                click.echo(f"\r\x1b[K{self._line(p)}", err=True, nl=False)
                self.last, self.open = now, True
        elif now - self.last >= EVERY or (final and now - self.began > 1.0):
            click.echo(self._line(p), err=True)
            self.last = now

    @staticmethod
    def _line(p: Any) -> str:
        parts = [f"{p.done} of {p.total}"]
        if p.failed:
            parts.append(f"{p.failed} failed")
        if p.reused:
            parts.append(f"{p.reused} taken over")
        if p.done < p.total and p.seconds_left is not None:
            parts.append(f"about {in_words(p.seconds_left)} left")
        return ", ".join(parts)

    def end(self) -> None:
        if self.open:
            click.echo("", err=True)
            self.open = False

    def broken_off(self, out: Path | None) -> None:
        from mwdlink.runs.batch import partial_of

        if self.quiet or out is None or not partial_of(out).is_dir():
            return
        click.echo(
            f"{self.done} of {self.total or 'the'} inputs were dealt with. What is finished is "
            f"kept in {partial_of(out)}; the same command goes on from there.",
            err=True,
        )


def in_words(seconds: float) -> str:
    """A time as people say it: 40 s, 12 min, 3 h 20 min."""
    if seconds < 90:
        return f"{max(1, round(seconds))} s"
    minutes = round(seconds / 60)
    return f"{minutes} min" if minutes < 90 else f"{minutes // 60} h {minutes % 60} min"
