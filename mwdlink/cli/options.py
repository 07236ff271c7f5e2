"""The options that commands share: what can be typed, and what it becomes.

Each ``*_options`` is a decorator that adds a family of options to a command. Values are checked
while the command line is read, so that a slip costs no computation.
"""

from __future__ import annotations

import functools
import re
from collections.abc import Callable
from dataclasses import dataclass, field
from importlib import resources
from pathlib import Path
from typing import Any, TypeVar

import click

F = TypeVar("F", bound=Callable[..., Any])

KERNELS = ("exponential", "reptation", "power-law", "fluctuation")


def card_names() -> list[str]:
    """Names of the built-in polymer cards, without loading them."""
    cards = resources.files("mwdlink") / "chains" / "cards"
    names = [f.name.removesuffix(".toml") for f in cards.iterdir() if f.name.endswith(".toml")]
    return sorted(n for n in names if n != "template")


class PolymerName(click.ParamType):
    """A built-in card's name, or the path of a card."""

    name = "NAME|CARD.toml"

    def convert(self, value: Any, param: Any, ctx: Any) -> str:
        if value not in card_names() and not Path(value).is_file():
            from mwdlink.errors import InputError
            from mwdlink.files.cards import read_polymer

            try:
                read_polymer(value)
            except InputError as error:  # it knows other names of polymers and nearby files
                self.fail(str(error), param, ctx)
        return str(value)

    def shell_complete(self, ctx: Any, param: Any, incomplete: str) -> list[Any]:
        from click.shell_completion import CompletionItem

        found = [n for n in card_names() if n.startswith(incomplete)]
        return [CompletionItem(n) for n in found] or [CompletionItem(incomplete, type="file")]


class Members(click.IntRange):
    """How many members: none, or as many as the ends of a 90 % interval need."""

    LEAST = 20

    def __init__(self) -> None:
        super().__init__(0, 100_000)

    def convert(self, value: Any, param: Any, ctx: Any) -> int:
        number = int(super().convert(value, param, ctx))
        if 0 < number < self.LEAST:
            self.fail(
                f"{number} members are too few for an interval of 90 %: give 0 for none, or "
                f"{self.LEAST} or more.",
                param,
                ctx,
            )
        return number


class Number(click.ParamType):
    """A finite number within limits, optionally with a percent sign."""

    def __init__(
        self,
        name: str,
        low: float,
        high: float = 1e30,
        percent: bool = False,
        open_low: bool = True,
    ) -> None:
        self.name, self.low, self.high, self.percent = name, low, high, percent
        self.open_low = open_low

    def convert(self, value: Any, param: Any, ctx: Any) -> float:
        if isinstance(value, float):
            return value
        text, scale = str(value).strip(), 1.0
        if self.percent and text.endswith("%"):
            text, scale = text[:-1], 0.01
        number = _float(text)
        if number is None:
            self.fail(f"{value!r} is not a number.", param, ctx)
        number *= scale
        below = number <= self.low if self.open_low else number < self.low
        if below or number > self.high:
            sign = ">" if self.open_low else ">="
            top = f" and <= {self.high:g}" if self.high < 1e30 else ""
            self.fail(
                f"{value!r} is out of range: it must be {sign} {self.low:g}{top}.", param, ctx
            )
        return number


class Exponent(click.ParamType):
    """The mixing exponent: a number that fixes it, or a range."""

    name = "X|LOW:HIGH"

    def convert(self, value: Any, param: Any, ctx: Any) -> float | tuple[float, float]:
        numbers = [_float(part) for part in str(value).split(":")]
        if len(numbers) > 2 or any(n is None or not 1 <= n <= 8 for n in numbers):
            self.fail(
                f"{value!r} is not an exponent from 1 to 8, nor a range like 1.8:2.3.", param, ctx
            )
        if len(numbers) == 1:
            return numbers[0]  # type: ignore[return-value]
        if not numbers[0] < numbers[1]:  # type: ignore[operator]
            self.fail(f"{value!r}: the first end must be below the second.", param, ctx)
        return (numbers[0], numbers[1])  # type: ignore[return-value]


