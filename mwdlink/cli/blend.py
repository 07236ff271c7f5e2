"""``mwdlink blend``: how a blend relaxes, and the fraction that reaches a target."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from mwdlink.cli.deliver import deliver, working
from mwdlink.cli.options import (
    INPUT,
    Output,
    calibration_option,
    ensemble_options,
    exponent_option,
    frequencies,
    kernel_option,
    noise_option,
    omega_option,
    output_options,
    polymer_option,
    reading_options,
    rouse_option,
    temperature_option,
)
from mwdlink.cli.predict import gpc_error_option


class Fractions(click.ParamType):
    """Weight fractions such as 0.7,0.3 or 70,30."""

    name = "F1,F2,..."

    def convert(self, value: Any, param: Any, ctx: Any) -> tuple[float, ...]:
        if isinstance(value, tuple):
            return value
        try:
            numbers = tuple(float(part) for part in str(value).split(","))
        except ValueError:
            self.fail(f"{value!r} is not a list of numbers like 0.7,0.3.", param, ctx)
        total = sum(numbers)
        if any(not x >= 0 for x in numbers):
            self.fail(f"{value!r}: fractions are 0 or more.", param, ctx)
        if min(abs(total - 1), abs(total / 100 - 1)) > 2e-3:
            self.fail(f"{value!r} sums to {total:g}, neither 1 nor 100.", param, ctx)
        return numbers


class TargetText(click.ParamType):
    """A wanted property such as viscosity_Pa_s@0.1=2e4."""

    name = "NAME[@AT]=VALUE"

    def convert(self, value: Any, param: Any, ctx: Any) -> str:
        from mwdlink.decisions.blend_target import parse_target
        from mwdlink.errors import InputError

        try:
            parse_target(value)
        except InputError as error:
            self.fail(str(error), param, ctx)
        return str(value)


@click.command()
@click.argument("inputs", type=INPUT, nargs=-1, required=True)
@click.option("--fractions", type=Fractions(), help="By weight, of polymer; sum 1 or 100.")
@click.option(
    "--target",
    "targets",
    type=TargetText(),
    multiple=True,
    help="Seek the fraction for this value, or range LOW:HIGH. May be given again: all at once.",
)
@click.option(
    "--vary",
    metavar="NAME",
    help="Component whose fraction is varied, the others in their proportions. Default: the first.",
)
@click.option("--trust", type=INPUT, help="What blendcheck found: trust.toml.")
@click.option(
    "--route",
    type=click.Choice(("sweeps", "distributions")),
    help="What to rest on, where components have both. Default: sweeps.",
)
@polymer_option(required=False)
@temperature_option
@kernel_option
@exponent_option
@rouse_option
@noise_option
@omega_option
@click.option("--outside", is_flag=True, help="Let a study name files outside its folder.")
@ensemble_options
@reading_options
@calibration_option
@gpc_error_option
@output_options
def command(
    inputs: tuple[Path, ...],
    fractions: tuple[float, ...] | None,
    targets: tuple[str, ...],
    vary: str | None,
    trust: Path | None,
    route: str | None,
    polymer: str | None,
    temperature: float | None,
    kernels: tuple[str, ...],
    exponent: Any,
    rouse: bool,
    noise: float | None,
    omega: Any,
    outside: bool,
    members: int,
    seed: int,
    reading: dict[str, Any],
    calibration: str,
    gpc_error: float | None,
    output: Output,
) -> None:
    """Predict a blend of INPUTS: distributions, sweeps, or a study file.

    \b
    mwdlink blend A.csv B.csv --fractions 0.7,0.3 --polymer hdpe --out blend
    mwdlink blend study.toml --target eta0_Pa_s=2e4 --trust trust.toml

    Targets: viscosity_Pa_s@OMEGA, eta0_Pa_s, MFR_g_per_10min@KG, tan_delta@OMEGA,
    crossover_omega_rad_per_s. Every property against the fraction is written too.
    With more than two components the others keep their proportions.
    """
    from mwdlink.decisions.blend import blend
    from mwdlink.files.study import read_trust

    if fractions is None and not targets:
        raise click.UsageError("Give --fractions, or a --target to find them.")
    components, card, celsius, uncertainty, read = _components(
        inputs, polymer, temperature, reading, calibration, outside
    )
    if fractions is not None and len(fractions) != len(components):
        raise click.UsageError(
            f"{len(fractions)} fractions for {len(components)} components "
            f"({', '.join(c.name for c in components)})."
        )
    found = None if trust is None else read_trust(trust)
    with working("Predicting the blend", output):
        result = blend(
            components,
            fractions,
            card,
            trust=found,
            target=list(targets),
            vary=vary,
            route=route,
            kernels=kernels or None,
            exponent=exponent,
            rouse=rouse,
            temperature_C=celsius,
            omega=frequencies(omega),
            noise=noise,
            fraction_uncertainty=uncertainty,
            members=members,
            seed=seed,
            gpc_error=gpc_error,
        )
    model = {"kernels": result.kernels, "exponent": result.model.exponent, "rouse": rouse}
    if result.route == "sweeps":
        model["kernels"] = []
    used = [*read, *([] if trust is None else [trust])]
    deliver(result, output, inputs=used, polymer=card, model=model, seed=seed)


def _components(
    inputs: tuple[Path, ...],
    polymer: str | None,
    temperature: float | None,
    reading: dict[str, Any],
    calibration: str,
    outside: bool,
) -> tuple[Any, Any, float | None, float, list[Any]]:
    """Components, card, temperature, weighing error and the files read."""
    if any(path.suffix.lower() == ".toml" for path in inputs):
        if len(inputs) > 1:
            raise click.UsageError("Give one study file, or the components' tables; not both.")
        from mwdlink.files.study import read_study

        study = read_study(inputs[0], polymer=polymer, temperature_C=temperature, outside=outside)
        return (
            study.components,
            study.polymer,
            study.temperature_C,
            study.fraction_uncertainty,
            list(study.paths),
        )
    if len(inputs) < 2:
        raise click.UsageError("A blend needs two components or more, or a study file (.toml).")
    if polymer is None:
        raise click.UsageError("Missing option '--polymer'.")
    from mwdlink.chains.distribution import Distribution
    from mwdlink.cli.inputs import read_one
    from mwdlink.decisions.components import Component
    from mwdlink.files.cards import read_polymer

    parts = []
    for i, path in enumerate(inputs):
        data = read_one(
            path,
            ("distribution", "sweep"),
            reading,
            temperature_C=temperature,
            calibration=calibration,
        )
        name = (
            path.stem if [p.stem for p in inputs].count(path.stem) == 1 else f"{path.stem}-{i + 1}"
        )
        known = isinstance(data, Distribution)
        parts.append(Component(name, data if known else None, None if known else data))
    return tuple(parts), read_polymer(polymer), temperature, 0.0, list(inputs)
