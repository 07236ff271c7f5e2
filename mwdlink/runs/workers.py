"""Many hands: processes, a cluster or any executor work on chunks of a batch.

Chunks are our own, a few at a time are in flight (memory stays flat), and a dead worker costs a
repetition, not a result: what was in flight is sent again, one by one; an input whose worker dies
even when it is alone is given up with a reason.
"""

from __future__ import annotations

import contextlib
import os
import signal
import threading
from collections import Counter, deque
from collections.abc import Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Executor, Future, ProcessPoolExecutor, wait
from typing import Any

from mwdlink.errors import InputError, MwdlinkError
from mwdlink.runs.limit import in_main_thread, limit_can_be_kept, run_within
from mwdlink.runs.lots import Lot
from mwdlink.runs.one import Job, Outcome, make_reference, run_chunk

THREADS = (
    "OPENBLAS_NUM_THREADS",
    "OMP_NUM_THREADS",
    "MKL_NUM_THREADS",
    "VECLIB_MAXIMUM_THREADS",
    "NUMEXPR_NUM_THREADS",
)
# lost this often in company, an input is next tried alone
SUSPECT = 2
# inputs a chunk at most: seconds of work, so that a lost chunk costs little
MOST_IN_CHUNK = 8


def usable_cores() -> int:
    """Cores this process may use."""
    try:
        return len(os.sched_getaffinity(0))
    except AttributeError:
        return os.cpu_count() or 1


def hold_threads() -> None:
    """One BLAS thread a process, for numpy yet to be loaded here and in processes yet to start."""
    for name in THREADS:
        os.environ[name] = "1"


class Hands:
    """Who does the work. Serial: in this process."""

    width = 1
    chunk = 1
    limit_seconds: float | None = None
    # after `stop`, does nobody write any more?
    ended = True

    def reference(self, job: Job, path: str) -> Any:
        """Invert the reference where the other inputs are inverted."""
        return make_reference(job, path)

    def outcomes(self, job: Job, lots: Sequence[tuple[int, Lot]]) -> Iterator[Outcome]:
        """Outcomes in any order, each input once."""
        for item in lots:
            yield from self.work(job, [item])

    def work(self, job: Job, chunk: Sequence[tuple[int, Lot]]) -> list[Outcome]:
        """Outcomes of a chunk, worked on here."""
        if self.limit_seconds is None:
            return run_chunk(job, chunk)
        return run_within(job, chunk, self.limit_seconds)

    def stop(self, at_once: bool = False) -> None:
        """End the workers; at once if the run is broken off."""


