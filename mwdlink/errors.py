"""What can go wrong, as one tree, and what a user should be told although nothing went wrong.

Every exception that leaves the public interface derives from `MwdlinkError`; the command line
maps its branches to exit statuses. A `Caution` travels inside a result: it is data, not control
flow, so that a caution can never be lost by a filter on Python's warning machinery.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any


class MwdlinkError(Exception):
    """Root of all errors raised on purpose."""


class InputError(MwdlinkError, ValueError):
    """Input that cannot be used: where it is wrong and what to do about it.

    Parameters
    ----------
    message : str
        What is wrong, in one sentence.
    path, row, column : optional
        Where: the file, its line number (1-based, as a text editor counts), the column's header.
    remedy : str, optional
        What the user can do.
    """

    def __init__(
        self,
        message: str,
        *,
        path: str | None = None,
        row: int | None = None,
        column: str | None = None,
        remedy: str | None = None,
    ) -> None:
        self.message = message
        self.path = None if path is None else str(path)
        self.row = row
        self.column = column
        self.remedy = remedy
        super().__init__(message)

    def __reduce__(self) -> tuple[Any, ...]:
        # keyword-only arguments are lost by the default pickling, and workers send errors back
        return (_rebuild, (type(self), self.message, self.path, self.row, self.column, self.remedy))

    def __str__(self) -> str:
        place = []
        if self.path is not None:
            place.append(self.path)
        if self.row is not None:
            place.append(f"row {self.row}")
        if self.column is not None:
            place.append(f"column {self.column!r}")
        text = f"{', '.join(place)}: {self.message}" if place else self.message
        return f"{text} {self.remedy}" if self.remedy else text


def _rebuild(kind: Any, message: str, path: Any, row: Any, column: Any, remedy: Any) -> Any:
    return kind(message, path=path, row=row, column=column, remedy=remedy)


class ModelError(MwdlinkError, ValueError):
    """A model asked for something it cannot do (a kernel without its constant, say)."""


class NotConverged(MwdlinkError, RuntimeError):
    """A fit that did not converge; `partial` holds what was reached, for inspection only."""

    def __init__(self, message: str, partial: Any = None) -> None:
        self.partial = partial
        super().__init__(message)


@dataclass(frozen=True)
class Caution:
    """A warning that belongs to a result.

    Attributes
    ----------
    code : str
        Stable identifier in snake case, for machines.
    text : str
        One or two plain sentences, for people.
    """

    code: str
    text: str

    def to_dict(self) -> dict[str, str]:
        return {"code": self.code, "text": self.text}


def merge_cautions(*groups: Any) -> tuple[Caution, ...]:
    """All cautions of several groups in order, each (code, text) once."""
    seen: dict[tuple[str, str], Caution] = {}
    for group in groups:
        for caution in group:
            seen.setdefault((caution.code, caution.text), caution)
    return tuple(seen.values())
