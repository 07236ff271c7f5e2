"""A limit to the time an input may take, kept by the system's clock."""

from __future__ import annotations

import signal
import threading
from collections.abc import Sequence
from typing import Any

from mwdlink.errors import InputError
from mwdlink.runs.lots import Lot
from mwdlink.runs.one import Job, Outcome, run_one


class _TooLong(BaseException):
    """The time of an input is over. No Exception: what guards against faults must not hold it."""


def run_within(job: Job, chunk: Sequence[tuple[int, Lot]], limit_seconds: float) -> list[Outcome]:
    """Work on some inputs, none of them for longer than the limit; in a main thread only.

    The system's clock interrupts the work, which unwinds as on Ctrl-C: an input's folder is whole
    or absent. A call into compiled code ends first; those here are short.

    Parameters
    ----------
    job : Job
    chunk : sequence of (int, Lot)
    limit_seconds : float
        [s] For each input.

    Returns
    -------
    list of Outcome
    """
    import pandas  # noqa: F401  what loads late must not be stopped half loaded

    return [_run_within(job, index, lot, limit_seconds) for index, lot in chunk]


def _run_within(job: Job, index: int, lot: Lot, limit_seconds: float) -> Outcome:
    armed = True

    def stop(number: int, frame: Any) -> None:
        if armed:
            raise _TooLong

    before = signal.signal(signal.SIGALRM, stop)
    try:
        # again every second: a first interruption may fall where Python drops exceptions
        signal.setitimer(signal.ITIMER_REAL, limit_seconds, 1.0)
        outcome = run_one(job, index, lot)
        armed = False
    except _TooLong:
        armed = False
        outcome = Outcome(
            index,
            reason=f"it took longer than the {limit_seconds:g} s allowed (--limit-seconds).",
            kind="time",
            seconds=limit_seconds,
        )
    finally:
        armed = False
        signal.setitimer(signal.ITIMER_REAL, 0.0)
        signal.signal(signal.SIGALRM, before)
    return outcome


def in_main_thread() -> bool:
    """Whether the system's signals are dealt with in this thread."""
    return threading.current_thread() is threading.main_thread()


def limit_can_be_kept(limit_seconds: float, own_processes: bool) -> None:
    """Raise if the limit is none, or if nobody could keep it.

    Raises
    ------
    InputError
    """
    if not 0 < limit_seconds < float("inf"):
        raise InputError(
            f"a time limit of {limit_seconds} s cannot be kept.", remedy="Give seconds above 0."
        )
    if not own_processes:
        raise InputError(
            "a time limit for each input needs processes of this machine.",
            remedy="Leave the cluster or executor out, or the limit.",
        )
    if not hasattr(signal, "setitimer"):
        raise InputError("this system has no clock that can interrupt an input's work.")
