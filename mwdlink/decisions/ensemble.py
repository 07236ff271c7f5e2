"""The ensemble behind the bands of a prediction: what is not known for certain, drawn evenly.

A prediction from a distribution rests on choices the distribution does not settle: the kernel, the
mixing exponent, the constant of the viscosity law, the plateau modulus. Each member of the ensemble
takes one value of each; a Latin square spreads the values evenly, so that two hundred members do
what random draws would need thousands for.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.stats import norm

from mwdlink.chains.melt import Melt
from mwdlink.errors import ModelError
from mwdlink.quantity import Uncertain
from mwdlink.relaxation.kernels import DEFAULT_KERNEL, available_kernels, get_kernel

PRIOR_EXPONENT, PRIOR_SPREAD = 2.0, 0.2
"""Mixing exponent where nothing better is known: mean and standard deviation [-]."""

LEVEL = 0.9
PLATEAU_LEVELS = 3
ENTRANCE_LOST = 0.2
"""The largest share of a melt indexer's load lost at the entrance of the die (common practice)."""


@dataclass(frozen=True)
class ExponentBelief:
    """What is held of the mixing exponent.

    Attributes
    ----------
    centre : float
        Exponent of the central curves [-].
    low, high : float or None
        Ends of an even spread; None with a normal one.
    spread : float
        Standard deviation of a normal spread [-]; 0 where the exponent is fixed.
    source : str
        Where it comes from, in words.
    """

    centre: float
    low: float | None = None
    high: float | None = None
    spread: float = 0.0
    source: str = ""

    def at(self, share: Any) -> np.ndarray:
        """Quantiles of the belief at probabilities in (0, 1)."""
        q = np.asarray(share, dtype=float)
        if self.low is not None and self.high is not None:
            return self.low + (self.high - self.low) * q
        return np.maximum(self.centre + self.spread * norm.ppf(q), 1.0)

    @property
    def fixed(self) -> bool:
        """Whether it is one number."""
        return self.spread == 0.0 and self.low is None


def exponent_belief(melt: Melt, exponent: Any = None) -> ExponentBelief:
    """The exponent to use: the one given, else the card's, else the prior 2.0 +- 0.2.

    Parameters
    ----------
    melt : Melt
    exponent : float, (float, float), ExponentBelief or None

    Raises
    ------
    ModelError
        If it lies outside 1 to 8, or a range is upside down.
    """
    if isinstance(exponent, ExponentBelief):
        return exponent
    source = "as asked for"
    if exponent is None:
        if melt.mixing_exponent is not None or melt.mixing_exponent_range is not None:
            span = melt.mixing_exponent_range
            centre = melt.mixing_exponent
            if centre is None:
                centre = 0.5 * (span[0] + span[1])  # type: ignore[index]
            low, high = span if span is not None else (None, None)
            return ExponentBelief(float(centre), low, high, 0.0, "of the polymer card")
        words = f"the prior {PRIOR_EXPONENT:.1f} +- {PRIOR_SPREAD:.1f}"
        return ExponentBelief(PRIOR_EXPONENT, None, None, PRIOR_SPREAD, words)
    if isinstance(exponent, Sequence):
        low, high = (float(x) for x in exponent)
        if not 1.0 <= low <= high <= 8.0:
            raise ModelError(
                f"a range of exponents must rise within 1 to 8, not {low:g} to {high:g}"
            )
        return ExponentBelief(0.5 * (low + high), low, high, 0.0, source)
    value = float(exponent)
    if not 1.0 <= value <= 8.0:
        raise ModelError(f"the mixing exponent must lie within 1 to 8, not {value:g}")
    return ExponentBelief(value, None, None, 0.0, source)


def kernels_to_use(melt: Melt, kernels: Any = None) -> tuple[str, ...]:
    """The kernels asked for (checked against the card), else all the card can serve."""
    if kernels is None or len(kernels) == 0:
        return available_kernels(melt)
    names = (kernels,) if isinstance(kernels, str) else tuple(dict.fromkeys(kernels))
    for name in names:
        get_kernel(name, melt)
    return names


def central_kernel(names: Sequence[str]) -> str:
    """The kernel of the central curves: the power-law one where it is among them."""
    return DEFAULT_KERNEL if DEFAULT_KERNEL in names else names[0]


@dataclass(frozen=True, eq=False)
class Draws:
    """Values of each member.

    Attributes
    ----------
    kernel : tuple of str, length m
    exponent : ndarray of shape (m,)
    time_factor : ndarray of shape (m,)
        Multiplies the viscosity law [-].
    plateau : ndarray of int of shape (m,)
        Index into `plateau_levels`.
    plateau_levels : ndarray of shape (k,)
        G_N [Pa].
    lost : ndarray of shape (m,)
        Share of a melt indexer's load lost at the entrance [-].
    """

    kernel: tuple[str, ...]
    exponent: np.ndarray
    time_factor: np.ndarray
    plateau: np.ndarray
    plateau_levels: np.ndarray
    lost: np.ndarray

    def __len__(self) -> int:
        return len(self.kernel)


