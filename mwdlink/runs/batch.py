"""Many inputs, one table: find them, work through them, survive what comes, keep what is done.

The work stands in `OUT.partial`: each input's folder appears there whole or not at all. When all is
done the folder takes its final name in one step. A run that was broken off leaves `OUT.partial`;
the same command takes over from it whatever was made from the same bytes with the same settings by
the same version.
"""

from __future__ import annotations

import contextlib
import json
import os
import shutil
import time
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import mwdlink
from mwdlink.chains.polymer import Polymer
from mwdlink.errors import InputError, MwdlinkError
from mwdlink.files.cards import read_polymer
from mwdlink.files.results import csv_text, json_text, put_in_place, system_words, why_not
from mwdlink.quantity import to_plain
from mwdlink.runs.batch_result import Batch
from mwdlink.runs.lock import NAME as LOCK
from mwdlink.runs.lock import RunLock
from mwdlink.runs.lots import Lot, find_lots, shown
from mwdlink.runs.one import MARK, DiskTrouble, Job, Outcome
from mwdlink.runs.workers import Hands, hands_for

# in the name of a folder that is being written (files/results.py)
HALF = ".mwdlink-new-"


@dataclass(frozen=True)
class Progress:
    """How far a batch is.

    Attributes
    ----------
    done, failed, reused, total : int
        Of the inputs; `done` counts all that are dealt with.
    seconds_left : float or None
        From the pace so far; None before the first.
    """

    done: int
    failed: int
    reused: int
    total: int
    seconds_left: float | None


def batch(
    inputs: Iterable[str | os.PathLike[str]],
    polymer: Polymer | str | None = None,
    *,
    out: str | os.PathLike[str] | None = None,
    replace: bool = False,
    workers: int | None = 1,
    executor: Executor | None = None,
    cluster: str | None = None,
    limit_seconds: float | None = None,
    anywhere: bool = False,
    against: str | os.PathLike[str] | None = None,
    temperature_C: float | None = None,
    reading: Mapping[str, Any] | None = None,
    labels: Mapping[str, str] | None = None,
    figures: bool = False,
    report: bool = False,
    write_members: bool = False,
    progress: Callable[[Progress], None] | None = None,
    note: Callable[[str], None] | None = None,
    command_line: str | None = None,
    **options: Any,
) -> Batch:
    """Invert many measured curves.

    Parameters
    ----------
    inputs : iterable of path
        Files, folders, patterns and manifests (see `find_lots`).
    polymer : Polymer or str, optional
        Where the manifest names none.
    out : path, optional
        Folder for summary.csv and one folder an input; without it nothing is written.
    replace : bool
        Let an earlier result give way; inputs it holds unchanged are taken over.
    workers : int or None
        Processes; 1 works in this one; None takes the cores there are.
    executor : concurrent.futures.Executor, optional
        Works instead; results do not depend on it.
    cluster : str, optional
        Address of a dask scheduler.
    limit_seconds : float, optional
        [s] An input that takes longer is given up and listed in `failed` (kind `time`). Only with
        processes of this machine, as a thread or a cluster's worker cannot be stopped safely.
    anywhere : bool
        May a manifest name files outside its folder?
    against : path, optional
        Sweep of a retained sample that each lot is compared with.
    temperature_C : float, optional
        [C] Where neither manifest nor table says.
    reading, labels : mapping, optional
        Options of the readers; labels for every result.
    figures, report, write_members : bool
        Also write pictures, page and members.csv for each input.
    progress, note : callable, optional
        Told how far it is, and what else is worth knowing.
    **options
        Arguments of `invert`: kernels, exponent, rouse, members, above, seed, noise, method,
        choose, smoothing.

    Returns
    -------
    Batch

    Raises
    ------
    InputError
        If no input is found, polymer or reference cannot be used, or a time limit cannot be kept.
        An input's own fault never raises: it is listed in `failed`.
    MwdlinkError
        If the folder cannot be written or another run holds it.
    """
    say = note or (lambda text: None)
    own = None if polymer is None else read_polymer(polymer)
    target = None if out is None else Path(os.path.realpath(out))
    leave_out = [] if target is None else [target, partial_of(target)]
    lots, notes = find_lots(inputs, anywhere=anywhere, leave_out=leave_out)
    lots, cards = _cards(lots, own)
    if own is None and not any(lot.polymer for lot in lots):
        raise InputError(
            "no polymer is given.", remedy="Give --polymer, or a column `polymer` in a manifest."
        )
    job = Job(
        None,
        (),
        cards,
        temperature_C,
        dict(options),
        dict(reading or {}),
        dict(labels or {}),
        figures,
        report,
        write_members,
    )
    with _work_folder(target, out, replace, say) as folder:
        if folder is not None and target is not None:
            job = _with(job, out=str(folder), earlier=(str(target),) if target.is_dir() else ())
        hands = hands_for(len(lots), workers, executor, cluster, limit_seconds)
        done = False
        try:
            if against is not None:
                path = os.fspath(against)
                reference, digest = hands.reference(job, path)
                job = _with(
                    job,
                    reference=reference,
                    reference_path=shown(path),
                    reference_sha256=digest,
                )
            outcomes, seconds = _all(hands, job, lots, progress, folder)
            done = True
        finally:
            hands.stop(at_once=not done)
            if folder is not None and not done and hands.ended:
                _sweep(folder)
        result = _result(job, lots, outcomes, seconds, own, notes)
        if folder is not None and target is not None:
            _finish(folder, target, result, job, command_line)
    return result


