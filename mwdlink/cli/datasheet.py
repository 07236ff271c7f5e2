"""``mwdlink datasheet``: do the numbers on a supplier's sheet hang together?"""

from __future__ import annotations

from pathlib import Path

import click

from mwdlink.cli.deliver import deliver, working
from mwdlink.cli.options import (
    INPUT,
    Output,
    PolymerName,
    enforce_option,
    kernel_option,
    output_options,
    seed_option,
)


@click.command()
@click.argument("sheet", type=INPUT)
@click.option("--polymer", type=PolymerName(), help="Instead of the one the sheet names.")
@kernel_option
@seed_option
@enforce_option
@output_options
def command(
    sheet: Path,
    polymer: str | None,
    kernels: tuple[str, ...],
    seed: int,
    enforce: bool,
    output: Output,
) -> None:
    """Hold each claim of SHEET against what all the others lead one to expect.

    \b
    mwdlink datasheet sheet.toml
    mwdlink datasheet sheet.toml --polymer my-card.toml --out check

    SHEET (TOML) holds any of averages, viscosities, melt flow rates, crossover,
    intrinsic viscosity and activation energy, with tolerances. A verdict is a
    reason to ask, not an accusation: release tests decide.
    """
    from mwdlink.decisions.datasheet import check_datasheet
    from mwdlink.files.sheet import read_sheet

    data = read_sheet(sheet, polymer=polymer)
    with working("Comparing the claims", output):
        result = check_datasheet(data, kernels=kernels or None, seed=seed)
    checks = []
    if enforce:
        off = [n for n in (result.odd_one_out, *result.also_off, *result.rivals) if n]
        does = "does" if len(off) == 1 else "do"
        how = "each other" if result.rivals else "the other claims"
        checks.append((not off, f"{', '.join(off)} {does} not fit {how}."))
    deliver(
        result,
        output,
        inputs=data.paths,
        polymer=data.polymer,
        model=result.model,
        seed=seed,
        checks=checks,
    )
