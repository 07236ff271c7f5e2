"""Kill a batch with SIGKILL again and again, and look each time at what it left.

    python tests/runs/kill_at_random.py LOTS FOLDER KILLS

Forks from a process that has loaded everything, so that a trial costs the work and not the start.
Prints one line of JSON; leaves with 1 at the first thing lost, half written or done twice.
"""

from __future__ import annotations

import json
import os
import random
import shutil
import signal
import sys
import time
from pathlib import Path

for name in ("OPENBLAS", "OMP", "MKL"):
    os.environ[f"{name}_NUM_THREADS"] = "1"

sys.path.insert(0, str(Path(__file__).parent))

from lots_made import QUICK, contents  # noqa: E402

from mwdlink.runs.batch import batch  # noqa: E402
from mwdlink.runs.lots import find_lots  # noqa: E402


def start(lots: str, out: Path) -> int:
    """Begin or go on with the batch in a child; gives its process number."""
    child = os.fork()
    if child == 0:
        try:
            batch([lots], "hdpe", out=out, workers=1, **QUICK)
            os._exit(0)
        except BaseException as error:
            sys.stderr.write(f"{type(error).__name__}: {error}\n")
            os._exit(1)
    return child


def finished(partial: Path, names: set[str]) -> dict[str, int]:
    """When each finished input was written; every folder must be whole."""
    out = {}
    for folder in partial.iterdir() if partial.is_dir() else ():
        if folder.name in names:
            record = json.loads((folder / "result.json").read_text())
            if record["command"] != "invert" or not (folder / "fit.csv").stat().st_size:
                raise SystemExit(f"half written: {folder}")
            out[folder.name] = (folder / "result.json").stat().st_mtime_ns
    return out


def main(lots: str, top: Path, kills: int, seed: int = 7) -> dict[str, float]:
    chance = random.Random(seed)
    names = {lot.name for lot in find_lots([lots])[0]}
    batch([lots], "hdpe", out=top / "warm", workers=1, **QUICK)  # loads what loads late
    began = time.monotonic()
    os.waitpid(start(lots, top / "whole"), 0)
    span = time.monotonic() - began
    wanted = contents(top / "whole")
    killed = runs = 0
    while killed < kills:
        runs += 1
        out = top / f"run-{runs}"
        partial = out.with_name(out.name + ".partial")
        before: dict[str, int] = {}
        while True:
            child = start(lots, out)
            # late moments too, where the whole is written and put in place
            pause = chance.uniform(0.0, 0.7 * span)
            end = time.monotonic() + pause
            status = None
            while time.monotonic() < end and status is None:
                done, code = os.waitpid(child, os.WNOHANG)
                status = code if done else None
                time.sleep(0.002)
            if status is None and killed < kills:
                os.kill(child, signal.SIGKILL)
                killed += 1
            if status is None:
                status = os.waitpid(child, 0)[1]
            if out.exists():
                if contents(out) != wanted:
                    raise SystemExit(f"{out} is not what an undisturbed run gives")
                there = {n: (out / n / "result.json").stat().st_mtime_ns for n in names}
            else:
                there = finished(partial, names)
            for name, when in before.items():
                if there.get(name) != when:
                    raise SystemExit(f"{name} was lost or done again in {out}")
            before = there
            if out.exists() and (status == 0 or not partial.exists()):
                break
            if status not in (0, signal.SIGKILL):
                raise SystemExit(f"a run ended with {status}")
            if out.exists():  # killed between the last two steps
                break
        shutil.rmtree(out)
        shutil.rmtree(partial, ignore_errors=True)
    return {"kills": killed, "runs": runs, "seconds": time.monotonic() - began}


if __name__ == "__main__":
    sys.stdout.write(json.dumps(main(sys.argv[1], Path(sys.argv[2]), int(sys.argv[3]))) + "\n")
