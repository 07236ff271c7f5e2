"""The public names: each is there, loads when first used, and nothing loads before."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

import mwdlink
from mwdlink.cli.main import COMMANDS

FUNCTIONS = {
    "predict": "predict",
    "invert": "invert",
    "blend": "blend",
    "blendcheck": "check_blends",
    "tail": "find_tail",
    "datasheet": "check_datasheet",
    "spectrum": "fit_spectrum",
    "master": "make_master",
    "rest": "rest_time",
    "calibrate": "calibrate",
    "batch": "batch",
}


@pytest.mark.parametrize("name", mwdlink.__all__)
def test_public_name(name: str) -> None:
    """Interface: ``import mwdlink`` gives the nouns, the readers and the functions."""
    value = getattr(mwdlink, name)
    assert value is not None
    assert name in dir(mwdlink)
    if name != "__version__":
        assert value.__doc__


def test_unknown_name() -> None:
    """Common practice: a name that is not there is an AttributeError."""
    with pytest.raises(AttributeError, match="no_such_thing"):
        mwdlink.no_such_thing  # noqa: B018


def test_every_command_is_one_call() -> None:
    """House habit: what a command line does is one Python call."""
    whole_jobs = {"demo", "polymers"}
    assert set(COMMANDS) - whole_jobs <= set(FUNCTIONS)
    assert all(callable(getattr(mwdlink, FUNCTIONS[name])) for name in set(COMMANDS) - whole_jobs)


def test_import_is_light() -> None:
    """Interface: submodules load when first used."""
    code = (
        "import sys, mwdlink\n"
        "heavy = ('numpy', 'scipy', 'pandas', 'matplotlib', 'click')\n"
        "sys.exit([m for m in heavy if m in sys.modules] or 0)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
    assert done.returncode == 0, done.stderr


def test_package_is_typed_and_carries_its_cards() -> None:
    """pyproject.toml: an install brings py.typed and the cards."""
    home = Path(mwdlink.__file__).parent
    assert (home / "py.typed").is_file()
    assert len(list((home / "chains" / "cards").glob("*.toml"))) > 5
