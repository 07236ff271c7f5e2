"""``mwdlink calibrate``: a polymer card from samples with both GPC and sweep."""

from __future__ import annotations

from pathlib import Path

import click

from mwdlink.cli.deliver import deliver, working
from mwdlink.cli.options import (
    INPUT,
    Output,
    PolymerName,
    kernel_option,
    noise_option,
    output_options,
    rouse_option,
    temperature_option,
)


@click.command()
@click.argument("study", type=INPUT)
@click.option("--polymer", type=PolymerName(), help="Instead of the one the study names.")
@temperature_option
@kernel_option
@rouse_option
@noise_option
@click.option("--outside", is_flag=True, help="Let the study name files outside its folder.")
@output_options
def command(
    study: Path,
    polymer: str | None,
    temperature: float | None,
    kernels: tuple[str, ...],
    rouse: bool,
    noise: float | None,
    outside: bool,
    output: Output,
) -> None:
    """Viscosity law, plateau modulus and mixing exponent from the samples in STUDY.

    \b
    mwdlink calibrate study.toml --out own
    mwdlink invert sweep.csv --polymer own/card.toml

    Every [[component]] with a distribution and a sweep (or eta0_Pa_s) is a sample,
    every measured [[blend]] of such components too. What the samples cannot fix
    keeps its published value, and that is said.
    """
    from mwdlink.decisions.calibrate import calibrate
    from mwdlink.files.study import read_study

    data = read_study(study, polymer=polymer, temperature_C=temperature, outside=outside)
    with working("Fitting the constants", output):
        result = calibrate(data, kernels=kernels or None, rouse=rouse, noise=noise)
    model = {
        "kernels": [f.kernel for f in result.fits],
        "exponent": result.exponent,
        "rouse": rouse,
    }
    deliver(result, output, inputs=data.paths, polymer=data.polymer, model=model)
