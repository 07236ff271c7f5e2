"""Waiting times after loading: what `rest_time` returns."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from mwdlink.errors import Caution, InputError
from mwdlink.quantity import Uncertain
from mwdlink.result import Result

STEP, FLOW = "step", "steady flow"
LEVEL = 0.9

RE_ENTANGLEMENT = Caution(
    "re_entanglement",
    "These times are for small strains. After strong deformation, as in pressing, squeezing or a "
    "test beyond the linear range, chains took over ten times longer to entangle again (Roy & "
    "Roland 2013, published): wait longer, or repeat the test until it no longer changes.",
)


@dataclass(frozen=True)
class Wait:
    """One waiting time.

    Attributes
    ----------
    residual : float
        Share of the stress left [-].
    after : str
        "step" or "steady flow".
    time : Uncertain
        [s]; a lower bound where the window does not reach it.
    """

    residual: float
    after: str
    time: Uncertain

    def to_dict(self) -> dict[str, Any]:
        return {"residual": self.residual, "after": self.after, "time_s": self.time}


@dataclass(frozen=True)
class Rest(Result):
    """Waiting times and both decay curves.

    Attributes
    ----------
    waits : tuple of Wait
    time : ndarray of shape (n,)
        [s], ascending.
    after_step, after_flow : ndarray of shape (n,)
        Share of the stress left [-].
    step_band, flow_band : ndarray of shape (2, n)
        Low and high of both [-].
    full_stress : str
        What the stress after a step is divided by, in words.
    reaches : float or None
        Longest time the window speaks for [s]; None for a chain model.
    mean_time : Uncertain
        Mean relaxation time eta0 Je0 [s].
    temperature_C : float or None
    level : float
    warnings : tuple of Caution
    """

    command: ClassVar[str] = "rest"
    main_table: ClassVar[str] = "rest.csv"

    waits: tuple[Wait, ...]
    time: np.ndarray
    after_step: np.ndarray
    after_flow: np.ndarray
    step_band: np.ndarray
    flow_band: np.ndarray
    full_stress: str
    reaches: float | None
    mean_time: Uncertain
    temperature_C: float | None
    level: float = LEVEL
    warnings: tuple[Caution, ...] = ()

    def payload(self) -> dict[str, Any]:
        return {
            "rest": [w.to_dict() for w in self.waits],
            "full_stress": self.full_stress,
            "window_reaches_s": self.reaches,
            "mean_time_s": self.mean_time,
            "temperature_C": self.temperature_C,
        }

    def tables(self) -> dict[str, Any]:
        import pandas as pd

        return {
            "rest.csv": pd.DataFrame(
                {
                    "t [s]": self.time,
                    "after step [-]": self.after_step,
                    "after step low [-]": self.step_band[0],
                    "after step high [-]": self.step_band[1],
                    "after steady flow [-]": self.after_flow,
                    "after steady flow low [-]": self.flow_band[0],
                    "after steady flow high [-]": self.flow_band[1],
                }
            )
        }

    def wait(self, residual: float, after: str = FLOW) -> Wait:
        """The waiting time for one residual.

        Raises
        ------
        InputError
            If it was not asked for.
        """
        for w in self.waits:
            if w.after == after and np.isclose(w.residual, residual):
                return w
        raise InputError(f"no waiting time for {residual:g} after {after!r} was asked for.")

    def answer(self) -> str:
        flow = [w for w in self.waits if w.after == FLOW]
        # one per cent is what most laboratories ask for
        pick = min(flow, key=lambda w: abs(np.log(w.residual / 0.01)))
        step = next(w for w in self.waits if w.after == STEP and w.residual == pick.residual)
        where = "" if self.temperature_C is None else f" at {self.temperature_C:.4g} C"
        return (
            f"Wait {_span(pick.time)}{where} after loading until the stress has fallen below "
            f"{100 * pick.residual:g} % after steady squeezing ({_span(step.time)} after a step)."
        )

    def paragraph(self) -> str:
        parts = [
            f"{100 * w.residual:g} % after {'a step' if w.after == STEP else 'steady flow'}: "
            f"{_span(w.time)}"
            for w in self.waits
        ]
        return (
            f"{self.answer()} All waiting times: {'; '.join(parts)}. The stress after a step is "
            f"{self.full_stress}. {RE_ENTANGLEMENT.text}"
        )

    def cannot_say(self) -> tuple[str, ...]:
        out = [RE_ENTANGLEMENT.text]
        if any(w.time.status == "lower_bound" for w in self.waits):
            out.append(
                f"The sweep speaks for times up to about {self.reaches:.3g} s; longer waits are "
                "lower bounds. A sweep to lower frequency, or a master curve, would tell."
            )
        if self.reaches is None:
            out.append(
                "The distribution says nothing of branches: with long-chain branching the melt "
                "needs longer than any linear model says."
            )
        return tuple(out)


def _span(q: Uncertain) -> str:
    if q.value is None:
        return "an unknown time"
    if q.status == "lower_bound":
        return f"at least {_seconds(q.value)}"
    if q.low is None or q.high is None:
        return _seconds(q.value)
    return f"{_seconds(q.value)} ({_seconds(q.low)} to {_seconds(q.high)})"


def _seconds(t: float) -> str:
    if t >= 5400:
        return f"{t / 3600:.3g} h"
    # three digits from 100 on: two would be written 1.2e+02
    return f"{t / 60:.3g} min" if t >= 180 else f"{t:.{3 if t >= 99.5 else 2}g} s"
