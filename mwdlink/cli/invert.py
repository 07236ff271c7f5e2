"""``mwdlink invert``: from a sweep to the distribution behind it."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from mwdlink.cli.deliver import deliver, working
from mwdlink.cli.inputs import MEASURED, read_one
from mwdlink.cli.options import (
    INPUT,
    Output,
    Wanted,
    above_option,
    ensemble_options,
    method_options,
    model_options,
    noise_option,
    output_options,
    reading_options,
)


@click.command()
@click.argument("sweep", type=INPUT)
@model_options
@noise_option
@above_option
@click.option(
    "--want",
    type=Wanted(),
    multiple=True,
    help="Say which measurement brings a quantity to this relative precision, as in Mz=0.1.",
)
@method_options
@ensemble_options
@reading_options
@click.option("--write-members", is_flag=True, help="Write every ensemble member to members.csv.")
@output_options
def command(
    sweep: Path,
    polymer: str,
    temperature: float | None,
    kernels: tuple[str, ...],
    exponent: Any,
    rouse: bool,
    noise: float | None,
    above: tuple[float, ...],
    want: tuple[tuple[str, float], ...],
    method: str,
    choose: str,
    smoothing: float | None,
    members: int,
    seed: int,
    reading: dict[str, Any],
    write_members: bool,
    output: Output,
) -> None:
    """The molecular-weight distribution behind SWEEP, with intervals.

    \b
    mwdlink invert sweep.csv --polymer hdpe --temperature 190 --out result
    mwdlink invert sweep.csv --polymer hdpe --above 5e5 --above 1e6

    SWEEP is a frequency sweep, or a relaxation or flow curve. Beyond the window
    that its frequencies span only bounds can be given, and are. Every kernel the
    data allow takes part in the intervals.
    """
    from mwdlink.files.cards import read_polymer
    from mwdlink.inversion.invert import invert

    card = read_polymer(polymer)
    data = read_one(sweep, MEASURED, reading, temperature_C=temperature)
    with working("Inverting", output):
        result = invert(
            data,
            card,
            kernels=kernels or None,
            exponent=exponent,
            rouse=rouse,
            members=members,
            above=above,
            seed=seed,
            temperature_C=temperature,
            noise=noise,
            method=method,
            choose=choose,
            smoothing=smoothing,
            want=dict(want) or None,
        )
    without = () if write_members else ("members.csv",)
    deliver(result, output, inputs=[sweep], polymer=card, seed=seed, without=without)
