"""Did the sample change during the test: one sweep before, one after."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from scipy.stats import chi2 as chi2_law

from mwdlink.errors import Caution, InputError
from mwdlink.measurement.noise import noise_of
from mwdlink.measurement.sweep import Sweep
from mwdlink.quantity import Uncertain, readonly
from mwdlink.result import Result


@dataclass(frozen=True)
class Drift(Result):
    """How two sweeps of one sample differ.

    Attributes
    ----------
    omega : ndarray of shape (n,)
        Common frequencies [rad/s].
    storage_ratio, loss_ratio : ndarray of shape (n,)
        after/before [-].
    noise : float
        Relative standard error of one ratio [-].
    change : Uncertain
        Mean relative change of both moduli [-].
    low_end_change : Uncertain
        The same over the lowest third of the frequencies, where long chains show [-].
    chi2_per_point : float
        Of the ratios against one, in units of the noise [-].
    changed : bool
        Whether chance cannot explain the difference.
    warnings : tuple of Caution
    """

    command: ClassVar[str] = "drift"
    main_table: ClassVar[str] = "drift.csv"

    omega: np.ndarray
    storage_ratio: np.ndarray
    loss_ratio: np.ndarray
    noise: float
    change: Uncertain
    low_end_change: Uncertain
    chi2_per_point: float
    changed: bool
    warnings: tuple[Caution, ...] = ()

    def payload(self) -> dict[str, Any]:
        return {
            "drift": {
                "changed": self.changed,
                "chi2_per_point": self.chi2_per_point,
                "change": self.change,
                "low_end_change": self.low_end_change,
                "noise": self.noise,
            }
        }

    def tables(self) -> dict[str, Any]:
        import pandas as pd

        frame = pd.DataFrame(
            {
                "omega [rad/s]": self.omega,
                "G' after/before [-]": self.storage_ratio,
                "G'' after/before [-]": self.loss_ratio,
            }
        )
        return {"drift.csv": frame}

    def answer(self) -> str:
        def percent(q: Uncertain) -> str:
            ends = [100.0 * (x or 0.0) for x in (q.value, q.low, q.high)]
            return f"{ends[0]:+.1f} % ({ends[1]:+.1f} to {ends[2]:+.1f} %)"

        if not self.changed:
            return (
                f"The sample did not change measurably: moduli {percent(self.change)} between the "
                "two sweeps, within their scatter."
            )
        cause = (
            "A rise, strongest at low frequency, is what crosslinking, branching or further "
            "polymerisation does; loss of a volatile does it too."
            if (self.low_end_change.value or 0.0) > 0
            else "A fall, strongest at low frequency, is what chain scission does; an emptying or "
            "fracturing gap lowers all frequencies alike."
        )
        return (
            f"The sample changed during the test: moduli {percent(self.change)} over all "
            f"frequencies, {percent(self.low_end_change)} over the lowest third. {cause}"
        )

    def cannot_say(self) -> tuple[str, ...]:
        return (
            "Two sweeps show that something changed, not what: repeat under inert gas, with a "
            "fresh sample and a fresh gap, to tell degradation from a mechanical cause.",
        )


def compare_drift(
    before: Sweep, after: Sweep, *, noise: float | None = None, level: float = 0.9
) -> Drift:
    """Compare two sweeps of the same sample at the same temperature.

    Parameters
    ----------
    before, after : Sweep
        Both moduli are interpolated in log-log onto the common frequencies of `before`.
    noise : float, optional
        Relative noise of one modulus [-]; default columns, else estimated.
    level : float
        Probability of the intervals.

    Returns
    -------
    Drift

    Raises
    ------
    InputError
        Without a common range of at least three frequencies, or at temperatures more than 1 K
        apart.
    """
    if (
        before.temperature_C is not None
        and after.temperature_C is not None
        and abs(before.temperature_C - after.temperature_C) > 1.0
    ):
        raise InputError(
            f"The sweeps are at {before.temperature_C:g} and {after.temperature_C:g} C.",
            path=after.path,
            remedy="Compare sweeps of one temperature.",
        )
    inside = (before.omega >= after.omega[0] * (1 - 1e-9)) & (
        before.omega <= after.omega[-1] * (1 + 1e-9)
    )
    if inside.sum() < 3:
        raise InputError(
            "The two sweeps have fewer than three frequencies in common.",
            path=after.path,
            remedy="Measure both over the same range.",
        )
    omega = before.omega[inside]
    x, xa = np.log(omega), np.log(after.omega)
    up = np.interp(x, xa, np.log(after.storage)) - np.log(before.storage[inside])
    out = np.interp(x, xa, np.log(after.loss)) - np.log(before.loss[inside])
    sigma = float(np.hypot(noise_of(before, noise).typical, noise_of(after, noise).typical))
    r = np.concatenate([up, out])
    value = float(np.mean(r**2)) / sigma**2
    limit = float(chi2_law.ppf(0.999, r.size)) / r.size
    z = 1.6449 if abs(level - 0.9) < 1e-9 else float(np.sqrt(chi2_law.ppf(level, 1)))

    def mean(part: np.ndarray) -> Uncertain:
        middle, half = float(np.mean(part)), z * sigma / np.sqrt(part.size)
        return Uncertain(
            float(np.expm1(middle)),
            float(np.expm1(middle - half)),
            float(np.expm1(middle + half)),
            level,
        )

    third = max(omega.size // 3, 2)
    whole, low = mean(r), mean(np.concatenate([up[:third], out[:third]]))
    # a small even shift can hide under the scatter of single points but not of their mean
    far = abs(np.mean(r)) > 4 * sigma / np.sqrt(r.size) and abs(np.mean(r)) > 0.01
    changed = bool(value > limit or far)
    ratios = (readonly(np.exp(up)), readonly(np.exp(out)))
    result = Drift(readonly(omega), *ratios, sigma, whole, low, value, changed)
    if changed:
        caution = Caution("sample_changed", result.answer())
        result = Drift(readonly(omega), *ratios, sigma, whole, low, value, changed, (caution,))
    return result
