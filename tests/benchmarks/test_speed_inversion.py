"""Speed of the inversion as ratios within one run; asserted only under --full."""

from __future__ import annotations

import importlib.util
import os
import subprocess
import sys
from pathlib import Path

import mwdlink

HERE = Path(__file__).parent


def script():
    spec = importlib.util.spec_from_file_location("speed_i", HERE / "speed_inversion.py")
    module = importlib.util.module_from_spec(spec)
    sys.modules["speed_i"] = module  # dataclasses look their module up
    spec.loader.exec_module(module)
    return module


def test_the_general_solver_solves_the_same_problem():
    """Derived: both ends of the objective agree to a tenth."""
    s = script()
    problem = s.make_problem(nodes=40, frequencies=16)
    found = s.scan(problem)
    k = len(found.fits) // 2
    other = s.general_solver(problem, float(found.smoothing[k]), s.good_start(problem), None)
    assert abs(other - found.fits[k].objective) < 0.1


def test_ratios(full):
    """A hundred times faster than general solves; a step within three times its bare algebra.

    In a process of its own, so that one thread is one thread whatever was imported before.
    """
    solves, repeats = (4, 7) if full else (1, 1)
    code = (
        "import speed_inversion as s\n"
        f"j = s.job_ratio({solves}, {repeats})\n"
        "a, b = s.step_ratio()\n"
        "print(j.cold / j.ours, a / b)\n"
    )
    paths = [str(Path(mwdlink.__file__).parents[1]), os.environ.get("PYTHONPATH", "")]
    environment = os.environ | {"PYTHONPATH": os.pathsep.join(filter(None, paths))}
    done = subprocess.run(
        [sys.executable, "-W", "ignore", "-c", code],
        cwd=HERE,
        env=environment,
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0, done.stderr
    job, step = (float(x) for x in done.stdout.split()[-2:])
    print(f"job ratio {job:.0f}, step ratio {step:.1f}")
    assert job > 5 and step < 30
    if full:
        assert job >= 100
        assert step <= 3
