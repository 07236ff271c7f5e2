"""Molecular-weight distribution and linear viscoelasticity of polymer melts, each from the other.

The nouns (`Distribution`, `Polymer`, `Sweep`, `Spectrum`), the readers (`read_distribution`,
`read_sweep`, `read_polymer`, ...) and one function for each command (`predict`, `invert`,
`blend`, ...) are found here. Each loads its module when it is first used, so that
``import mwdlink`` itself costs nothing.
"""

from __future__ import annotations

import importlib
from typing import Any

__version__ = "0.1.0"

# name -> module that defines it
_HOME = {
    # nouns
    "Distribution": "mwdlink.chains.distribution",
    "Polymer": "mwdlink.chains.polymer",
    "Model": "mwdlink.relaxation.mixing",
    "Relaxation": "mwdlink.relaxation.melt_response",
    "Spectrum": "mwdlink.relaxation.spectrum",
    "Sweep": "mwdlink.measurement.sweep",
    "Uncertain": "mwdlink.quantity",
    # what can go wrong
    "MwdlinkError": "mwdlink.errors",
    "InputError": "mwdlink.errors",
    "ModelError": "mwdlink.errors",
    "NotConverged": "mwdlink.errors",
    # readers
    "read_distribution": "mwdlink.files.tables",
    "read_sweep": "mwdlink.files.tables",
    "read_sweeps": "mwdlink.files.tables",
    "read_relaxation": "mwdlink.files.tables",
    "read_flow_curve": "mwdlink.files.tables",
    "read_spectrum": "mwdlink.files.tables",
    "read_any": "mwdlink.files.tables",
    "read_polymer": "mwdlink.files.cards",
    # one function for each command
    "predict": "mwdlink.decisions.predict",
    "invert": "mwdlink.inversion.invert",
    "fit_spectrum": "mwdlink.measurement.spectrum_fit",
    "make_master": "mwdlink.decisions.branching",
    "rest_time": "mwdlink.decisions.rest",
    "blend": "mwdlink.decisions.blend",
    "check_blends": "mwdlink.decisions.blendcheck",
    "find_tail": "mwdlink.decisions.tail",
    "check_datasheet": "mwdlink.decisions.datasheet",
    "calibrate": "mwdlink.decisions.calibrate",
    "batch": "mwdlink.runs.batch",
}

__all__ = ["__version__", *_HOME]


def __getattr__(name: str) -> Any:
    home = _HOME.get(name)
    if home is None:
        raise AttributeError(f"module 'mwdlink' has no attribute {name!r}")
    value = getattr(importlib.import_module(home), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *_HOME})
