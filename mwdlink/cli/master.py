"""``mwdlink master``: sweeps at several temperatures to one master curve."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from mwdlink.cli.deliver import deliver, working
from mwdlink.cli.options import (
    INPUT,
    TEMPERATURE,
    Number,
    Output,
    enforce_option,
    ensemble_options,
    noise_option,
    output_options,
    polymer_option,
    reading_options,
)


@click.command()
@click.argument("sweeps", type=INPUT, nargs=-1, required=True)
@click.option("--reference", type=TEMPERATURE, required=True, help="Of the master curve [C].")
@click.option(
    "--vertical",
    type=click.Choice(("none", "rho-T", "free")),
    default="none",
    show_default=True,
    help="Whether the moduli are shifted too.",
)
@click.option(
    "--same-temperature",
    type=Number("K", 0),
    default=1.0,
    show_default=True,
    help="Steps closer than this are one temperature [K].",
)
@polymer_option(required=False)
@click.option("--Mw", "Mw", type=Number("M", 1), help="Known Mw [g/mol]; for the branching flags.")
@click.option(
    "--dispersity", type=Number("D", 1, open_low=False), help="Known Mw/Mn; for the same."
)
@click.option(
    "--intrinsic-viscosity",
    type=Number("DL_PER_G", 0),
    help="In trichlorobenzene at 135 C [dL/g]; for the same.",
)
@noise_option
@ensemble_options
@reading_options
@enforce_option
@output_options
def command(
    sweeps: tuple[Path, ...],
    reference: float,
    vertical: str,
    same_temperature: float,
    polymer: str | None,
    Mw: float | None,
    dispersity: float | None,
    intrinsic_viscosity: float | None,
    noise: float | None,
    members: int,
    seed: int,
    enforce: bool,
    reading: dict[str, Any],
    output: Output,
) -> None:
    """One master curve from SWEEPS at several temperatures, and whether they superpose.

    \b
    mwdlink master 170C.csv 190C.csv 210C.csv --reference 190 --out master
    mwdlink master all.csv --reference 190 --vertical free

    SWEEPS are one file with a temperature column, or a file for each
    temperature. The shifts come from all curves at once, with the constants of
    an Arrhenius and a WLF law fitted to them. Signs of long-chain branching are
    listed, each with what else could cause it.
    """
    from mwdlink.decisions.branching import make_master
    from mwdlink.files.cards import read_polymer
    from mwdlink.files.tables import read_sweeps

    card = None if polymer is None else read_polymer(polymer)
    found = [
        sweep
        for path in sweeps
        for sweep in read_sweeps(path, same_temperature=same_temperature, **reading)
    ]
    with working("Shifting", output):
        result = make_master(
            found,
            reference,
            vertical=vertical,
            polymer=card,
            Mw_g_per_mol=Mw,
            dispersity=dispersity,
            intrinsic_viscosity_dL_per_g=intrinsic_viscosity,
            same_temperature=same_temperature,
            noise=noise,
            members=members,
            seed=seed,
        )
    checks = []
    if enforce:
        checks.append((result.superposition.passed, "the curves do not superpose."))
    deliver(result, output, inputs=sweeps, polymer=card, seed=seed, checks=checks)
