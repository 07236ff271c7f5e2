"""The front door: the lazy group of commands, and every ending as an exit status."""

from __future__ import annotations

import click

import mwdlink


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(mwdlink.__version__, prog_name="mwdlink")
def main() -> None:
    """Molecular-weight distribution and melt rheology, each from the other."""


def run() -> None:
    main(prog_name="mwdlink")
