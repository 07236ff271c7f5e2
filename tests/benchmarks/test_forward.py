"""The forward benchmarks run; their timings are asserted only under --full."""

from __future__ import annotations

import importlib.util
import json
import os
import subprocess
import sys
from pathlib import Path

import numpy as np

import mwdlink

HERE = Path(__file__).parent


def script(name: str):
    spec = importlib.util.spec_from_file_location(f"bench_{name}", HERE / f"{name}.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_eta0_against_dispersity() -> None:
    """Derived: exponential kernel, exponent 2, no Rouse part: eta0/law(Mw) by both families.

    The published independence of eta0 from dispersity is shown beside it in the docs, not asserted.
    """
    found = script("eta0_dispersity").table("exponential", 2.0, rouse=False)
    np.testing.assert_allclose(found["log-normal"], [1.04, 1.32, 2.0, 2.75, 6.3, 15.1], rtol=6e-3)
    np.testing.assert_allclose(found["Schulz-Zimm"], [1.04, 1.16, 1.31, 1.38, 1.5, 1.57], rtol=1e-2)


def test_forward_speed(full: bool) -> None:
    """Contract: 400 nodes to 200 frequencies within 10 ms of processor time, kernels of one shape.

    In a process of its own, so that one thread is one thread whatever was imported before.
    """
    nodes, runs = (400, 15) if full else (60, 1)
    code = (
        f"import sys; sys.path.insert(0, {str(HERE)!r}); import forward_speed, json; "
        f"print(json.dumps(forward_speed.measure({nodes}, {runs})))"
    )
    top = str(Path(mwdlink.__file__).parents[1])
    environment = os.environ | {
        "OPENBLAS_NUM_THREADS": "1",
        "OMP_NUM_THREADS": "1",
        "PYTHONPATH": os.pathsep.join(filter(None, [top, os.environ.get("PYTHONPATH", "")])),
    }
    done = subprocess.run(
        [sys.executable, "-c", code], env=environment, capture_output=True, text=True, check=True
    )
    found = json.loads(done.stdout)
    assert set(found) == {"exponential", "reptation", "power-law", "fluctuation"}
    if full:
        for kernel in ("exponential", "reptation", "power-law"):
            assert found[kernel]["new"] <= 10.0, found
            assert found[kernel]["kept"] <= 3.0, found
