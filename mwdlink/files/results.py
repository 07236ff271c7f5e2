"""A result's folder on disk: written beside, then put in place, so that it is old or new.

The new folder is made complete and flushed in a hidden sibling. Where the system can exchange
two names in one step (Linux), that step is the only moment of change; elsewhere the old folder
is moved aside first, and a run that finds it aside puts it back. The sibling is locked while its
writer lives, so that leftovers of a killed writer can be told from the work of another one.
"""

from __future__ import annotations

import contextlib
import errno
import hashlib
import json
import os
import re
import shutil
import sys
import tempfile
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from mwdlink.errors import MwdlinkError

_NEW, _OLD = "mwdlink-new", "mwdlink-old"
_OURS = {"result.json", "report.html", "index.html", "figures"}
_OUR_SUFFIXES = {".csv", ".toml"}

# a spreadsheet takes a cell that begins so for a formula and would run it
_FORMULA = ("=", "+", "-", "@", "\t", "\r")
_INNER_FORMULA = re.compile(r"([;\t]\s*)([=+\-@])")

# types of numbers whose shortest text Python and pandas agree on
_PLAIN = {"float64", "int64", "int32", "uint64", "uint32"}

# -------------------------------------------------------------------------------- contents


def sha256_of(path: str | os.PathLike[str]) -> str:
    """SHA-256 of a file's bytes, in hex."""
    with open(path, "rb") as f:
        return hashlib.file_digest(f, "sha256").hexdigest()


