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
    polymer_option,
    reading_options,
)


@click.command()
@click.argument("sweep", type=INPUT)
@click.option("--modes", type=click.IntRange(1, 200), help="Number of modes. Default: as needed.")
@click.option(
    "--temperature", type=TEMPERATURE, help="Of the sweep [C], where its table is silent."
)
@click.option(
    "--after",
    type=INPUT,
    help="A second sweep of the sample, measured after SWEEP: did it change?",
)
@polymer_option(required=False)
@noise_option
@ensemble_options
@reading_options
@enforce_option
@output_options
def command(
    sweep: Path,
    modes: int | None,
    temperature: float | None,
    after: Path | None,
    polymer: str | None,
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
    mwdlink spectrum before.csv --after after.csv --polymer hdpe

    Also said: over which times the data support the spectrum, the terminal
    properties as far as the window reaches, and whether the two moduli belong
    together (Kramers-Kronig). Bad readings are named by row, and slips such as
    swapped columns or Hz taken for rad/s are proposed; nothing is changed.
    With --polymer, kPa taken for Pa shows too.
    """
    from mwdlink.files.cards import read_polymer
    from mwdlink.files.tables import read_sweep
    from mwdlink.measurement.checks import check_sweep
    from mwdlink.measurement.spectrum_fit import fit_spectrum

    card = None if polymer is None else read_polymer(polymer)
    data = read_sweep(sweep, temperature_C=temperature, **reading)
    second = None
    if after is not None:
        # rows to leave out and the block are those of SWEEP
        own = reading | {"omit": set(), "block": None}
        second = read_sweep(after, temperature_C=temperature, **own)
    with working("Fitting the spectrum", output):
        plateau = None if card is None else _plateau_modulus(card, data.temperature_C)
        found = check_sweep(data, noise=noise, plateau_modulus=plateau, after=second)
        result = fit_spectrum(data, noise=noise, members=members, seed=seed, modes=modes)
        result = result.with_checks(found)
    checks = []
    if enforce:
        passed = result.kramers_kronig.passed
        checks.append((passed, "the two moduli do not belong together (Kramers-Kronig)."))
        if found.drift is not None:
            checks.append((not found.drift.changed, "the sample changed between the sweeps."))
    inputs = [sweep] if after is None else [sweep, after]
    deliver(result, output, inputs=inputs, polymer=card, seed=seed, checks=checks)


def _plateau_modulus(card: Any, temperature_C: float | None) -> float:
    """Plateau modulus [Pa]; at the card's own temperature where it has no way to the sweep's."""
    from mwdlink.errors import ModelError

    try:
        return float(card.melt(temperature_C).plateau_modulus)
    except ModelError:
        return float(card.melt().plateau_modulus)