class Frequencies(click.ParamType):
    """Output frequencies as LOW:HIGH:PER_DECADE [rad/s]."""

    name = "LOW:HIGH:PER_DECADE"

    def convert(self, value: Any, param: Any, ctx: Any) -> tuple[float, float, int]:
        if isinstance(value, tuple):
            return value
        numbers = [_float(part) for part in str(value).split(":")]
        if len(numbers) != 3 or any(n is None for n in numbers):
            self.fail(f"{value!r} is not like 1e-3:1e3:10.", param, ctx)
        low, high, count = numbers
        if not 0 < low < high or not 1 <= count <= 200 or high / low > 1e30:  # type: ignore
            self.fail(
                f"{value!r}: 0 < LOW < HIGH and 1 to 200 points a decade are needed.", param, ctx
            )
        return (low, high, int(count))  # type: ignore[return-value, arg-type]


class Pair(click.ParamType):
    """KEY=VALUE."""

    def __init__(self, name: str = "KEY=VALUE") -> None:
        self.name = name

    def convert(self, value: Any, param: Any, ctx: Any) -> tuple[str, str]:
        if isinstance(value, tuple):
            return value
        key, sign, rest = str(value).partition("=")
        if not sign or not key.strip() or not rest.strip():
            self.fail(f"{value!r} is not like {self.name}.", param, ctx)
        return key.strip(), rest.strip()


class Wanted(click.ParamType):
    """A quantity and the relative precision wanted of it, as in Mz=0.1."""

    name = "QUANTITY=PRECISION"

    def convert(self, value: Any, param: Any, ctx: Any) -> tuple[str, float]:
        if isinstance(value, tuple):
            return value
        name, _, text = str(value).partition("=")
        precision = _float(text)
        if not name.strip() or precision is None or not 0 < precision < 1:
            self.fail(f"{value!r} is not like Mz=0.1.", param, ctx)
        return name.strip(), precision


class Rows(click.ParamType):
    """Line numbers such as 3,17-19."""

    name = "ROWS"

    def convert(self, value: Any, param: Any, ctx: Any) -> frozenset[int]:
        if isinstance(value, frozenset):
            return value
        rows: set[int] = set()
        for part in str(value).split(","):
            match = re.fullmatch(r"\s*(\d{1,7})\s*(?:-\s*(\d{1,7})\s*)?", part)
            if match is None:
                self.fail(f"{part.strip()!r} is not a row or a range like 17-19.", param, ctx)
            first, last = int(match[1]), int(match[2] or match[1])
            if not 1 <= first <= last:
                self.fail(f"{part.strip()!r}: rows count from 1, ranges go upwards.", param, ctx)
            rows.update(range(first, last + 1))
        return frozenset(rows)


def _float(text: str) -> float | None:
    try:
        number = float(text)
    except ValueError:
        return None
    return number if abs(number) < float("inf") else None


INPUT = click.Path(exists=True, dir_okay=False, path_type=Path)
TEMPERATURE = Number("C", -273.15, 1000)

# ---------------------------------------------------------------------------------- families


def _family(*options: Callable[[F], F]) -> Callable[[F], F]:
    def decorate(function: F) -> F:
        for option in reversed(options):
            function = option(function)
        return function

    return decorate


def polymer_option(required: bool = True) -> Callable[[F], F]:
    return click.option(
        "--polymer",
        type=PolymerName(),
        required=required,
        help="A built-in card (see `mwdlink polymers`) or a card of your own.",
    )