def draw(
    melt: Melt, kernels: Sequence[str], belief: ExponentBelief, members: int, seed: int = 0
) -> Draws:
    """Values of all members: one row of a Latin square each.

    Parameters
    ----------
    melt : Melt
        Gives the scatter of the viscosity law and the range of the plateau modulus.
    kernels : sequence of str
        Equal shares of the members.
    belief : ExponentBelief
    members : int
        >= 1.
    seed : int
    """
    rng = np.random.default_rng(np.random.SeedSequence([seed, 0x62]))
    m = int(members)

    def shares() -> np.ndarray:
        return (rng.permutation(m) + 0.5) / m

    names = tuple(kernels[i % len(kernels)] for i in rng.permutation(m))
    exponent = np.empty(m)
    for name in kernels:  # evenly within each kernel
        mine = np.flatnonzero([n == name for n in names])
        q = (rng.permutation(mine.size) + 0.5) / max(mine.size, 1)
        if name == "fluctuation":  # its constant is costly: a few exponents serve all members
            q = (np.floor(q * 7) + 0.5) / 7
        exponent[mine] = belief.at(q)
    factor = 10.0 ** (melt.scatter_decades * norm.ppf(shares()))
    levels = np.array([melt.plateau_modulus])
    if melt.plateau_range is not None:
        low, high = melt.plateau_range
        levels = low + (high - low) * (np.arange(PLATEAU_LEVELS) + 0.5) / PLATEAU_LEVELS
    plateau = np.minimum((shares() * levels.size).astype(int), levels.size - 1)
    return Draws(names, exponent, factor, plateau, levels, ENTRANCE_LOST * shares())


def budget(
    samples: np.ndarray, draws: Draws, extra: Mapping[str, np.ndarray] | None = None
) -> dict[str, float]:
    """Shares of the variance of ln(samples) by source, sum 1.

    The Latin square makes the sources nearly orthogonal, so that each one's share is what a
    regression on its values alone explains.

    Parameters
    ----------
    samples : ndarray of shape (m,)
        > 0.
    draws : Draws
    extra : mapping of str to ndarray of shape (m, k), optional
        Values of further sources (component noise, say).
    """
    x = np.asarray(samples, dtype=float)
    good = np.isfinite(x) & (x > 0)
    if good.sum() < 12:
        return {}
    y = np.log(x[good])
    if not y.std() > 1e-9:
        return {}
    e = draws.exponent
    sources: dict[str, np.ndarray] = {
        "kernel": np.array(
            [[n == k for k in sorted(set(draws.kernel))] for n in draws.kernel], float
        ),
        "exponent": np.column_stack([e, e**2]),
        "time_law": np.log(draws.time_factor)[:, None],
        "card": np.array(
            [[p == k for k in range(draws.plateau_levels.size)] for p in draws.plateau], float
        ),
    }
    sources.update(
        {k: np.asarray(v, dtype=float).reshape(len(draws), -1) for k, v in (extra or {}).items()}
    )
    out = {}
    for name, columns in sources.items():
        c = columns[good] - columns[good].mean(axis=0)
        if not np.any(np.abs(c) > 1e-12):
            continue
        fitted = c @ np.linalg.lstsq(c, y - y.mean(), rcond=1e-9)[0]
        share = float(fitted.var() / y.var())
        if extra is not None and name in extra:
            # of many columns of chance numbers some fit by chance
            rank, most = int(np.linalg.matrix_rank(c)), y.size - 1
            share = max((share * most - rank) / max(most - rank, 1), 0.0)
        out[name] = share
    total = sum(out.values())
    return {k: v / total for k, v in out.items()} if total > 0 else {}


def band(
    samples: np.ndarray,
    value: float | None,
    draws: Draws | None = None,
    extra: Mapping[str, np.ndarray] | None = None,
    **more: Any,
) -> Uncertain:
    """The interval of an ensemble around a central value, with its budget."""
    shares = budget(samples, draws, extra) if draws is not None else {}
    return Uncertain.from_samples(samples, value, level=LEVEL, budget=shares, **more)


def curve_band(samples: np.ndarray, centre: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Low and high of curves, shape (m, n) around (n,): the central curve lies within."""
    low, high = np.quantile(samples, [(1 - LEVEL) / 2, (1 + LEVEL) / 2], axis=0)
    return np.minimum(low, centre), np.maximum(high, centre)
