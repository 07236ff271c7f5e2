"""Which kind of table a block is, which block is meant, and what to say when it is none."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from mwdlink.errors import Caution, InputError
from mwdlink.files import gpc, sweeps
from mwdlink.files.columns import Picker
from mwdlink.files.source import Source

ACCEPTED = {
    "distribution": "M [g/mol], log10 M or ln M, with one of dW/dlog10M, dW/dlnM, dW/dM, "
    "cumulative W, slice weight, dN/dlog10M, dN/dlnM, dN/dM, slice number",
    "sweep": "omega [rad/s] or f [Hz]; G' [Pa] and G'' [Pa], or |eta*| [Pa s] with tan delta or "
    "delta [deg|rad], or eta' and eta''",
    "relaxation curve": "t [s] and G [Pa]",
    "flow curve": "rate [1/s] and eta [Pa s]",
    "spectrum": "tau [s] and g [Pa]",
}


def no_kind(pickers: list[Picker], kind: str, accepted: str) -> InputError:
    """The error for a file without a table of a kind: what is missing, and what it is instead."""
    best = max(pickers, key=lambda p: len(p.found) + len(p.chosen))
    other = next((k for k, test in tests().items() if k != kind and test(best)), None)
    if kind == "table" and other is None:
        # the kind of which most is there says what is missing
        near = max(_NEEDED, key=lambda k: _present(best, k))
        if _present(best, near):
            kind, accepted = near, ACCEPTED[near]
    error = best.missing(_first_missing(best, kind), accepted)
    if other is not None and kind != "table":
        return InputError(
            f"this is no {kind}: the columns are those of a {other}.",
            path=error.path,
            row=error.row,
            column=error.column,
            remedy=error.remedy,
        )
    return error


def _present(picker: Picker, kind: str) -> int:
    """How many of the columns that a kind of table needs are there."""
    return sum(any(picker.has(role) for role in group) for group in _NEEDED[kind])


def _first_missing(picker: Picker, kind: str) -> str:
    for group in _NEEDED.get(kind, ()):
        if not any(picker.has(role) for role in group):
            return group[0]
    return _NEEDED[kind][0][0] if kind in _NEEDED else "omega"


_NEEDED = {
    "distribution": (("M", "log10 M", "log M", "ln M"), ("dW/dlog10M",)),
    "sweep": (("omega", "f", "frequency"), ("G'", "|eta*|", "|G*|", "eta'"),
              ("G''", "tan delta", "delta", "eta''")),
    "relaxation curve": (("t",), ("G",)),
    "flow curve": (("rate",), ("eta",)),
    "spectrum": (("tau",), ("g",)),
}  # fmt: skip


def is_relaxation(picker: Picker) -> bool:
    """Whether a block has a time and a relaxation modulus."""
    return picker.has("t") and picker.has("G") and not picker.has("omega")


def is_flow(picker: Picker) -> bool:
    """Whether a block has a shear rate and a viscosity."""
    return picker.has("rate") and picker.has("eta")


def is_spectrum(picker: Picker) -> bool:
    """Whether a block has relaxation times and strengths."""
    return picker.has("tau") and (picker.has("g") or picker.has("G"))


def strength_role(picker: Picker) -> str:
    """The role of a spectrum's strengths: `g`, or `G` where that is what they are called."""
    return "g" if picker.has("g") or not picker.has("G") else "G"


def tests() -> dict[str, Callable[[Picker], bool]]:
    """The tests of each kind, in the order in which they are tried."""
    return {
        "distribution": gpc.is_distribution,
        "sweep": sweeps.is_sweep,
        "relaxation curve": is_relaxation,
        "flow curve": is_flow,
        "spectrum": is_spectrum,
    }


def pickers_of(
    source: Source, columns: Mapping[str, Any] | None, decimal: str | None
) -> list[Picker]:
    """One picker a block; blocks without a column the user named are passed over if others have."""
    out: list[Picker] = []
    first: InputError | None = None
    for block in source.layout.blocks:
        try:
            out.append(Picker(source, block, columns, decimal))
        except InputError as error:
            first = first or error
    if not out:
        raise first or InputError("no table was found.", path=source.path)
    return out


def choose(pickers: list[Picker], suited: list[Picker], block: int | None, kind: str) -> Picker:
    if block is not None:
        if not 1 <= block <= len(pickers):
            raise InputError(
                f"there is no block {block}; the file has {len(pickers)}.",
                path=pickers[0].source.path,
                remedy="Blocks are counted from 1.",
            )
        return pickers[block - 1]
    if not suited:
        raise no_kind(pickers, kind, ACCEPTED[kind])
    if len(suited) > 1:
        rows = [p.block.rows[0] for p in suited]
        raise InputError(
            f"the file holds {len(suited)} tables of a {kind}, from rows "
            f"{', '.join(map(str, rows[:6]))}.",
            path=suited[0].source.path,
            row=rows[1],
            remedy="Keep one of them in the file, or leave the others' rows out with --omit.",
        )
    suited[0].notes += left_aside(pickers, suited, kind)
    return suited[0]


def left_aside(pickers: list[Picker], used: list[Picker], kind: str) -> tuple[Caution, ...]:
    """What is said of the tables of a file that were not read."""
    rest = [p for p in pickers if not any(p is q for q in used)]
    if not rest or not used:
        return ()
    rows = ", ".join(str(p.block.header_row or p.block.rows[0]) for p in rest[:6])
    text = f"{len(rest)} further tables of the file (row {rows}) are no {kind}: left aside."
    return (Caution("tables_left_aside", text),)
