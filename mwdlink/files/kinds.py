"""Which kind of table a block is, and what to say when it is none."""

from __future__ import annotations

from collections.abc import Callable

from mwdlink.errors import InputError
from mwdlink.files import gpc, sweeps
from mwdlink.files.columns import Picker

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
