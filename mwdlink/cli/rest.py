"""``mwdlink rest``: how long to wait after loading a sample."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from mwdlink.cli.deliver import deliver, working
from mwdlink.cli.inputs import read_one
from mwdlink.cli.options import (
    INPUT,
    Number,
    Output,
    calibration_option,
    ensemble_options,
    exponent_option,
    kernel_option,
    noise_option,
    output_options,
    polymer_option,
    reading_options,
    rouse_option,
    temperature_option,
)


@click.command()
@click.argument("input", type=INPUT, metavar="DIST|SWEEP")
@polymer_option(required=False)
@temperature_option
@click.option(
    "--residual",
    "residuals",
    type=Number("R", 0, 0.999, percent=True),
    multiple=True,
    help="Share of the stress that may be left, as 0.01 or 1%; repeatable.",
)
@kernel_option
@exponent_option
@rouse_option
@noise_option
@ensemble_options
@reading_options
@calibration_option
@output_options
def command(
    input: Path,
    polymer: str | None,
    temperature: float | None,
    residuals: tuple[float, ...],
    kernels: tuple[str, ...],
    exponent: Any,
    rouse: bool,
    noise: float | None,
    members: int,
    seed: int,
    reading: dict[str, Any],
    calibration: str,
    output: Output,
) -> None:
    """How long to wait after loading until the stress has gone.

    \b
    mwdlink rest sweep.csv
    mwdlink rest gpc.csv --polymer hdpe --temperature 190 --residual 1%

    From a sweep no chain model is needed; a distribution needs --polymer. Two
    ways of loading are given: after a step, and after steady squeezing.
    """
    from mwdlink.decisions.rest import RESIDUALS, rest_time
    from mwdlink.files.cards import read_polymer

    card = None if polymer is None else read_polymer(polymer)
    data = read_one(
        input,
        ("distribution", "sweep"),
        reading,
        temperature_C=temperature,
        calibration=calibration,
    )
    with working("Working out the rest", output):
        result = rest_time(
            data,
            card,
            residuals=residuals or RESIDUALS,
            kernels=kernels or None,
            exponent=exponent,
            rouse=rouse,
            temperature_C=temperature,
            members=members,
            seed=seed,
            noise=noise,
        )
    deliver(result, output, inputs=[input], polymer=card, seed=seed)