class ExecutorHands(Hands):
    """Any `concurrent.futures.Executor`.

    Parameters
    ----------
    executor : Executor
    width : int
        Chunks in flight.
    chunk : int
        Inputs a chunk.
    """

    def __init__(self, executor: Executor | None, width: int = 8, chunk: int = 1) -> None:
        self.executor, self.width, self.chunk = executor, width, chunk
        self.ended = False

    def renew(self) -> None:
        """Replace an executor that broke; one that was given cannot be."""
        raise MwdlinkError("the executor given has broken down; run again to go on.")

    def check(self) -> None:
        """Raise if it is not a worker that was lost but all of them at once."""

    def submit(self, function: Any, *arguments: Any) -> Future[Any]:
        assert self.executor is not None
        return self.executor.submit(function, *arguments)

    def send(self, job: Job, chunk: Sequence[tuple[int, Lot]]) -> Future[list[Outcome]]:
        """Have a chunk worked on."""
        if self.limit_seconds is None:
            return self.submit(run_chunk, job, chunk)
        return self.submit(run_within, job, chunk, self.limit_seconds)

    def reference(self, job: Job, path: str) -> Any:
        return self.submit(make_reference, job, path).result()

    def outcomes(self, job: Job, lots: Sequence[tuple[int, Lot]]) -> Iterator[Outcome]:
        lots = list(lots)
        size = max(1, min(self.chunk, len(lots) // (2 * self.width)))
        waiting = deque(lots[i : i + size] for i in range(0, len(lots), size))
        alone: deque[tuple[int, Lot]] = deque()
        strikes: Counter[int] = Counter()
        flying: dict[Future[list[Outcome]], list[tuple[int, Lot]]] = {}
        while waiting or flying or alone:
            solo = not waiting and not flying
            if solo:
                waiting.append([alone.popleft()])
            lost: list[list[tuple[int, Lot]]] = []
            broken = False
            while waiting and len(flying) < self.width:
                part = waiting.popleft()
                try:
                    flying[self.send(job, part)] = part
                except (RuntimeError, OSError):  # a broken pool refuses work
                    waiting.appendleft(part)
                    broken = True
                    break
            done, _ = wait(flying, return_when=FIRST_COMPLETED) if flying else (set(), None)
            for future in done:
                part = flying.pop(future)
                try:
                    outcomes = future.result()
                except MemoryError:
                    lost.append(part)
                except Exception as error:
                    lost.append(part)
                    broken = broken or "Broken" in type(error).__name__
                else:
                    yield from outcomes
            if lost:
                self.check()
            if broken:
                lost += flying.values()
                flying.clear()
                self.renew()
            for index, lot in (item for part in lost for item in part):
                strikes[index] += 1
                if solo:
                    yield Outcome(
                        index,
                        reason="its worker process died each time; too little memory is the usual "
                        "cause.",
                        kind="worker",
                    )
                elif strikes[index] >= SUSPECT:
                    alone.append((index, lot))
                else:
                    waiting.append([(index, lot)])


class Processes(ExecutorHands):
    """Our own processes, each with one BLAS thread; a dead one is replaced."""

    def __init__(self, workers: int) -> None:
        super().__init__(None, 2 * workers, MOST_IN_CHUNK)
        self.workers = workers
        self.ended = True
        self._before = {name: os.environ.get(name) for name in THREADS}
        hold_threads()  # children take them over as they start
        self._start()

    def _start(self) -> None:
        import multiprocessing

        # a fork of a process that holds threads may hang; a fresh one may not
        context = multiprocessing.get_context("spawn")
        self.executor = ProcessPoolExecutor(
            self.workers, mp_context=context, initializer=_begin_worker
        )

    def renew(self) -> None:
        self._end(at_once=True)
        self._start()

    def submit(self, function: Any, *arguments: Any) -> Future[Any]:
        # processes start here and keep Ctrl-C from then on to their parent
        with _without_interrupt():
            return super().submit(function, *arguments)

    def _end(self, at_once: bool) -> None:
        executor = self.executor
        if not isinstance(executor, ProcessPoolExecutor):
            return
        processes = list((getattr(executor, "_processes", None) or {}).values())
        executor.shutdown(wait=not at_once, cancel_futures=True)
        if at_once:  # their folders are whole or absent at any moment
            for process in processes:
                with contextlib.suppress(OSError, ValueError):
                    process.kill()
            for process in processes:
                with contextlib.suppress(OSError, ValueError, AssertionError):
                    process.join(5.0)

    def stop(self, at_once: bool = False) -> None:
        self._end(at_once)
        for name, value in self._before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


class Cluster(ExecutorHands):
    """A dask cluster (optional extra `cluster`): its workers must see inputs and folder too."""

    def __init__(self, address: str) -> None:
        try:
            from distributed import Client
        except ImportError:
            raise InputError(
                "--cluster needs the optional package distributed.",
                remedy="Install it: pip install 'mwdlink[cluster]'.",
            ) from None
        try:
            self.client = Client(address, timeout=20, set_as_default=False)
        except (OSError, ValueError, TimeoutError) as error:
            raise InputError(
                f"no cluster answers at {address} ({type(error).__name__}).",
                remedy="Check the scheduler's address, as in tcp://host:8786.",
            ) from None
        try:
            self._same_version()
            threads = sum(self.client.ncores().values())
            executor = self.client.get_executor(pure=False)
        except BaseException:
            self.client.close()
            raise
        super().__init__(executor, 2 * max(threads, 1), MOST_IN_CHUNK)

    def check(self) -> None:
        if self.client.status != "running":
            raise MwdlinkError("the cluster's scheduler no longer answers; run again to go on.")

    def _same_version(self) -> None:
        import mwdlink

        found = self.client.run(version_here)
        if not found:
            raise InputError("the cluster has no workers.", remedy="Start some, then run again.")
        for worker, version in found.items():
            if version != mwdlink.__version__:
                raise InputError(
                    f"the worker {worker} has mwdlink {version}, this is {mwdlink.__version__}.",
                    remedy="Install one version everywhere: results must not depend on the worker.",
                )

    def stop(self, at_once: bool = False) -> None:
        if at_once and self.executor is not None:
            self.executor.shutdown(wait=False)
        self.client.close()


def version_here() -> str:
    """The version of this package where the function runs."""
    import mwdlink

    return mwdlink.__version__


def hands_for(
    count: int,
    workers: int | None,
    executor: Executor | None,
    cluster: str | None,
    limit_seconds: float | None = None,
) -> Hands:
    """Who works on `count` inputs.

    Parameters
    ----------
    workers : int or None
        Processes; 1 works in this one; None takes the cores there are, one for four inputs at most.
    executor, cluster : optional
        Instead of processes.
    limit_seconds : float, optional
        [s] For each input.

    Raises
    ------
    InputError
        If the limit cannot be kept by who works.
    """
    if limit_seconds is not None:
        limit_can_be_kept(limit_seconds, executor is None and cluster is None)
    if executor is not None:
        return ExecutorHands(executor)
    if cluster is not None:
        return Cluster(cluster)
    if workers is None:
        workers = min(usable_cores(), max(1, count // 4))
    workers = min(workers, count)
    if limit_seconds is not None and workers <= 1 and not in_main_thread():
        workers = 2  # their work runs in main threads of their own
    hands = Hands() if workers <= 1 else Processes(workers)
    hands.limit_seconds = limit_seconds
    return hands


@contextlib.contextmanager
def _without_interrupt() -> Iterator[None]:
    """Ctrl-C waits until the block has ended; processes started in it never see one."""
    mask = getattr(signal, "pthread_sigmask", None)
    if mask is None or not in_main_thread():
        yield
        return
    before = mask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        mask(signal.SIG_SETMASK, before)


def _begin_worker() -> None:
    """Leave Ctrl-C to the parent, and do not outlive it."""
    with contextlib.suppress(ValueError):
        signal.signal(signal.SIGINT, signal.SIG_IGN)
    threading.Thread(target=_die_with_parent, daemon=True).start()


def _die_with_parent() -> None:
    import multiprocessing
    from multiprocessing.connection import wait as wait_for

    parent = multiprocessing.parent_process()
    if parent is not None:
        wait_for([parent.sentinel])
        os._exit(1)
