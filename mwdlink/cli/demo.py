"""``mwdlink demo``: an invented example, and the whole job on it."""

from __future__ import annotations

import contextlib
import importlib
import io
import shlex
from dataclasses import dataclass
from pathlib import Path

import click

from mwdlink.cli.main import COMMANDS


@dataclass(frozen=True)
class Step:
    """One command of the story: the question it answers and how it is typed."""

    folder: str
    question: str
    words: str

    @property
    def command(self) -> str:
        return self.words.split()[0]


STEPS = (
    Step(
        "predict-fell",
        "How does a melt of grade Fell relax and flow, from its GPC curve alone?",
        "predict data/fell-gpc.csv --polymer hdpe --calibration absolute",
    ),
    Step(
        "invert-fell",
        "What distribution stands behind Fell's frequency sweep?",
        "invert data/fell-190.csv --polymer hdpe --above 5e5",
    ),
    Step(
        "spectrum-tarn",
        "Which relaxation times does Tarn's sweep support, without any chain model?",
        "spectrum data/tarn-190.csv",
    ),
    Step(
        "master-fell",
        "Do Fell's sweeps at three temperatures make one curve?",
        "master data/fell-sweeps.csv --reference 190 --polymer hdpe",
    ),
    Step(
        "rest-tarn",
        "How long must Tarn rest after loading?",
        "rest data/tarn-gpc.csv --polymer hdpe --calibration absolute",
    ),
    Step(
        "blendcheck",
        "Can the mixing rule be trusted on three weighed blends?",
        "blendcheck data/blends.toml",
    ),
    Step(
        "blend",
        "How will 70/30 relax, and which fraction gives 15000 Pa s at 0.1 rad/s?",
        "blend data/fell-190.csv data/tarn-190.csv --fractions 0.7,0.3 --polymer hdpe "
        "--trust blendcheck/trust.toml --target viscosity_Pa_s@0.1=1.5e4",
    ),
    Step(
        "tail-lot",
        "Does lot 4417 hold a tail that its GPC does not see?",
        "tail data/lot-gpc.csv data/lot-190.csv --polymer hdpe --calibration absolute",
    ),
    Step(
        "datasheet-fell",
        "Does Fell's data sheet hang together?",
        "datasheet data/fell-sheet.toml",
    ),
    Step(
        "calibrate",
        "What are the constants of our own material?",
        "calibrate data/blends.toml",
    ),
    Step(
        "batch",
        "All sweeps at once: one table.",
        "batch data/fell-190.csv data/tarn-190.csv data/lot-190.csv --polymer hdpe",
    ),
)
INTRODUCTION = (
    "An invented maker of extruded netting, two invented linear polyethylene grades (Fell and "
    "Tarn), and a lot of Fell with a tail. Every file under data/ is made by formula and seeded "
    "noise, from a kernel, an exponent and a time law that are not the tool's own.",
    "Each entry is a question, the command that answers it, and its report.",
)


@click.command()
@click.argument("folder", metavar="DIR", type=click.Path(path_type=Path, file_okay=False))
@click.option("--replace", is_flag=True, help="Replace what an earlier demo wrote.")
@click.option("--only", multiple=True, metavar="COMMAND", help="Run these commands only.")
def command(folder: Path, replace: bool, only: tuple[str, ...]) -> None:
    """Write an invented example to DIR and run the whole job on it.

    \b
    mwdlink demo demo-out

    Ends with where to look: DIR/index.html links the report of every command.
    """
    from mwdlink.runs.scenario import write_scenario

    if folder.exists() and any(folder.iterdir()) and not replace:
        raise click.UsageError(
            f"{folder} is not empty. Choose another folder, or add --replace to overwrite the "
            "demo in it."
        )
    unknown = [name for name in only if name not in COMMANDS]
    if unknown:
        raise click.UsageError(f"no command is called {unknown[0]!r}")
    made = write_scenario(folder / "data")
    click.echo(f"{len(made)} invented input files written to {folder / 'data'}\n")
    entries = []
    steps = [s for s in STEPS if s.command in COMMANDS and (not only or s.command in only)]
    for number, step in enumerate(steps, 1):
        shown = f"mwdlink {step.words} --out {step.folder}"
        click.secho(f"{number}/{len(steps)}  {step.question}", bold=True)
        click.echo(f"  $ {shown}")
        answer = run_step(step, folder)
        click.echo(click.wrap_text(answer, width=78, initial_indent="  ", subsequent_indent="  "))
        click.echo()
        entries.append((f"{step.folder}/report.html", step.question, f"{answer} ({shown})"))
    from mwdlink.report.page import index_page

    page = folder / "index.html"
    page.write_text(
        index_page("mwdlink: an invented example", INTRODUCTION, entries), encoding="utf-8"
    )
    click.secho(f"Look at {page}: it links the report of every command.", bold=True)


def run_step(step: Step, folder: Path) -> str:
    """Run one command inside the demo's folder; returns its answer, the summary's first lines."""
    words = shlex.split(step.words)
    code = importlib.import_module(f"mwdlink.cli.{step.command}")
    args = [*words[1:], "--out", step.folder, "--replace", "--quiet"]
    heard = io.StringIO()
    with contextlib.chdir(folder), contextlib.redirect_stdout(heard):
        code.command.main(
            args,
            prog_name=f"mwdlink {step.command}",
            standalone_mode=False,
            obj=[step.command, *args],  # what the report quotes as typed
        )
    first = heard.getvalue().strip().split("\n\n")[0]
    return " ".join(first.split())