temperature_option = click.option(
    "--temperature", type=TEMPERATURE, help="Of the melt [C]. Default: the card's own."
)
kernel_option = click.option(
    "--kernel",
    "kernels",
    type=click.Choice(KERNELS),
    multiple=True,
    help="How a single chain relaxes; repeatable.",
)
exponent_option = click.option(
    "--exponent",
    type=Exponent(),
    help="Mixing exponent: a number fixes it, a range spreads it.",
)
rouse_option = click.option(
    "--rouse/--no-rouse", default=True, show_default=True, help="Chain motion within the tube."
)
noise_option = click.option(
    "--noise",
    type=Number("R", 0, 1, percent=True),
    help="Relative error of the moduli. Default: from the table, else estimated, at least 1 %.",
)
above_option = click.option(
    "--above",
    type=Number("M", 1),
    multiple=True,
    help="Also the weight above this molar mass [g/mol]; repeatable.",
)
method_option = click.option(
    "--method",
    type=click.Choice(["smooth", "tikhonov", "mixture", "generalised-exponential"]),
    default="smooth",
    show_default=True,
    help="How the distribution is sought.",
)
choose_option = click.option(
    "--choose",
    type=click.Choice(["evidence", "gcv", "l-curve", "discrepancy"]),
    default="evidence",
    show_default=True,
    help="How tikhonov chooses its smoothing.",
)
smoothing_option = click.option(
    "--smoothing", type=Number("LAMBDA", 0), help="A fixed smoothing. Default: by the evidence."
)
members_option = click.option(
    "--members",
    type=Members(),
    default=200,
    show_default=True,
    help="Ensemble members behind the intervals, 20 or more; 0: no intervals.",
)
seed_option = click.option(
    "--seed", type=click.IntRange(0), default=0, show_default=True, help="Of the random draws."
)
omega_option = click.option(
    "--omega", type=Frequencies(), help="Output frequencies [rad/s]. Default: 1e-4:1e4:10."
)
model_options = _family(
    polymer_option(), temperature_option, kernel_option, exponent_option, rouse_option
)
ensemble_options = _family(members_option, seed_option)
method_options = _family(method_option, choose_option, smoothing_option)
calibration_option = click.option(
    "--calibration",
    type=click.Choice(("absolute", "universal", "equivalent", "unstated")),
    default="unstated",
    help="What the GPC's molar masses are.",
)
enforce_option = click.option(
    "--enforce", is_flag=True, help="Leave with status 4 where a check does not pass."
)


def reading_options(function: F) -> F:
    """Add the options on how tables are read; the command gets one `reading` for the readers."""

    @click.option(
        "--column",
        "columns",
        type=Pair("ROLE=HEADER[:UNIT]"),
        multiple=True,
        help="Which column is what, where the header does not say; repeatable.",
    )
    @click.option("--omit", type=Rows(), help="Leave rows out, as in 3,17-19; they are listed.")
    @click.option("--omit-unreadable", is_flag=True, help="Leave out rows that cannot be read.")
    @click.option(
        "--decimal", type=click.Choice((".", ",")), help="Decimal mark, where it is not clear."
    )
    @click.option("--block", type=click.IntRange(1), help="Which table of a file, from 1.")
    @click.option("--sheet", help="Which sheet of a workbook.")
    @functools.wraps(function)
    def inner(
        *args: Any,
        columns: Any,
        omit: frozenset[int] | None,
        omit_unreadable: bool,
        decimal: str | None,
        block: int | None,
        sheet: str | None,
        **rest: Any,
    ) -> Any:
        reading = {
            "columns": dict(columns) or None,
            "omit": set(omit or ()),
            "omit_unreadable": omit_unreadable,
            "decimal": decimal,
            "block": block,
            "sheet": sheet,
        }
        return function(*args, reading=reading, **rest)

    return inner  # type: ignore[return-value]


def frequencies(omega: tuple[float, float, int] | None) -> Any:
    """The frequencies asked for [rad/s], shape (m,), or None."""
    if omega is None:
        return None
    import numpy as np

    low, high, per_decade = omega
    decades = np.log10(high / low)
    return np.geomspace(low, high, max(2, round(decades * per_decade) + 1))


@dataclass(frozen=True)
class Output:
    """Where a result goes, as asked on the command line."""

    out: Path | None = None
    json: bool = False
    replace: bool = False
    quiet: bool = False
    labels: dict[str, str] = field(default_factory=dict)


def output_options(function: F) -> F:
    """Add --label, --out, --json, --replace and --quiet; the command gets one `output`."""

    @click.option("--label", type=Pair(), multiple=True, help="For the report's head; repeatable.")
    @click.option("--out", type=click.Path(path_type=Path), help="Folder to write.")
    @click.option("--json", "as_json", is_flag=True, help="Only result.json's content on stdout.")
    @click.option("--replace", is_flag=True, help="Replace the folder that an earlier run wrote.")
    @click.option("--quiet", is_flag=True, help="No notes and no progress.")
    @functools.wraps(function)
    def inner(
        *args: Any,
        label: Any,
        out: Path | None,
        as_json: bool,
        replace: bool,
        quiet: bool,
        **rest: Any,
    ) -> Any:
        if out is not None:
            from mwdlink.files.results import why_not

            # before anything is computed: a refusal after minutes of work is no kindness
            reason = why_not(out, replace)
            if reason:
                raise click.UsageError(reason)
        output = Output(out, as_json, replace, quiet, dict(label))
        return function(*args, output=output, **rest)

    return inner  # type: ignore[return-value]
