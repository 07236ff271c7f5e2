"""What every result of a command has in common.

The base class lives on the ground floor because every room above returns results. It reaches the
figures by name and only when asked for a picture, so that the numerical rooms never import them.
"""

from __future__ import annotations

import html
import importlib
from typing import Any, ClassVar

from mwdlink.errors import Caution
from mwdlink.quantity import to_plain


class Result:
    """Base of all results (frozen dataclasses).

    Subclasses set `command`, hold `warnings` (tuple of Caution) and write:

    - `payload()`: the command's own keys of result.json (may hold arrays and Uncertain);
    - `tables()`: file name to pandas DataFrame, units in the headers;
    - `answer()`: the answer in one sentence, with its interval;
    - `paragraph()`: a neutral paragraph to copy; `cannot_say()`: what the data cannot carry.
    """

    command: ClassVar[str] = ""
    main_table: ClassVar[str] = ""
    warnings: tuple[Caution, ...] = ()

    def payload(self) -> dict[str, Any]:
        raise NotImplementedError

    def tables(self) -> dict[str, Any]:
        return {}

    def answer(self) -> str:
        return ""

    def paragraph(self) -> str:
        return self.answer()

    def cannot_say(self) -> tuple[str, ...]:
        return ()

    def to_dict(self) -> dict[str, Any]:
        """The command's keys of result.json and its warnings, in JSON types."""
        out = to_plain(self.payload())
        out["warnings"] = [w.to_dict() for w in self.warnings]
        return out

    def to_frame(self) -> Any:
        """The main table as a pandas DataFrame."""
        tables = self.tables()
        return tables[self.main_table] if self.main_table else next(iter(tables.values()))

    def plot(self, ax: Any = None) -> Any:
        """The main picture on the given axes (or new ones); returns the axes."""
        figures = importlib.import_module("mwdlink.figures")
        return figures.plot_result(self, ax)

    def _repr_html_(self) -> str:
        notes = "".join(f"<li>{html.escape(w.text)}</li>" for w in self.warnings)
        body = f"<p><strong>{html.escape(self.answer())}</strong></p>"
        if notes:
            body += f"<ul>{notes}</ul>"
        return f"<div>{body}{self.to_frame().head(12).to_html(index=False)}</div>"
