"""A number with what the data can carry of it: value, interval, status and error budget."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

STATUSES = ("resolved", "lower_bound", "upper_bound", "assumed")
BUDGET_PARTS = ("noise", "smoothing", "kernel", "exponent", "time_law", "card", "gpc")


@dataclass(frozen=True)
class Uncertain:
    """An uncertain quantity.

    Attributes
    ----------
    value : float or None
        Central value, in the unit named by the key it stands under.
    low, high : float or None
        Ends of the central interval.
    level : float
        Probability the interval is meant to hold, 0 < level < 1.
    status : str
        `resolved`, `lower_bound`, `upper_bound` or `assumed` (the prior, not the data, fixes it).
    budget : mapping of str to float
        Shares of the variance (sum 1) by source; empty when not known.
    """

    value: float | None
    low: float | None = None
    high: float | None = None
    level: float = 0.9
    status: str = "resolved"
    budget: Mapping[str, float] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if self.status not in STATUSES:
            raise ValueError(f"unknown status {self.status!r}")

    @classmethod
    def from_samples(
        cls,
        samples: Any,
        value: float | None = None,
        *,
        level: float = 0.9,
        status: str = "resolved",
        weights: Any = None,
        budget: Mapping[str, float] | None = None,
    ) -> Uncertain:
        """Central interval of an ensemble; the value is the median unless given.

        Parameters
        ----------
        samples : array_like of shape (m,)
        value : float, optional
        weights : array_like of shape (m,), optional
            Weight of each sample, >= 0.
        """
        x = np.asarray(samples, dtype=float)
        good = np.isfinite(x)
        x = x[good]
        if x.size == 0:
            return cls(finite(value), None, None, level, status, dict(budget or {}))
        w = None if weights is None else np.asarray(weights, dtype=float)[good]
        low, middle, high = quantiles(x, [(1 - level) / 2, 0.5, (1 + level) / 2], w)
        if value is not None and math.isfinite(value):
            low, high = min(low, value), max(high, value)
        else:
            value = middle
        return cls(float(value), float(low), float(high), level, status, dict(budget or {}))

    def to_dict(self) -> dict[str, Any]:
        out: dict[str, Any] = {
            "value": finite(self.value),
            "low": finite(self.low),
            "high": finite(self.high),
            "level": self.level,
            "status": self.status,
        }
        if self.budget:
            out["budget"] = {k: finite(v) for k, v in self.budget.items()}
        return out


def finite(x: Any) -> float | None:
    """A finite float, or None: JSON has no NaN."""
    if x is None:
        return None
    x = float(x)
    return x if math.isfinite(x) else None


def quantiles(x: Any, q: Any, weights: Any = None) -> np.ndarray:
    """Quantiles of a sample, weighted if asked.

    Parameters
    ----------
    x : array_like of shape (m,)
    q : array_like of shape (k,)
        Probabilities in [0, 1].
    weights : array_like of shape (m,), optional

    Returns
    -------
    ndarray of shape (k,)
    """
    x = np.asarray(x, dtype=float)
    q = np.asarray(q, dtype=float)
    if weights is None:
        return np.quantile(x, q)
    w = np.asarray(weights, dtype=float)
    order = np.argsort(x, kind="stable")
    x, w = x[order], w[order]
    total = w.sum()
    if not total > 0:
        return np.quantile(x, q)
    # mid-point rule: with equal weights close to numpy's own for more than a few samples
    position = (np.cumsum(w) - 0.5 * w) / total
    return np.interp(q, position, x)


def to_plain(x: Any) -> Any:
    """Turn a result's content into JSON types: arrays to lists, NaN and infinity to None."""
    if isinstance(x, Uncertain):
        return x.to_dict()
    if hasattr(x, "to_dict") and not hasattr(x, "to_csv"):
        return to_plain(x.to_dict())
    if isinstance(x, Mapping):
        return {str(k): to_plain(v) for k, v in x.items()}
    if isinstance(x, np.ndarray):
        return [to_plain(v) for v in x.tolist()]
    if isinstance(x, (list, tuple)):
        return [to_plain(v) for v in x]
    if isinstance(x, (bool, np.bool_)):
        return bool(x)
    if isinstance(x, (int, np.integer)):
        return int(x)
    if isinstance(x, (float, np.floating)):
        return finite(x)
    return x


def readonly(x: Any, dtype: Any = float) -> np.ndarray:
    """A private read-only copy of an array, for frozen results."""
    a = np.array(x, dtype=dtype)
    a.setflags(write=False)
    return a
