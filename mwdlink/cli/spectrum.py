"""``mwdlink spectrum``: a sweep's relaxation spectrum, without any model of chains."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from mwdlink.cli.deliver import deliver, working
from mwdlink.cli.options import (
    INPUT,
    TEMPERATURE,
    Output,
    enforce_option,
    ensemble_options,
    noise_option,
    output_options,
    reading_options,
)


@click.command()
@click.argument("sweep", type=INPUT)
@click.option("--modes", type=click.IntRange(1, 200), help="Number of modes. Default: as needed.")
@click.option(
    "--temperature", type=TEMPERATURE, help="Of the sweep [C], where its table is silent."
)
@noise_option
@ensemble_options
@reading_options
@enforce_option
@output_options
def command(
    sweep: Path,
    modes: int | None,
    temperature: float | None,
    noise: float | None,
    members: int,
    seed: int,
    enforce: bool,
    reading: dict[str, Any],
    output: Output,
) -> None:
    """The relaxation spectrum of SWEEP, as discrete modes and as a curve with band.

    \b
    mwdlink spectrum sweep.csv --out spectrum

    Also said: over which times the data support the spectrum, the terminal
    properties as far as the window reaches, and whether the two moduli belong
    together (Kramers-Kronig).
    """
    from mwdlink.files.tables import read_sweep
    from mwdlink.measurement.spectrum_fit import fit_spectrum

    data = read_sweep(sweep, temperature_C=temperature, **reading)
    with working("Fitting the spectrum", output):
        result = fit_spectrum(data, noise=noise, members=members, seed=seed, modes=modes)
    checks = []
    if enforce:
        passed = result.payload()["consistency"]["kramers_kronig"].get("passed")
        checks.append((passed, "the two moduli do not belong together (Kramers-Kronig)."))
    deliver(result, output, inputs=[sweep], seed=seed, checks=checks)