def partial_of(out: Path) -> Path:
    """Where the work towards a folder stands until it is done."""
    return out.with_name(f"{out.name}.partial")


def why_not_batch(out: str | os.PathLike[str], replace: bool) -> str | None:
    """Why a batch cannot write there, or None."""
    reason = why_not(out, replace)
    if reason:
        return reason
    partial = partial_of(Path(os.path.realpath(out)))
    if partial.exists() and not _is_work(partial):
        if not partial.is_dir() or set(os.listdir(partial)) - {LOCK}:
            return f"{partial} is in the way: it is no batch broken off. Move it."
    return None


def _is_work(partial: Path) -> bool:
    """Whether a folder is a batch broken off, be it in the very step of getting its name."""
    if (partial / MARK).exists():
        return True
    with contextlib.suppress(OSError, ValueError):
        found = json.loads((partial / "result.json").read_text(encoding="utf-8"))
        return isinstance(found, dict) and found.get("command") == "batch"
    return False


def _with(job: Job, **changes: Any) -> Job:
    return replace(job, **changes)


def _cards(lots: Sequence[Lot], own: Polymer | None) -> tuple[list[Lot], dict[str, Polymer]]:
    """Every card once; a lot whose card cannot be read keeps that as its reason."""
    cards = {} if own is None else {"": own}
    wrong: dict[str, str] = {}
    for name in dict.fromkeys(lot.polymer for lot in lots if lot.polymer and not lot.reason):
        try:
            cards[name] = read_polymer(name)
        except MwdlinkError as error:
            wrong[name] = shown(str(error))
    out = [
        replace(lot, reason=wrong[lot.polymer])
        if lot.polymer in wrong and lot.reason is None
        else lot
        for lot in lots
    ]
    return out, cards


# ------------------------------------------------------------------------------ the work


@contextlib.contextmanager
def _work_folder(
    target: Path | None, out: Any, replace: bool, say: Callable[[str], None]
) -> Iterator[Path | None]:
    if target is None:
        yield None
        return
    reason = why_not_batch(target, replace)
    if reason:
        raise MwdlinkError(reason.replace(str(target), str(out), 1))
    folder = partial_of(target)
    try:
        folder.mkdir(parents=True, exist_ok=True)
        lock = RunLock(folder, str(out))
    except OSError as error:
        raise MwdlinkError(f"{folder} cannot be written: {system_words(error)}.") from None
    try:
        # under the lock: the run that held it may have finished meanwhile
        reason = why_not_batch(target, replace)
        if reason:
            raise MwdlinkError(reason)
        if lock.stale:
            say(lock.stale)
        if (folder / MARK).exists():
            say(f"Going on with what an earlier run left in {folder.name}.")
        try:
            (folder / MARK).touch()
        except OSError as error:
            raise MwdlinkError(f"{folder} cannot be written: {system_words(error)}.") from None
        yield folder
    finally:
        lock.release()
        with contextlib.suppress(OSError):  # nothing was done: leave no empty folder behind
            if not set(os.listdir(folder)) - {MARK, LOCK}:
                shutil.rmtree(folder)


def _all(
    hands: Hands,
    job: Job,
    lots: Sequence[Lot],
    progress: Callable[[Progress], None] | None,
    folder: Path | None,
) -> tuple[list[Outcome], float]:
    """All outcomes in the order of the lots, and the seconds it took."""
    began = time.monotonic()
    found: list[Outcome | None] = [None] * len(lots)
    done = failed = reused = 0
    for outcome in hands.outcomes(job, list(enumerate(lots))):
        if outcome.kind == "disk":
            raise DiskTrouble(
                f"{outcome.reason} {done} of {len(lots)} inputs are finished and kept in "
                f"{folder}; the same command goes on from there."
            )
        found[outcome.index] = outcome
        done += 1
        failed += outcome.reason is not None
        reused += outcome.reused
        if progress is not None:
            fresh = done - reused
            pace = (time.monotonic() - began) / fresh if fresh else None
            left = None if pace is None else pace * (len(lots) - done)
            progress(Progress(done, failed, reused, len(lots), left))
    outcomes = [o for o in found if o is not None]
    if len(outcomes) < len(lots):
        raise MwdlinkError(f"{len(lots) - len(outcomes)} inputs got lost among the workers.")
    return outcomes, time.monotonic() - began


