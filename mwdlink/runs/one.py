"""One input of a batch, from its file to its folder and its row: what a worker does.

Everything here is a module-level function of picklable arguments, so that threads, processes and
clusters can run it. An input's fault is its own: it comes back as a reason.
"""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import stat
import time
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import mwdlink
from mwdlink.chains.polymer import Polymer
from mwdlink.decisions.lots import Reference, compare, reference_of
from mwdlink.errors import InputError, MwdlinkError, NotConverged
from mwdlink.files import tables
from mwdlink.files.decode import MAX_BYTES
from mwdlink.files.results import folder_beside, sha256_of, write_result
from mwdlink.files.source import open_source
from mwdlink.inversion.invert import invert
from mwdlink.quantity import to_plain
from mwdlink.runs.lots import Lot, shown

_READERS: dict[str, Callable[..., Any]] = {
    "sweep": tables.read_sweep,
    "relaxation curve": tables.read_relaxation,
    "flow curve": tables.read_flow_curve,
}
# how often and how long after a fault of the disk is writing tried again [s]
WAITS = (0.3, 1.0, 3.0)
# stands in a work folder as long as it is one
MARK = ".mwdlink-batch"


@dataclass(frozen=True)
class Job:
    """What is common to all inputs of a batch.

    Attributes
    ----------
    out : str or None
        Work folder; None writes nothing.
    earlier : tuple of str
        Folders of earlier runs whose finished inputs may be taken over.
    polymers : mapping of str to Polymer
        By the name or path a lot gives; "" is the batch's own.
    temperature_C : float or None
    options : mapping
        Arguments of `invert`.
    reading : mapping
        Options of the readers.
    labels : mapping
    figures, report, members : bool
        What to write beside result.json and the tables.
    reference : Reference or None
    reference_path, reference_sha256 : str or None
    """

    out: str | None
    earlier: tuple[str, ...]
    polymers: Mapping[str, Polymer]
    temperature_C: float | None
    options: Mapping[str, Any]
    reading: Mapping[str, Any]
    labels: Mapping[str, str] = field(default_factory=dict)
    figures: bool = False
    report: bool = False
    members: bool = False
    reference: Reference | None = None
    reference_path: str | None = None
    reference_sha256: str | None = None


@dataclass(frozen=True)
class Outcome:
    """What became of one input.

    Attributes
    ----------
    index : int
        Its place in the batch.
    row : mapping or None
        Its row of summary.csv.
    sha256 : str or None
    reason, kind : str or None
        Why there is no row: `input`, `model`, `not converged`, `unexpected`, `worker`, `time`; or
        `disk`, which is no fault of the input's.
    reused : bool
        Taken over from an earlier run.
    seconds : float
    """

    index: int
    row: Mapping[str, Any] | None = None
    sha256: str | None = None
    reason: str | None = None
    kind: str | None = None
    reused: bool = False
    seconds: float = 0.0


class DiskTrouble(MwdlinkError):
    """A result could not be written: the run stops, as every other would fail likewise."""


def run_chunk(job: Job, chunk: Sequence[tuple[int, Lot]]) -> list[Outcome]:
    """Work on some inputs, one after the other.

    A disk takes its time to say that a folder is safe: that is waited for in a thread of its own
    while the next input is worked on.
    """
    if job.out is None or len(chunk) == 1:
        return [run_one(job, index, lot) for index, lot in chunk]
    with ThreadPoolExecutor(1) as pen:
        begun = [_outcome(job, index, lot, pen.submit) for index, lot in chunk]
    return [o.result() if isinstance(o, Future) else o for o in begun]


def run_one(job: Job, index: int, lot: Lot) -> Outcome:
    """Work on one input; never raises for a fault of the input."""
    return _outcome(job, index, lot, lambda write: write())


