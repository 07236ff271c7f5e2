"""Workers that die, clusters that lose one, runs that are killed: nothing lost, nothing twice."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable
from concurrent.futures import Executor, Future
from concurrent.futures.process import BrokenProcessPool
from pathlib import Path
from typing import Any

import pytest
from lots_made import QUICK, contents, write_lots

import mwdlink
from mwdlink.errors import InputError
from mwdlink.runs.batch import Progress, batch
from mwdlink.runs.lots import Lot
from mwdlink.runs.one import Job, Outcome
from mwdlink.runs.workers import ExecutorHands, hands_for, usable_cores

HERE = Path(__file__).parent
JOB = Job(None, (), {}, None, {}, {})


class Deadly(Executor):
    """Does the work at once; a chunk that holds a deadly lot breaks the whole pool."""

    def __init__(self, deadly: Callable[[int], bool]) -> None:
        self.deadly = deadly
        self.calls: list[list[int]] = []

    def submit(self, fn: Any, /, *args: Any, **kwargs: Any) -> Future[Any]:
        future: Future[Any] = Future()
        chunk = [index for index, _ in args[1]]
        self.calls.append(chunk)
        if any(self.deadly(i) for i in chunk):
            future.set_exception(BrokenProcessPool("a process died"))
        else:
            future.set_result([Outcome(i, row={"lot": i}) for i in chunk])
        return future


class Renewed(ExecutorHands):
    renewals = 0

    def renew(self) -> None:
        self.renewals += 1


def test_a_lot_that_kills_its_worker() -> None:
    """It is tried again, then alone, then given up with a reason; all others are done."""
    hands = Renewed(Deadly(lambda i: i == 5), width=3, chunk=2)
    found = list(hands.outcomes(JOB, [(i, Lot(f"{i}.csv", str(i))) for i in range(20)]))
    assert sorted(o.index for o in found) == list(range(20))
    assert [o.index for o in found if o.reason] == [5]
    assert "worker process died" in str(next(o for o in found if o.reason).reason)
    assert hands.renewals == 3


def test_a_worker_that_dies_by_chance() -> None:
    """One death costs a repetition and no lot."""
    once = iter([True])
    hands = Renewed(Deadly(lambda i: i == 5 and next(once, False)), width=3, chunk=2)
    found = list(hands.outcomes(JOB, [(i, Lot(f"{i}.csv", str(i))) for i in range(20)]))
    assert sorted(o.index for o in found) == list(range(20))
    assert not [o for o in found if o.reason]


def test_default_hands() -> None:
    """Few inputs are not worth the start of a process; one executor given is used as it is."""
    assert hands_for(3, None, None, None).__class__.__name__ == "Hands"
    given = Deadly(lambda i: False)
    hands = hands_for(3, None, given, None)
    assert isinstance(hands, ExecutorHands) and hands.executor is given
    assert usable_cores() >= 1


def workers_of(parent: int) -> list[int]:
    """Worker processes of a process."""
    out = []
    for entry in Path("/proc").glob("[0-9]*"):
        try:
            stat = (entry / "stat").read_text().rsplit(")", 1)[1].split()
            line = (entry / "cmdline").read_bytes()
        except OSError:
            continue
        if stat[1] == str(parent) and b"spawn_main" in line:
            out.append(int(entry.name))
    return out


def alive(process: int) -> bool:
    try:
        state = (Path("/proc") / str(process) / "stat").read_text().rsplit(")", 1)[1].split()[0]
    except OSError:
        return False
    return state not in "ZX"


@pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="needs /proc")
def test_process_killed_in_the_middle(lots: Path, whole: Path, tmp_path: Path) -> None:
    """kill -9 to a worker after the second lot: the result is complete and the same."""
    killed: list[int] = []

    def kill(p: Progress) -> None:
        if p.done == 2 and not killed:
            killed.extend(workers_of(os.getpid())[:1])
            os.kill(killed[0], signal.SIGKILL)

    batch([lots], "hdpe", out=tmp_path / "out", workers=2, progress=kill, **QUICK)
    assert killed and contents(tmp_path / "out") == contents(whole)


def test_killed_at_random(tmp_path: Path, full: bool) -> None:
    """kill -9 at random moments, late ones included, 200 times with --full: see the script."""
    write_lots(tmp_path / "lots", 4)
    kills = 200 if full else 4
    done = subprocess.run(
        [sys.executable, HERE / "kill_at_random.py", tmp_path / "lots", tmp_path, str(kills)],
        capture_output=True,
        text=True,
        timeout=3600 if full else 300,
        env={**os.environ, "PYTHONPATH": str(Path(mwdlink.__file__).parents[1])},
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert json.loads(done.stdout)["kills"] == kills


def test_cluster_without_its_package(monkeypatch: pytest.MonkeyPatch, lots: Path) -> None:
    """Missing extra and silent address end in one clear line each."""
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(InputError, match=r"pip install 'mwdlink\[cluster\]'"):
        batch([lots], "hdpe", cluster="tcp://127.0.0.1:1", **QUICK)


def test_cluster_loses_a_worker(lots: Path, whole: Path, tmp_path: Path) -> None:
    """A local dask cluster of two, one killed in the middle: complete and the same to the byte."""
    distributed = pytest.importorskip(
        "distributed", reason="the optional extra `cluster` is not installed"
    )
    home = str(Path(mwdlink.__file__).parents[1])
    with (
        distributed.LocalCluster(
            n_workers=2,
            threads_per_worker=1,
            processes=True,
            dashboard_address=None,
            env={"PYTHONPATH": os.pathsep.join([home, os.environ.get("PYTHONPATH", "")])},
        ) as cluster,
        distributed.Client(cluster) as client,
    ):
        pids = list(client.run(os.getpid).values())
        killed: list[int] = []

        def kill(p: Progress) -> None:
            if p.done >= 2 and not killed:
                killed.append(pids[0])
                os.kill(pids[0], signal.SIGKILL)

        batch(
            [lots],
            "hdpe",
            out=tmp_path / "out",
            cluster=cluster.scheduler_address,
            progress=kill,
            **QUICK,
        )
    assert killed and contents(tmp_path / "out") == contents(whole)


def test_workers_do_not_outlive_their_parent(lots: Path, tmp_path: Path) -> None:
    """kill -9 to the run itself: its two workers end too, within seconds."""
    run = subprocess.Popen(
        [
            sys.executable, "-m", "mwdlink", "batch", str(lots), "--polymer", "hdpe",
            "--workers", "2", "--out", str(tmp_path / "out"), "--quiet",
        ],
        env={**os.environ, "PYTHONPATH": str(Path(mwdlink.__file__).parents[1])},
    )  # fmt: skip
    found: list[int] = []
    end = time.monotonic() + 120
    while time.monotonic() < end and len(found) < 2:
        time.sleep(0.2)
        found = workers_of(run.pid)
    run.kill()
    run.wait()
    assert len(found) >= 2
    while time.monotonic() < end and any(alive(p) for p in found):
        time.sleep(0.2)
    assert not [p for p in found if alive(p)]


def test_no_threads_left(lots: Path) -> None:
    """A run in this process starts no thread of its own."""
    before = threading.active_count()
    batch([lots / "lot 1.csv"], "hdpe", **QUICK)
    assert threading.active_count() == before
