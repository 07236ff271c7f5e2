"""The front door: commands that load when used, and every ending as an exit status.

Nothing here imports more than click: ``mwdlink --help`` must answer before numpy could load.
"""

from __future__ import annotations

import contextlib
import importlib
import os
import signal
import sys
from typing import Any, NoReturn

import click

import mwdlink

# what each command is for, in the order a newcomer meets them; its code is mwdlink/cli/NAME.py
COMMANDS = {
    "demo": "Write an invented example and run the whole job on it.",
    "predict": "From a distribution to moduli, spectrum, relaxation and flow.",
    "invert": "From a frequency sweep to the molecular-weight distribution.",
    "blend": "Predict a blend, or find the fraction that reaches a target.",
    "blendcheck": "Hold measured blends of known fractions against the rule.",
    "tail": "GPC and sweep together: weight beyond what the GPC sees.",
    "datasheet": "Do the numbers on a supplier's sheet hang together?",
    "master": "From sweeps at several temperatures to one master curve.",
    "spectrum": "From a sweep to its relaxation spectrum, without a chain model.",
    "rest": "How long to wait after loading a sample.",
    "calibrate": "A polymer card from samples with both GPC and sweep.",
    "batch": "Invert many sweeps into one table.",
    "polymers": "The built-in polymer cards and where each number is from.",
}

USAGE, BAD_INPUT, NOT_DONE, BROKEN_OFF, TERMINATED, UNEXPECTED = 2, 3, 4, 130, 143, 1

EPILOG = """\b
Exit status: 0 done, 2 usage, 3 input that cannot be used, 4 no convergence
or an enforced check failed, 5 part of a batch failed, 130 interrupted,
143 terminated, 1 unexpected (MWDLINK_DEBUG=1 shows the traceback).

\b
Completion, for bash: eval "$(_MWDLINK_COMPLETE=bash_source mwdlink)"
(zsh_source, fish_source for the others)."""


class CommandsOnDemand(click.Group):
    """A group whose commands are imported one by one, when one is used."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        command: click.Command = importlib.import_module(f"mwdlink.cli.{cmd_name}").command
        return command

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        name = args[0]
        if not name.startswith("-") and name not in COMMANDS and not ctx.resilient_parsing:
            raise click.UsageError(unknown("command", name, list(COMMANDS)), ctx=ctx)
        return super().resolve_command(ctx, args)

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))

    def shell_complete(self, ctx: click.Context, incomplete: str) -> list[Any]:
        from click.shell_completion import CompletionItem

        found = [n for n in self.list_commands(ctx) if n.startswith(incomplete)]
        if found:
            return [CompletionItem(name, help=COMMANDS[name]) for name in found]
        return click.Command.shell_complete(self, ctx, incomplete)

    def invoke(self, ctx: click.Context) -> Any:
        try:
            return super().invoke(ctx)
        except BrokenPipeError:
            return _reader_left()


def unknown(kind: str, name: str, known: list[str]) -> str:
    """Words for a name that is not among the known ones, with the nearest of them."""
    import difflib

    near = difflib.get_close_matches(name.lower(), known, n=3, cutoff=0.5)
    if near:
        return f"No {kind} {name!r}. Did you mean {' or '.join(near)}?"
    return f"No {kind} {name!r}. There are: {', '.join(known)}."


@click.group(
    cls=CommandsOnDemand,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 80},
    epilog=EPILOG,
)
@click.version_option(mwdlink.__version__, prog_name="mwdlink", message="%(prog)s %(version)s")
@click.pass_context
def main(ctx: click.Context) -> None:
    """Molecular-weight distribution and melt rheology, each from the other.

    \b
    mwdlink predict gpc.csv --polymer hdpe --out result
    mwdlink invert sweep.csv --polymer hdpe --temperature 190 --out result

    `mwdlink COMMAND -h` tells what a command takes and gives.
    """
    if os.environ.get("NO_COLOR") or os.environ.get("TERM") == "dumb":
        ctx.color = False


class Terminated(BaseException):
    """SIGTERM arrived: unwinds the stack, so that half-written folders are cleared away."""


def run(arguments: list[str] | None = None) -> NoReturn:
    """Run the command line and leave with the status of its ending."""
    # before numpy loads: its matrices are small here, and threads would only wait for each other
    for library in ("OPENBLAS", "OMP", "MKL"):
        os.environ.setdefault(f"{library}_NUM_THREADS", "1")
    with contextlib.suppress(ValueError):  # not in the main thread: leave signals alone
        signal.signal(signal.SIGTERM, _terminate)
    status = _status(arguments)
    try:
        if sys.stdout is not None:  # it may have been closed by the caller
            sys.stdout.flush()
    except BrokenPipeError:
        _reader_left()
    except OSError as error:
        _say(f"Error: the output could not be written: {error.strerror}.")
        _reader_left()
        status = status or UNEXPECTED
    sys.exit(status)


def _status(arguments: list[str] | None) -> int:
    try:
        outcome = main.main(args=arguments, prog_name="mwdlink", standalone_mode=False)
        return outcome if isinstance(outcome, int) else 0
    except click.Abort:
        _say("Interrupted.")
        return BROKEN_OFF
    except click.ClickException as error:
        error.show()
        return error.exit_code
    except KeyboardInterrupt:
        _say("Interrupted.")
        return BROKEN_OFF
    except Terminated:
        _say("Terminated.")
        return TERMINATED
    except SystemExit as leaving:
        return leaving.code if isinstance(leaving.code, int) else UNEXPECTED
    except Exception as error:
        return _with_traceback(_explained(error))


def _explained(error: Exception) -> int:
    """Say in a line what went wrong; gives the status."""
    from mwdlink.errors import InputError, ModelError, MwdlinkError, NotConverged

    if isinstance(error, (InputError, ModelError)):
        _say(f"Error: {error}")
        return BAD_INPUT
    if isinstance(error, NotConverged):
        _say(f"Did not converge: {error}")
        return NOT_DONE
    if isinstance(error, MwdlinkError):
        _say(f"Error: {error}")
        return UNEXPECTED
    if isinstance(error, OSError):
        _say(f"Error: {error.filename or 'the output'}: {error.strerror or error}.")
        return UNEXPECTED
    first = (str(error).strip().splitlines() or ["no message"])[0]
    _say(
        f"Unexpected fault ({type(error).__name__}: {first}). Please report it to the "
        "maintainers with the command line, the input and what MWDLINK_DEBUG=1 prints."
    )
    return UNEXPECTED


def _with_traceback(status: int) -> int:
    if os.environ.get("MWDLINK_DEBUG") == "1":
        import traceback

        traceback.print_exc()
    return status


def _say(text: str) -> None:
    with contextlib.suppress(OSError, ValueError):
        click.echo(text, err=True)


def _terminate(number: int, frame: Any) -> NoReturn:
    raise Terminated


def _reader_left() -> int:
    """Whoever read our output has closed it: they have what they wanted, end quietly."""
    with contextlib.suppress(OSError, ValueError):
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    return 0
