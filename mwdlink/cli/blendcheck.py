"""``mwdlink blendcheck``: measured blends of known fractions against the rule."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from mwdlink.cli.deliver import deliver, working
from mwdlink.cli.options import (
    INPUT,
    Output,
    PolymerName,
    enforce_option,
    kernel_option,
    noise_option,
    output_options,
    rouse_option,
    seed_option,
    temperature_option,
)


@click.command()
@click.argument("study", type=INPUT)
@click.option("--polymer", type=PolymerName(), help="Instead of the one the study names.")
@temperature_option
@kernel_option
@rouse_option
@noise_option
@click.option(
    "--route",
    type=click.Choice(("sweeps", "distributions")),
    help="Which prediction to judge. Default: sweeps where all components have them.",
)
@click.option("--outside", is_flag=True, help="Let the study name files outside its folder.")
@seed_option
@enforce_option
@output_options
def command(
    study: Path,
    polymer: str | None,
    temperature: float | None,
    kernels: tuple[str, ...],
    rouse: bool,
    noise: float | None,
    route: str | None,
    outside: bool,
    seed: int,
    enforce: bool,
    output: Output,
) -> None:
    """How far the mixing rule can be trusted, from the blends in STUDY.

    \b
    mwdlink blendcheck study.toml --out check
    mwdlink blend study.toml --fractions 0.6,0.4 --trust check/trust.toml

    Reads each blend's fractions back from its rheology and holds them against
    the weighed ones, finds the mixing exponent the blends prefer, ranks rules by
    the blend left out, and writes trust.toml for `mwdlink blend`.
    """
    from mwdlink.decisions.blendcheck import check_blends
    from mwdlink.files.study import read_study

    data = read_study(study, polymer=polymer, temperature_C=temperature, outside=outside)
    with working("Checking the blends", output):
        result = check_blends(
            data, kernels=kernels or None, rouse=rouse, noise=noise, route=route, seed=seed
        )
    checks: list[tuple[bool | None, Any]] = []
    if enforce:
        odd = [b.name for b in result.blends if b.agrees is False]
        checks.append((not odd, f"{', '.join(odd)} does not agree with the weighed fractions."))
    kernels_used = sorted({r["kernel"] for r in result.rules if r["route"] == "distributions"})
    deliver(
        result,
        output,
        inputs=data.paths,
        polymer=data.polymer,
        model={"kernels": kernels_used, "exponent": result.exponent, "rouse": rouse},
        seed=seed,
        checks=checks,
    )