def json_text(record: Mapping[str, Any]) -> str:
    """Text of result.json: keys in the order given, numbers finite or null.

    Raises
    ------
    ValueError
        If a number is not finite: a result must say null where it has none.
    """
    return json.dumps(record, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def csv_text(table: Any, provenance: str = "") -> str:
    """A table as CSV: a `#` line on where it is from, a header with units, numbers in full.

    Parameters
    ----------
    table : pandas.DataFrame
        Units in the column names.
    provenance : str
        One line; what could end the line or a cell is taken out.
    """
    safe = table.copy(deep=False)
    safe.columns = [harmless(str(c)) for c in table.columns]
    for position in range(safe.shape[1]):
        column = safe.iloc[:, position]
        if column.dtype.kind not in "fiub":
            cells = [harmless(v) if isinstance(v, str) else v for v in column]
            safe.isetitem(position, cells)
    text = _plain_text(safe) or safe.to_csv(index=False, lineterminator="\n")
    note = re.sub(r"[\x00-\x1f\x7f,;\"']+", "_", provenance).strip()
    return f"# {note}\n{text}" if note else text


def _plain_text(table: Any) -> str | None:
    """The CSV of a table of numbers alone, as pandas writes it but quicker; else None."""
    kinds = {dtype.kind for dtype in table.dtypes}
    names = [str(c) for c in table.columns]
    # a lone empty cell would be an empty line
    if len(names) < 2 or not kinds <= {"f", "i", "u"} or any(set(n) & set(',"\n\r') for n in names):
        return None
    if any(str(d) not in _PLAIN for d in table.dtypes):
        return None
    columns = [
        ["" if x != x else repr(x) for x in table.iloc[:, k].tolist()] for k in range(len(names))
    ]
    lines = [",".join(names), *(",".join(row) for row in zip(*columns, strict=True))]
    return "\n".join(lines) + "\n"


def harmless(text: str) -> str:
    """Text that a spreadsheet shows instead of running it; numbers stay as they are.

    One that splits at semicolons or tabs would run what stands behind them as well.
    """
    text = _INNER_FORMULA.sub(r"\1'\2", text)
    if not text.startswith(_FORMULA):
        return text
    try:
        float(text)
    except ValueError:
        return "'" + text
    return text


# ---------------------------------------------------------------------------------- folder


def why_not(
    out_dir: str | os.PathLike[str], replace: bool = False, settle: bool = True
) -> str | None:
    """Why a result cannot be written there, or None: to be asked before anything is computed.

    Parameters
    ----------
    out_dir : path
    replace : bool
        May a folder that an earlier run wrote give way? Folders that hold anything else never do.
    settle : bool
        First undo what a killed run left.
    """
    out = Path(os.path.realpath(out_dir))
    if settle:
        with contextlib.suppress(OSError):
            _settle(out)
    parent = next((p for p in out.parents if p.exists()), out.parent)
    if not parent.is_dir():
        return f"{out_dir} cannot be made: {parent} is not a folder."
    if not os.access(parent, os.W_OK | os.X_OK):
        return f"{out_dir} cannot be written: there is no right to write in {parent}."
    if not out.exists():
        return None
    if not out.is_dir():
        return f"{out_dir} is a file, not a folder."
    if out == Path.cwd() or out in Path.cwd().parents:
        return f"{out_dir} is the folder you are in or above it; name one inside it."
    names = sorted(os.listdir(out))
    if not names:
        return None
    if not replace:
        return f"{out_dir} is not empty. Choose another folder, or add --replace."
    foreign = [n for n in names if not _is_ours(out / n)]
    if "result.json" not in names and not any((out / n / "result.json").is_file() for n in names):
        return f"{out_dir} holds no earlier result, so --replace leaves it alone."
    if foreign:
        return f"{out_dir} also holds {foreign[0]!r}, which --replace would destroy. Move it first."
    return None


def _is_ours(path: Path) -> bool:
    if path.name in _OURS or path.suffix in _OUR_SUFFIXES:
        return True
    return path.is_dir() and (path / "result.json").is_file()


def write_result(
    out_dir: str | os.PathLike[str],
    record: Mapping[str, Any],
    tables: Mapping[str, Any] | None = None,
    figures: Mapping[str, bytes] | None = None,
    report_html: str | None = None,
    replace: bool = False,
    *,
    provenance: str = "",
    settle: bool = True,
) -> Path:
    """Write a result's folder whole, or leave what was there as it was.

    Parameters
    ----------
    out_dir : path
        The folder; missing parents are made.
    record : mapping
        Content of result.json, JSON types only.
    tables : mapping of file name to pandas.DataFrame or str, optional
        A frame becomes CSV; text (a card, say) is written as it is.
    figures : mapping of file name to bytes, optional
        Go into the subfolder `figures`.
    report_html : str, optional
    replace : bool
        Let a folder with an earlier result give way.
    provenance : str
        The `#` line of each CSV.
    settle : bool
        First undo what a killed run left. That lists the whole folder around, which costs time
        where thousands are written side by side; who does so clears up once, at the end.

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    MwdlinkError
        If the folder may not be replaced or cannot be written; the old content is intact.
    """
    reason = why_not(out_dir, replace, settle)
    if reason:
        raise MwdlinkError(reason)
    contents: dict[str, bytes] = {"result.json": json_text(record).encode()}
    for name, table in (tables or {}).items():
        text = table if isinstance(table, str) else csv_text(table, provenance)
        contents[name] = text.encode()
    for name, picture in (figures or {}).items():
        contents[f"figures/{name}"] = picture
    if report_html is not None:
        contents["report.html"] = report_html.encode()
    with folder_beside(out_dir, replace, settle) as new:
        for name, data in contents.items():
            path = new / name
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_bytes(data)
    return Path(out_dir)


@contextlib.contextmanager
def folder_beside(
    out_dir: str | os.PathLike[str], replace: bool = False, settle: bool = True
) -> Iterator[Path]:
    """A hidden folder to fill; it becomes `out_dir` when the block ends well, else it vanishes.

    Raises
    ------
    MwdlinkError
        If the system refuses (disk full, no right to write): `out_dir` is as it was.
    """
    out = Path(os.path.realpath(out_dir))
    new: Path | None = None
    try:
        out.parent.mkdir(parents=True, exist_ok=True)
        if settle:
            _settle(out)
        new = Path(tempfile.mkdtemp(prefix=f".{out.name}.{_NEW}-", dir=out.parent))
        with _locked(new):
            yield new
            _flush_tree(new)
            os.chmod(new, 0o777 & ~_umask())
            put_in_place(new, out, replace)
    except OSError as error:
        raise MwdlinkError(
            f"{out_dir} could not be written: {system_words(error)}. Nothing there was changed."
        ) from error
    finally:
        if new is not None:
            shutil.rmtree(new, ignore_errors=True)


def system_words(error: OSError) -> str:
    """What the system refused, as people say it."""
    return {
        errno.ENOSPC: "the disk is full",
        errno.EDQUOT: "your share of the disk is used up",
        errno.EROFS: "the disk is read-only",
        errno.EACCES: "there is no right to write there",
        errno.EPERM: "there is no right to write there",
        errno.ENAMETOOLONG: "the name is too long",
    }.get(error.errno or 0, error.strerror or str(error))


def put_in_place(new: Path, out: Path, replace: bool) -> None:
    try:
        os.rename(new, out)  # takes the place of nothing, or of an empty folder
    except OSError as error:
        occupied = error.errno in (errno.ENOTEMPTY, errno.EEXIST, errno.EACCES)
        if not (replace and occupied and out.is_dir()):
            raise
        if not _exchange(new, out):
            aside = out.with_name(f".{out.name}.{_OLD}")
            os.rename(out, aside)
            try:
                os.rename(new, out)
            except BaseException:
                if not out.exists():
                    os.rename(aside, out)
                raise
            shutil.rmtree(aside, ignore_errors=True)
    _flush_folder(out.parent)


def _exchange(a: Path, b: Path) -> bool:
    """Exchange two names in one step; False where the system cannot."""
    if not sys.platform.startswith("linux"):
        return False
    import ctypes

    try:
        rename = ctypes.CDLL(None, use_errno=True).renameat2
    except (OSError, AttributeError):
        return False
    at_cwd, exchange = -100, 2
    return rename(at_cwd, os.fsencode(a), at_cwd, os.fsencode(b), exchange) == 0


def _settle(out: Path) -> None:
    """Undo what a killed run left: put an old folder back, clear half-written ones away."""
    aside = out.with_name(f".{out.name}.{_OLD}")
    if aside.is_dir():
        if out.exists():
            shutil.rmtree(aside, ignore_errors=True)
        else:
            os.rename(aside, out)
    if not out.parent.is_dir():
        return
    prefix = f".{out.name}.{_NEW}-"
    for name in os.listdir(out.parent):
        if name.startswith(prefix):
            left = out.parent / name
            with contextlib.suppress(OSError), _locked(left):
                shutil.rmtree(left, ignore_errors=True)


@contextlib.contextmanager
def _locked(folder: Path) -> Iterator[None]:
    """Hold the folder's lock, which the system drops when this process dies.

    Raises BlockingIOError if a living process holds it.
    """
    try:
        import fcntl
    except ImportError:  # no such locks: one writer a folder at a time is the user's to keep
        yield
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        yield
    finally:
        os.close(handle)


def _flush_tree(folder: Path) -> None:
    for root, _, files in os.walk(folder):
        for name in files:
            handle = os.open(os.path.join(root, name), os.O_RDONLY)
            try:
                os.fsync(handle)
            finally:
                os.close(handle)
        _flush_folder(Path(root))


def _flush_folder(folder: Path) -> None:
    # some file systems refuse to flush a folder; the names are then safe a little later
    with contextlib.suppress(OSError):
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


def _umask() -> int:
    mask = os.umask(0o077)
    os.umask(mask)
    return mask
