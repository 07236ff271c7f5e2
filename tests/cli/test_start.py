"""Starting: version, help, and nothing heavy on the way."""

from __future__ import annotations

import subprocess
import sys

import mwdlink


def test_module_and_version() -> None:
    """``python -m mwdlink --version`` prints the version (interface: same as ``mwdlink``)."""
    done = subprocess.run(
        [sys.executable, "-m", "mwdlink", "--version"], capture_output=True, text=True
    )
    assert done.returncode == 0
    assert mwdlink.__version__ in done.stdout
