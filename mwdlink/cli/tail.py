"""``mwdlink tail``: GPC and sweep together, for the weight beyond what the GPC sees."""

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
    model_options,
    noise_option,
    output_options,
    reading_options,
)


class Span(click.ParamType):
    """A range of molar masses, LOW:HIGH [g/mol]."""

    name = "LOW:HIGH"

    def convert(self, value: Any, param: Any, ctx: Any) -> tuple[float, float]:
        if isinstance(value, tuple):
            return value
        try:
            low, high = (float(part) for part in str(value).split(":"))
        except ValueError:
            self.fail(f"{value!r} is not like 2e3:1e6.", param, ctx)
        if not 0 < low < high < float("inf"):
            self.fail(f"{value!r}: the first end must be below the second.", param, ctx)
        return low, high


def _shared_out(reading: dict[str, Any]) -> tuple[dict[str, Any], dict[str, Any]]:
    """The reading options of the GPC's table and of the sweep's.

    Columns go where their role belongs; rows to leave out are the sweep's.
    """
    from mwdlink.files.roles import ROLES

    given = reading.get("columns") or {}
    masses = {k: v for k, v in given.items() if k in ROLES and ROLES[k].kind in _OF_GPC}
    others = {k: v for k, v in given.items() if k not in masses}
    return reading | {"columns": masses or None, "omit": set()}, reading | {
        "columns": others or None
    }


# kinds of quantity that only a distribution's table holds
_OF_GPC = ("molar mass", "signal")


@click.command()
@click.argument("distribution", metavar="DIST", type=INPUT)
@click.argument("sweep", type=INPUT)
@model_options
@noise_option
@click.option(
    "--beyond",
    type=Number("M", 1),
    help="Where the tail begins [g/mol]. Default: the last M that the GPC table supports.",
)
@click.option(
    "--gpc-range",
    "trust",
    type=Span(),
    help="Molar masses [g/mol] over which the GPC is trusted, as in 2e3:1e6.",
)
@calibration_option
@ensemble_options
@reading_options
@output_options
def command(
    distribution: Path,
    sweep: Path,
    polymer: str,
    temperature: float | None,
    kernels: tuple[str, ...],
    exponent: Any,
    rouse: bool,
    noise: float | None,
    beyond: float | None,
    trust: tuple[float, float] | None,
    calibration: str | None,
    members: int,
    seed: int,
    reading: dict[str, Any],
    output: Output,
) -> None:
    """Weight beyond what the GPC in DIST sees, with the help of SWEEP.

    \b
    mwdlink tail gpc.csv sweep.csv --polymer hdpe --calibration absolute
    mwdlink tail gpc.csv sweep.csv --polymer hdpe --beyond 1e6 --out tail

    Both tables are of one sample and are fitted as one distribution, with the
    time law of the card left to adjust. Rival explanations (time law, GPC
    baseline and calibration, branching, a second phase) are weighed beside it.
    """
    from mwdlink.decisions.tail import find_tail
    from mwdlink.files.cards import read_polymer

    card = read_polymer(polymer)
    first, second = _shared_out(reading)
    order = " first and a sweep second"
    gpc = read_one(
        distribution,
        ["distribution"],
        first,
        calibration=calibration or "unstated",
        where=order,
    )
    data = read_one(sweep, ["sweep"], second, temperature_C=temperature, where=" second")
    with working("Fitting GPC and sweep together", output):
        result = find_tail(
            gpc,
            data,
            card,
            beyond=beyond,
            kernels=kernels or None,
            exponent=exponent,
            rouse=rouse,
            members=members,
            seed=seed,
            trust_range=trust,
            temperature_C=temperature,
            noise=noise,
        )
    deliver(
        result,
        output,
        inputs=[distribution, sweep],
        polymer=card,
        model=result.model,
        seed=seed,
    )