def _result(
    job: Job,
    lots: Sequence[Lot],
    outcomes: Sequence[Outcome],
    seconds: float,
    own: Polymer | None,
    notes: Iterable[Any],
) -> Batch:
    rows, failed, inputs = [], [], []
    for lot, o in zip(lots, outcomes, strict=True):
        if o.row is not None:
            rows.append(o.row)
            inputs.append({"path": lot.shown, "sha256": o.sha256})
        else:
            failed.append(
                {"path": lot.shown, "lot": lot.lot, "reason": o.reason or "", "kind": o.kind}
            )
    fresh = sum(not o.reused for o in outcomes if o.reason is None)
    against = None
    if job.reference is not None:
        against = {"path": job.reference_path, "sha256": job.reference_sha256}
    return Batch.make(
        rows,
        failed,
        inputs=tuple(inputs),
        reused=sum(o.reused for o in outcomes),
        throughput_per_s=fresh / seconds if fresh and seconds > 0 else None,
        settings={k: to_plain(v) for k, v in job.options.items() if v not in (None, ())},
        polymer=None if own is None else own.to_dict(),
        against=against,
        warnings=tuple(notes),
    )


# --------------------------------------------------------------------------- in its place


def record_of(result: Batch, labels: Mapping[str, str]) -> dict[str, Any]:
    """Content of result.json."""
    options = result.settings
    record: dict[str, Any] = {
        "schema": "mwdlink/batch/1",
        "version": mwdlink.__version__,
        "command": "batch",
        "inputs": [dict(i) for i in result.inputs],
        "labels": dict(labels),
        "polymer": result.polymer,
        "model": {
            "kernels": list(options.get("kernels") or []) or None,
            "exponent": options.get("exponent"),
            "rouse": options.get("rouse", True),
        },
        "seed": options.get("seed", 0),
    }
    return to_plain(record) | result.to_dict()


def _finish(folder: Path, target: Path, result: Batch, job: Job, command_line: str | None) -> None:
    """Write what belongs to the whole, check that nothing is missing, give it its name."""
    from mwdlink.figures.gather import pictures_of
    from mwdlink.report import render

    record = record_of(result, job.labels)
    tables = result.tables()
    pictures = pictures_of("batch", record, tables)
    provenance = f"mwdlink {mwdlink.__version__} batch of {len(result.rows)} inputs"
    try:
        files = {name: csv_text(table, provenance).encode() for name, table in tables.items()}
        for name, picture in pictures.items():
            files[f"figures/{name}.svg"] = picture.svg()
            files[f"figures/{name}.png"] = picture.png()
            files[f"figures/{name}.csv"] = picture.csv()
        page = render(result, record, pictures, command_line=command_line)
        files["report.html"] = page.encode()
        files["result.json"] = json_text(record).encode()
        kept = {str(row["folder"]) for row in result.rows}
        missing = [n for n in sorted(kept) if not (folder / n / "result.json").is_file()]
        if missing:
            raise MwdlinkError(
                f"{len(missing)} finished folders have vanished from {folder}, the first is "
                f"{missing[0]}. Run again to make them anew."
            )
        _clear(folder, kept)
        for name, data in files.items():
            path = folder / name
            path.parent.mkdir(exist_ok=True)
            _write_through(path, data)
        for name in (LOCK, MARK):
            with contextlib.suppress(FileNotFoundError):
                os.unlink(folder / name)
        put_in_place(folder, target, replace=True)
    except OSError as error:
        with contextlib.suppress(OSError):
            (folder / MARK).touch()
        raise MwdlinkError(
            f"the result could not be put in place: {system_words(error)}. What is finished is "
            f"kept in {folder}; the same command goes on from there."
        ) from error
    # where there was an earlier result, it now stands under the work folder's name
    if folder.is_dir():
        shutil.rmtree(folder, ignore_errors=True)


def _sweep(folder: Path) -> None:
    """Take away what workers that were stopped in the middle had half written."""
    with contextlib.suppress(OSError):
        for name in os.listdir(folder):
            if name.startswith(".") and HALF in name:
                shutil.rmtree(folder / name, ignore_errors=True)


def _clear(folder: Path, kept: set[str]) -> None:
    """Take away what killed runs and inputs no longer asked for have left."""
    for name in os.listdir(folder):
        if name in kept or name in (LOCK, MARK):
            continue
        path = folder / name
        if path.is_dir() and not path.is_symlink():
            shutil.rmtree(path)
        else:
            path.unlink()


def _write_through(path: Path, data: bytes) -> None:
    with open(path, "wb") as stream:
        stream.write(data)
        stream.flush()
        os.fsync(stream.fileno())


__all__ = ["Batch", "InputError", "Progress", "batch", "partial_of", "why_not_batch"]
