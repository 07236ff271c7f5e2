"""The result of a batch: the summary of all lots, the reasons of those that failed, the limits."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, ClassVar

from mwdlink.decisions.lots import Control, control
from mwdlink.errors import Caution
from mwdlink.result import Result

CHARTED = ("Mw [g/mol]", "Mw within window [g/mol]", "Mz [g/mol]", "G ratio [-]", "Mw ratio [-]")
# limits from fewer are drawn, and said to be rough
ENOUGH = 20


@dataclass(frozen=True, eq=False)
class Batch(Result):
    """Many inputs inverted.

    Attributes
    ----------
    rows : tuple of mapping
        One an input that was done, in the order of the inputs: the columns of summary.csv.
    failed : tuple of mapping
        `path`, `lot`, `reason`, `kind` of each input that was not.
    limits : mapping of str to Control
        Control limits by column.
    inputs : tuple of mapping
        `path` and `sha256` of each input done.
    reused : int
        How many were taken over from an earlier run.
    throughput_per_s : float or None
        Inputs computed a second [1/s].
    settings : mapping
    polymer : mapping or None
    against : mapping or None
        The reference's path and sha256.
    """

    command: ClassVar[str] = "batch"
    main_table: ClassVar[str] = "summary.csv"

    rows: tuple[Mapping[str, Any], ...]
    failed: tuple[Mapping[str, Any], ...]
    limits: Mapping[str, Control] = field(default_factory=dict)
    inputs: tuple[Mapping[str, Any], ...] = ()
    reused: int = 0
    throughput_per_s: float | None = None
    settings: Mapping[str, Any] = field(default_factory=dict)
    polymer: Mapping[str, Any] | None = None
    against: Mapping[str, Any] | None = None
    warnings: tuple[Caution, ...] = ()

    @classmethod
    def make(
        cls, rows: Sequence[Mapping[str, Any]], failed: Sequence[Mapping[str, Any]], **rest: Any
    ) -> Batch:
        """Judge the lots against each other, in their order."""
        limits: dict[str, Control] = {}
        for header in CHARTED:
            found = control([row.get(header) for row in rows])
            if found is not None:
                limits[header] = found
        notes = tuple(rest.pop("warnings", ()))
        if limits and len(rows) < ENOUGH:
            notes += (
                Caution(
                    "few_lots",
                    f"Control limits from {len(rows)} lots are rough; {ENOUGH} are usual.",
                ),
            )
        if any(row.get("Mw status") in ("lower_bound", "assumed") for row in rows):
            notes += (
                Caution(
                    "bounds_charted",
                    "For some lots Mw is a bound or assumed (column `Mw status`): their place on "
                    "the chart is no measurement. Mw within the window is the steadier quantity.",
                ),
            )
        marked = []
        for i, row in enumerate(rows):
            beyond = [
                f"{_bare(h)} {'above' if row[h] > c.high else 'below'}"
                for h, c in limits.items()
                if i in c.outside
            ]
            marked.append({**row, "outside limits": ", ".join(beyond)})
        return cls(tuple(marked), tuple(failed), limits, warnings=notes, **rest)

    @property
    def outlying(self) -> tuple[dict[str, Any], ...]:
        """Lot, quantity, value and limits of every point beyond its limits."""
        return tuple(
            {"lot": self.rows[i]["lot"], "quantity": h, "value": self.rows[i][h], **c.to_dict()}
            for h, c in self.limits.items()
            for i in c.outside
        )

    def payload(self) -> dict[str, Any]:
        return {
            "done": len(self.rows),
            "failed": [dict(f) for f in self.failed],
            "taken_over": self.reused,
            "throughput_per_s": self.throughput_per_s,
            "control": {h: c.to_dict() for h, c in self.limits.items()},
            "outlying": [dict(o) for o in self.outlying],
            "against": None if self.against is None else dict(self.against),
            "settings": dict(self.settings),
        }

    def tables(self) -> dict[str, Any]:
        import pandas as pd

        heads = list(dict.fromkeys(k for row in self.rows for k in row)) or ["lot", "path"]
        out = {"summary.csv": pd.DataFrame([dict(r) for r in self.rows], columns=heads)}
        if self.failed:
            out["failed.csv"] = pd.DataFrame([dict(f) for f in self.failed])
        return out

    # -- words --------------------------------------------------------------------------------
    def answer(self) -> str:
        total = len(self.rows) + len(self.failed)
        text = f"{len(self.rows)} of {total} inputs were inverted."
        names = list(dict.fromkeys(str(o["lot"]) for o in self.outlying))
        if names:
            more = f" and {len(names) - 8} more" if len(names) > 8 else ""
            text += f" Outside the control limits: {', '.join(names[:8])}{more}."
        elif self.limits:
            text += " No lot is outside the control limits."
        apart = [str(r["lot"]) for r in self.rows if r.get("differs from reference") == "yes"]
        if self.against is not None:
            text += (
                f" {len(apart)} differ from the reference by more than noise."
                if apart
                else " None differs from the reference by more than noise."
            )
        return text

    def paragraph(self) -> str:
        out = [self.answer()]
        for header, c in self.limits.items():
            out.append(
                f"{header}: mean {c.centre:.4g}, control limits {c.low:.4g} to {c.high:.4g}."
            )
        return " ".join(out)

    def cannot_say(self) -> tuple[str, ...]:
        return (
            "Control limits say what is unusual among these lots, not what is good: limits of use "
            "are for whoever uses the material to set.",
        )


def _bare(header: str) -> str:
    return header.rsplit(" [", 1)[0]