def _outcome(job: Job, index: int, lot: Lot, hand_over: Callable[..., Any]) -> Any:
    """The outcome of an input, or what `hand_over` makes of the function that writes it."""
    began = time.perf_counter()

    def found(row: Mapping[str, Any], digest: str, reused: bool = False) -> Outcome:
        seconds = time.perf_counter() - began
        return Outcome(index, row, digest, reused=reused, seconds=seconds)

    def work() -> Any:
        if lot.reason is not None:
            raise InputError(lot.reason, path=lot.path)
        known = _finished(job, lot)
        if known is not None:
            return found(*known, reused=True)
        row, digest, write = _work(job, lot)
        if write is None:
            return found(row, digest)

        def finish() -> Outcome:
            write()
            return found(row, digest)

        return hand_over(lambda: _guarded(index, finish))

    return _guarded(index, work)


def _guarded(index: int, work: Callable[[], Any]) -> Any:
    """What comes of some work on an input; its faults come back as reasons."""
    try:
        return work()
    except DiskTrouble as error:
        return Outcome(index, reason=str(error), kind="disk")
    except MwdlinkError as error:
        kind = (
            "not converged"
            if isinstance(error, NotConverged)
            else "input" if isinstance(error, InputError) else "model"
        )  # fmt: skip
        return Outcome(index, reason=_reason(error), kind=kind)
    except MemoryError:
        return Outcome(index, reason="it needs more memory than there is.", kind="unexpected")
    except Exception as error:
        # whatever it is, the other inputs must not suffer from it
        first = (str(error).strip().splitlines() or ["no message"])[0]
        reason = f"unexpected fault ({type(error).__name__}: {first}); please report it."
        return Outcome(index, reason=shown(reason), kind="unexpected")


def _reason(error: MwdlinkError) -> str:
    """The error's words without the path, which has its own column."""
    if not isinstance(error, InputError):
        return shown(str(error))
    bare = InputError(error.message, row=error.row, column=error.column, remedy=error.remedy)
    return shown(str(bare))


def polymer_of(job: Job, lot: Lot) -> Polymer:
    """The card an input is read with."""
    card = job.polymers.get(lot.polymer or "")
    if card is None:
        raise InputError(
            "no polymer is given." if not lot.polymer else f"no polymer {lot.polymer!r}.",
            remedy="Name it in the manifest, or for all with --polymer.",
        )
    return card


def fingerprint(job: Job, lot: Lot) -> str:
    """Of all that an input's folder depends on beside the file itself."""
    options = {k: v for k, v in job.options.items() if k != "executor"}
    parts = {
        "version": mwdlink.__version__,
        "path": lot.shown,
        "lot": lot.lot,
        "polymer": polymer_of(job, lot).to_dict(),
        "temperature_C": _temperature(job, lot),
        "options": options,
        "reading": dict(job.reading),
        "labels": dict(job.labels),
        "writes": [job.figures, job.report, job.members],
        "reference": job.reference_sha256,
    }
    text = json.dumps(to_plain(parts), sort_keys=True, default=sorted)
    return hashlib.sha256(text.encode("utf-8", "surrogatepass")).hexdigest()


def _temperature(job: Job, lot: Lot) -> float | None:
    return job.temperature_C if lot.temperature_C is None else lot.temperature_C


# --------------------------------------------------------------------------------- resuming


def _finished(job: Job, lot: Lot) -> tuple[dict[str, Any], str] | None:
    """Row and digest of an input that an earlier run finished with the same settings."""
    if job.out is None:
        return None
    digest = None
    for folder in (job.out, *job.earlier):
        home = Path(folder) / lot.name
        record = _record(home)
        if record is None or (record.get("batch") or {}).get("fingerprint") != fingerprint(
            job, lot
        ):
            continue
        if digest is None:
            _regular(lot.path)
            digest = sha256_of(lot.path)
        if [i.get("sha256") for i in record["inputs"]][:1] != [digest]:
            continue
        if folder != job.out:
            _take_over(home, Path(job.out) / lot.name)
        return row_of(record, lot), digest
    return None


