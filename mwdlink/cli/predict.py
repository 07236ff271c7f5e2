"""``mwdlink predict``: from a distribution to all that follows from it."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from mwdlink.cli.deliver import deliver, working
from mwdlink.cli.options import (
    INPUT,
    Number,
    Output,
    calibration_option,
    ensemble_options,
    frequencies,
    model_options,
    omega_option,
    output_options,
    reading_options,
)

gpc_error_option = click.option(
    "--gpc-error",
    type=Number("R", 0, 0.5, percent=True, open_low=False),
    help="Relative error of a row of a GPC table; its baseline's is a tenth of that, in parts of "
    "the peak. 0: the table is exact. Default: 3 %.",
)


@click.command()
@click.argument("dist", type=INPUT)
@model_options
@omega_option
@ensemble_options
@reading_options
@calibration_option
@gpc_error_option
@output_options
def command(
    dist: Path,
    polymer: str,
    temperature: float | None,
    kernels: tuple[str, ...],
    exponent: Any,
    rouse: bool,
    omega: Any,
    members: int,
    seed: int,
    calibration: str,
    gpc_error: float | None,
    reading: dict[str, Any],
    output: Output,
) -> None:
    """Moduli, spectrum, relaxation, flow curve and melt flow rate from DIST.

    \b
    mwdlink predict gpc.csv --polymer hdpe --temperature 190 --out predicted

    DIST is a table of a molecular-weight distribution, such as a GPC export.
    The bands hold the GPC's own error (rows, baseline, and by --calibration its
    molar masses), the card's constants, the kernels and the mixing exponent.
    """
    from mwdlink.decisions.predict import predict
    from mwdlink.files.cards import read_polymer
    from mwdlink.files.tables import read_distribution

    card = read_polymer(polymer)
    distribution = read_distribution(dist, calibration=calibration, **reading)
    with working("Predicting", output):
        result = predict(
            distribution,
            card,
            kernels=kernels or None,
            exponent=exponent,
            rouse=rouse,
            temperature_C=temperature,
            omega=frequencies(omega),
            members=members,
            seed=seed,
            gpc_error=gpc_error,
        )
    model = {
        "kernels": result.kernels,
        "exponent": result.model.exponent,
        "rouse": result.model.rouse,
    }
    deliver(result, output, inputs=[dist], polymer=card, model=model, seed=seed)
