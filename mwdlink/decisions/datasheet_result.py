"""What `check_datasheet` gives back."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

from mwdlink.errors import Caution
from mwdlink.quantity import Uncertain
from mwdlink.result import Result


@dataclass(frozen=True)
class Judged:
    """One claim against what all the others lead one to expect.

    Attributes
    ----------
    quantity : str
    claimed : float
    tolerance : float
        Relative half-width, two standard deviations [-].
    expected : Uncertain
        From all the others, in the claim's unit.
    z : float or None
        (ln claimed - ln expected) over both uncertainties together.
    verdict : str
        `consistent`, `strained`, `inconsistent` or `cannot judge`.
    unit : str
        Of `claimed` and `expected`; empty for a ratio.
    """

    quantity: str
    claimed: float
    tolerance: float
    expected: Uncertain
    z: float | None
    verdict: str
    unit: str = ""

    def to_dict(self) -> dict[str, Any]:
        return {
            "quantity": self.quantity,
            "claimed": self.claimed,
            "unit": self.unit,
            "tolerance": self.tolerance,
            "expected": self.expected,
            "z": self.z,
            "verdict": self.verdict,
        }


@dataclass(frozen=True)
class DataSheet(Result):
    """Whether a sheet's numbers hang together.

    Attributes
    ----------
    claims : tuple of Judged
    odd_one_out : str or None
        The claim without which the rest agrees best, if one stands out.
    also_off : tuple of str
        Other claims that have to be left out with it before the rest agrees.
    rivals : tuple of str
        Claims that could be the culprit instead: the sheet cannot tell which.
    verdict : str
        In one sentence.
    explanations : tuple of str
        What may be behind it, in neutral words.
    branching_index : float or None
        LCBI from the claimed zero-shear and intrinsic viscosities [-]; zero for linear chains.
    model : mapping
    warnings : tuple of Caution
    """

    command: ClassVar[str] = "datasheet"
    main_table: ClassVar[str] = "claims.csv"

    claims: tuple[Judged, ...]
    odd_one_out: str | None
    also_off: tuple[str, ...]
    rivals: tuple[str, ...]
    verdict: str
    explanations: tuple[str, ...]
    branching_index: float | None
    model: Mapping[str, Any]
    warnings: tuple[Caution, ...] = ()

    def payload(self) -> dict[str, Any]:
        return {
            "claims": [c.to_dict() for c in self.claims],
            "odd_one_out": self.odd_one_out,
            "also_off": list(self.also_off),
            "rivals": list(self.rivals),
            "verdict": self.verdict,
            "explanations": list(self.explanations),
            "branching_index": self.branching_index,
        }

    def tables(self) -> dict[str, Any]:
        import pandas as pd

        return {
            "claims.csv": pd.DataFrame(
                {
                    "quantity": [c.quantity for c in self.claims],
                    "claimed": [c.claimed for c in self.claims],
                    "unit": [c.unit or "-" for c in self.claims],
                    "tolerance [-]": [c.tolerance for c in self.claims],
                    "expected": [c.expected.value for c in self.claims],
                    "expected low": [c.expected.low for c in self.claims],
                    "expected high": [c.expected.high for c in self.claims],
                    "z [-]": [c.z for c in self.claims],
                    "verdict": [c.verdict for c in self.claims],
                }
            )
        }

    def answer(self) -> str:
        return self.verdict

    def paragraph(self) -> str:
        text = self.verdict
        if self.explanations:
            text += " " + " ".join(self.explanations)
        return (
            f"{text} This is a comparison of the sheet's numbers with each other, under the "
            "assumption of linear chains; it says nothing about the material's quality, and "
            "release tests decide."
        )

    def cannot_say(self) -> tuple[str, ...]:
        open_ones = [c.quantity for c in self.claims if c.verdict == "cannot judge"]
        out = ["Which of two claims that contradict each other is right."]
        if open_ones:
            out.append(
                "Whether these claims are right, because the others do not determine them: "
                + ", ".join(open_ones)
                + "."
            )
        return tuple(out)