def _record(home: Path) -> dict[str, Any] | None:
    try:
        found = json.loads((home / "result.json").read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None
    good = isinstance(found, dict) and isinstance(found.get("inputs"), list)
    if not good or not isinstance(found.get("averages"), dict):
        return None
    return found if all((home / n).is_file() for n in ("distribution.csv", "fit.csv")) else None


def _take_over(home: Path, there: Path) -> None:
    """Copy a finished folder into the work folder, by links where the disk has them."""
    with folder_beside(there, replace=True, settle=False) as new:
        shutil.copytree(home, new, copy_function=_link, dirs_exist_ok=True)


def _link(source: str, target: str) -> str:
    try:
        os.link(source, target)
    except OSError:
        shutil.copy2(source, target)
    return target


# ---------------------------------------------------------------------------------- working


def read_measured(path: str, reading: Mapping[str, Any], temperature_C: float | None) -> Any:
    """The measured curve of a file and the digest of its bytes.

    Raises
    ------
    InputError
        If the file cannot be used or is no measurement.
    """
    _regular(path)
    look = {k: reading[k] for k in ("columns", "omit", "sheet") if k in reading}
    source = open_source(path, **look)
    kind = tables.find_kind(source, **look)
    if kind not in _READERS:
        raise InputError(
            f"the table is a {kind}.", path=path, remedy="A batch takes measured curves."
        )
    return _READERS[kind](source, temperature_C=temperature_C, **reading), source.sha256


def _regular(path: str) -> None:
    """Refuse what is no ordinary file (a pipe would be waited for without end) or is too big."""
    try:
        status = os.stat(path)
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        words = "there is no such file." if isinstance(error, FileNotFoundError) else f"{reason}."
        raise InputError(words, path=path) from None
    if stat.S_ISDIR(status.st_mode):
        raise InputError("this is a folder.", path=path)
    if not stat.S_ISREG(status.st_mode):
        raise InputError("this is no ordinary file.", path=path)
    if status.st_size > MAX_BYTES:
        raise InputError(
            f"the file has {status.st_size / 1e6:.0f} MB, more than the {MAX_BYTES / 1e6:.0f} MB "
            "a table may have.",
            path=path,
        )


def _work(job: Job, lot: Lot) -> tuple[dict[str, Any], str, Callable[[], None] | None]:
    """Row and digest of an input, and what writes its folder."""
    card = polymer_of(job, lot)
    temperature = _temperature(job, lot)
    curve, digest = read_measured(lot.path, job.reading, temperature)
    result = invert(curve, card, temperature_C=temperature, **job.options)
    own = result.to_dict()
    record: dict[str, Any] = {
        "schema": "mwdlink/invert/1",
        "version": mwdlink.__version__,
        "command": "invert",
        "inputs": [{"path": lot.shown, "sha256": digest}],
        "labels": {**job.labels, "lot": lot.lot},
    }
    record |= own
    record["temperature_C"] = curve.temperature_C
    if job.reference is not None:
        record["against"] = {
            "reference": {"path": job.reference_path, "sha256": job.reference_sha256},
            **to_plain(compare(curve, result, job.reference)),
        }
    record["batch"] = {"fingerprint": fingerprint(job, lot)}
    write = None if job.out is None else _writer(job, lot, result, record)
    # through the text that is written, so that a row read back later is the same to the last digit
    return row_of(json.loads(json.dumps(record)), lot), digest, write


def _writer(job: Job, lot: Lot, result: Any, record: Mapping[str, Any]) -> Callable[[], None]:
    """Everything an input's folder holds, drawn and ready, in a function that writes it."""
    made = result.tables()
    if not job.members:
        made.pop("members.csv", None)
    pictures: dict[str, Any] = {}
    files: dict[str, bytes] = {}
    page = None
    if job.figures or job.report:
        from mwdlink.figures.gather import pictures_of

        pictures = pictures_of("invert", record, made)
    if job.figures:
        for name, picture in pictures.items():
            files |= {f"{name}.svg": picture.svg(), f"{name}.png": picture.png()}
            files[f"{name}.csv"] = picture.csv()
    if job.report:
        from mwdlink.report import render

        page = render(result, record, pictures)
    source = f"{os.path.basename(lot.shown)} sha256 {record['inputs'][0]['sha256'][:16]}"
    provenance = f"mwdlink {record['version']} batch from {source}"

    def write() -> None:
        assert job.out is not None
        for wait in (*WAITS, None):
            try:
                if not (Path(job.out) / MARK).is_file():  # writing would make it anew, empty
                    raise MwdlinkError(f"the folder {job.out} has vanished.")
                there = Path(job.out) / lot.name
                # what killed runs left is cleared away once, when all is done
                write_result(
                    there, record, made, files, page, True, provenance=provenance, settle=False
                )
                return
            except MwdlinkError as error:
                # a share that was away for a moment is worth waiting for
                if wait is None:
                    raise DiskTrouble(str(error)) from None
                time.sleep(wait)

    return write


def make_reference(job: Job, path: str) -> tuple[Reference, str]:
    """Invert the retained sample; its noise draws are its own, so that they do not cancel."""
    card = job.polymers.get("")
    if card is None:
        raise InputError("the reference needs a polymer.", path=path, remedy="Give --polymer.")
    curve, digest = read_measured(path, job.reading, job.temperature_C)
    options = {**job.options, "seed": int(job.options.get("seed", 0)) + 1}
    return reference_of(
        curve, invert(curve, card, temperature_C=job.temperature_C, **options)
    ), digest


# ---------------------------------------------------------------------------------- the row

_AVERAGES = (
    ("Mw", "Mw_g_per_mol", "g/mol"),
    ("Mw within window", "Mw_within_window_g_per_mol", "g/mol"),
    ("Mn", "Mn_g_per_mol", "g/mol"),
    ("Mz", "Mz_g_per_mol", "g/mol"),
    ("dispersity", "dispersity", "-"),
)


def row_of(record: Mapping[str, Any], lot: Lot) -> dict[str, Any]:
    """An input's row of summary.csv, from its result.json alone."""
    row: dict[str, Any] = {
        "lot": lot.lot,
        "path": lot.shown,
        "folder": lot.name,
        "polymer": (record.get("polymer") or {}).get("name"),
        "temperature [C]": record.get("temperature_C"),
    }
    averages = record["averages"]
    for name, key, unit in _AVERAGES:
        _put(row, name, unit, averages.get(key))
    window = record["window"]
    row["M window low [g/mol]"] = window["M_low_g_per_mol"]
    row["M window high [g/mol]"] = window["M_high_g_per_mol"]
    for side in ("above", "below"):
        _put(row, f"weight {side} window", "-", record["outside_window"][side]["fraction"])
    for entry in record.get("above") or []:
        _put(row, f"weight above {entry['M_g_per_mol']:g} g/mol", "-", entry["fraction"])
    against = record.get("against")
    if against:
        _put(row, "G ratio", "-", against["G_ratio"])
        _put(row, "Mw ratio", "-", against["Mw_ratio"])
        row["chi2 per point against reference [-]"] = against["chi2_per_point"]
        row["differs from reference"] = "yes" if against["differs"] else "no"
    row["chi2 per point [-]"] = record["fit"]["chi2_per_point"]
    row["noise [-]"] = record["noise"]["relative"]
    row["kernels"] = " ".join(k["kernel"] for k in record["kernels"] if k["admissible"])
    row["warnings"] = " ".join(dict.fromkeys(w["code"] for w in record.get("warnings") or []))
    row["sha256"] = record["inputs"][0]["sha256"]
    return row


def _put(row: dict[str, Any], name: str, unit: str, u: Mapping[str, Any] | None) -> None:
    u = u or {}
    row[f"{name} [{unit}]"] = u.get("value")
    row[f"{name} low [{unit}]"] = u.get("low")
    row[f"{name} high [{unit}]"] = u.get("high")
    row[f"{name} status"] = u.get("status")
