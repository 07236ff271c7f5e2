"""One run a folder: a lock that names its holder and that a dead holder cannot keep."""

from __future__ import annotations

import contextlib
import errno
import json
import os
import platform
import time
from pathlib import Path
from typing import Any

from mwdlink.errors import MwdlinkError

NAME = ".lock"


class RunLock:
    """The lock of a work folder, held while the object is open.

    The system's own lock on the file is what counts: it falls with the process, whatever killed
    it. Where a file system has no such locks, the holder's process number decides.

    Parameters
    ----------
    folder : Path
        Exists.
    what : str
        What the folder is for, in the refusal.

    Raises
    ------
    MwdlinkError
        If another run holds it.
    """

    def __init__(self, folder: Path, what: str) -> None:
        self.path = folder / NAME
        self.stale: str | None = None
        for _ in range(20):
            handle = os.open(self.path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
            holder = _read(handle)
            try:
                self._take(handle, holder, what)
            except BaseException:
                os.close(handle)
                raise
            if self._is_ours(handle):
                break
            os.close(handle)  # the holder finished and removed the file in between: try anew
        else:
            raise MwdlinkError(f"{what}: its lock {self.path} could not be taken.")
        if holder:
            self.stale = (
                f"A run that died (process {holder.get('process')} on {holder.get('host')}) had "
                "left its lock; what it finished is kept."
            )
        own = {"process": os.getpid(), "host": platform.node(), "since": _now()}
        os.ftruncate(handle, 0)
        os.pwrite(handle, json.dumps(own).encode(), 0)
        self.handle = handle

    def _take(self, handle: int, holder: dict[str, Any], what: str) -> None:
        refusal = MwdlinkError(
            f"another run (process {holder.get('process', '?')} on {holder.get('host', '?')}, "
            f"since {holder.get('since', '?')}) is writing {what}. Wait for it, or choose another "
            "--out."
        )
        try:
            import fcntl

            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
            return
        except ImportError:
            pass
        except OSError as error:
            if error.errno in (errno.EWOULDBLOCK, errno.EACCES):
                raise refusal from None
        if not holder:
            return
        if holder.get("host") != platform.node():
            raise MwdlinkError(f"{refusal} If that run is dead, remove {self.path}.")
        if _alive(int(holder.get("process") or 0)):
            raise refusal

    def _is_ours(self, handle: int) -> bool:
        try:
            there, here = os.stat(self.path), os.fstat(handle)
        except OSError:
            return False
        return (there.st_dev, there.st_ino) == (here.st_dev, here.st_ino)

    def release(self) -> None:
        """Remove the lock; the folder may then be taken by the next run."""
        with contextlib.suppress(OSError):
            if self._is_ours(self.handle):
                os.unlink(self.path)
        with contextlib.suppress(OSError):
            os.close(self.handle)


def _read(handle: int) -> dict[str, Any]:
    try:
        found = json.loads(os.pread(handle, 4096, 0) or b"{}")
    except (OSError, ValueError):
        return {}
    return found if isinstance(found, dict) else {}


def _alive(process: int) -> bool:
    if process <= 0 or process == os.getpid():
        return False
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    except OSError:
        return True
    return True


def _now() -> str:
    return time.strftime("%Y-%m-%d %H:%M:%S")
