"""A molar-mass distribution as weights in cells of log10 M.

One representation serves every source: a differential curve, a cumulative one, slices of equal
elution step, averages, blends. The weight of a cell sits at its node for averages and relaxation
(the trapezoid rule, spectrally accurate on smooth curves), and is spread evenly over its cell for
the weight above or below a molar mass, so that a limit inside a cell counts part of it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from mwdlink.chains import tables
from mwdlink.errors import Caution, InputError, merge_cautions
from mwdlink.quantity import readonly

# up to this many nodes are separate chains, not points of a curve
DISCRETE = 7
MOST_CELLS = 2000
CALIBRATIONS = ("absolute", "universal", "equivalent", "unstated")
# equivalent masses after conversion: the chain's own, with the error of what converted them
CONVERTED = "converted"


@dataclass(frozen=True, eq=False)
class Distribution:
    """Molar-mass distribution of a melt's chains.

    Attributes
    ----------
    molar_mass : ndarray of shape (n,)
        Nodes [g/mol], ascending.
    mass : ndarray of shape (n,)
        Weight fraction of each cell [-], >= 0, sum 1.
    edges : ndarray of shape (n + 1,)
        Cell edges [g/mol], ascending; node i lies within edges i and i + 1.
    label : str
    calibration : str
        What the molar masses are: `absolute`, `universal`, `equivalent` (to the standards'
        polymer), `unstated`, or `converted` (were equivalent).
    warnings : tuple of Caution
    measured : bool
        Whether it is a table as measured, with the errors of a GPC; families and computed curves
        are taken as exact.

    Raises
    ------
    InputError
        If the arrays do not fit together, are not finite, or hold no weight.

    Examples
    --------
    >>> d = Distribution.from_averages(Mw=1.2e5, dispersity=5.0)
    >>> round(d.Mw), round(d.dispersity, 3)
    (120000, 5.0)
    """

    molar_mass: np.ndarray
    mass: np.ndarray
    edges: np.ndarray
    label: str = ""
    calibration: str = "absolute"
    warnings: tuple[Caution, ...] = field(default=())
    measured: bool = False

    def __post_init__(self) -> None:
        m = readonly(self.molar_mass)
        w = np.array(self.mass, dtype=float)
        e = readonly(self.edges)
        if m.ndim != 1 or w.shape != m.shape or e.shape != (m.size + 1,) or m.size == 0:
            raise InputError("a distribution needs n nodes, n weights and n + 1 edges")
        if not (np.all(np.isfinite(m)) and np.all(np.isfinite(w)) and np.all(np.isfinite(e))):
            raise InputError("a distribution holds a number that is not finite")
        if m[0] <= 0 or e[0] <= 0 or np.any(np.diff(m) <= 0) or np.any(np.diff(e) <= 0):
            raise InputError("molar masses must be positive and ascending")
        if np.any(w < 0) or not w.sum() > 0:
            raise InputError("the weights of a distribution must be >= 0 and not all zero")
        if self.calibration not in (*CALIBRATIONS, CONVERTED):
            raise InputError(
                f"unknown calibration {self.calibration!r}.",
                remedy="Use one of " + ", ".join(CALIBRATIONS[:3]) + ".",
            )
        w /= w.sum()
        w.setflags(write=False)
        object.__setattr__(self, "molar_mass", m)
        object.__setattr__(self, "mass", w)
        object.__setattr__(self, "edges", e)

    # -- averages -----------------------------------------------------------------------------
    def moment(self, k: float) -> float:
        """Sum of w_i M_i^k [(g/mol)^k], w the weight fractions."""
        return float(np.sum(self.mass * self.molar_mass**k))

    @property
    def Mn(self) -> float:
        """Number average [g/mol]: 1 / sum(w_i / M_i) (ISO 16014-1)."""
        return 1.0 / self.moment(-1)

    @property
    def Mw(self) -> float:
        """Weight average [g/mol]: sum(w_i M_i)."""
        return self.moment(1)

    @property
    def Mz(self) -> float:
        """z average [g/mol]: sum(w_i M_i^2) / Mw."""
        return self.moment(2) / self.moment(1)

    @property
    def Mz1(self) -> float:
        """(z+1) average [g/mol]."""
        return self.moment(3) / self.moment(2)

    @property
    def dispersity(self) -> float:
        """Mw / Mn (IUPAC, Pure Appl. Chem. 81 (2009) 351)."""
        return self.Mw / self.Mn

    # -- the curve ----------------------------------------------------------------------------
    @property
    def density(self) -> np.ndarray:
        """dW/dlog10 M [-] of each cell, shape (n,)."""
        return self.mass / np.diff(np.log10(self.edges))

    def cumulative(self, molar_mass: Any) -> Any:
        """Weight fraction of chains up to M, partial cells counted.

        Parameters
        ----------
        molar_mass : float or ndarray
            M [g/mol], > 0.
        """
        x = np.log10(np.asarray(molar_mass, dtype=float))
        total = np.concatenate([[0.0], np.cumsum(self.mass)])
        out = np.interp(x, np.log10(self.edges), total / total[-1])
        return float(out) if np.ndim(molar_mass) == 0 else out

    def weight_below(self, molar_mass: float) -> float:
        """Weight fraction of chains shorter than M [g/mol]."""
        return float(self.cumulative(molar_mass))

    def weight_above(self, molar_mass: float) -> float:
        """Weight fraction of chains longer than M [g/mol]."""
        return 1.0 - float(self.cumulative(molar_mass))

    # -- other grids and blends ---------------------------------------------------------------
    def regrid(self, edges: Any) -> Distribution:
        """The same weight over other cells (weight is conserved, cells outside are dropped in).

        Parameters
        ----------
        edges : array_like of shape (m + 1,)
            New edges [g/mol], ascending. Weight beyond them goes to the end cells.
        """
        e = np.asarray(edges, dtype=float)
        share = np.diff(self.cumulative(e))
        share[0] += self.weight_below(float(e[0]))
        share[-1] += self.weight_above(float(e[-1]))
        nodes = np.sqrt(e[:-1] * e[1:])
        return replace(self, molar_mass=nodes, mass=np.maximum(share, 0.0), edges=e)

    def scaled(self, factor: float) -> Distribution:
        """The same curve with every molar mass times `factor` (a calibration shift)."""
        return replace(self, molar_mass=self.molar_mass * factor, edges=self.edges * factor)

    def compact(self, threshold: float = 1e-12) -> Distribution:
        """Without empty cells at both ends (they cost time and carry nothing)."""
        keep = np.flatnonzero(self.mass > threshold * self.mass.max())
        a, b = int(keep[0]), int(keep[-1]) + 1
        return replace(
            self, molar_mass=self.molar_mass[a:b], mass=self.mass[a:b], edges=self.edges[a : b + 1]
        )

    @classmethod
    def from_nodes(cls, molar_mass: Any, mass: Any, **more: Any) -> Distribution:
        """Weights at nodes; cell edges halfway in log M.

        Parameters
        ----------
        molar_mass : array_like of shape (n,)
            Nodes [g/mol], ascending.
        mass : array_like of shape (n,)
            Weight of each node, any scale.
        """
        m = np.asarray(molar_mass, dtype=float)
        return cls(m, np.asarray(mass, dtype=float), tables.edges_between(m), **more)

    @classmethod
    def from_table(
        cls,
        molar_mass: Any,
        values: Any,
        kind: str = "dW/dlog10M",
        *,
        calibration: str = "unstated",
        label: str = "",
    ) -> Distribution:
        """A distribution from a table as an instrument or a paper prints it.

        Parameters
        ----------
        molar_mass : array_like of shape (n,)
            M [g/mol], > 0, in any order (elution order has M falling).
        values : array_like of shape (n,)
            The second column: what it is says `kind`.
        kind : str
            `dW/dlog10M`, `dW/dlnM`, `dW/dM`, `cumulative` (weight up to M), `slice_weight`
            (area or height per equal elution step, ISO 16014-1), or the number forms
            `dN/dlog10M`, `dN/dlnM`, `dN/dM`, `slice_number`.
        calibration, label : str

        Returns
        -------
        Distribution
            Normalised; what had to be done to the table stands in `warnings`.

        Raises
        ------
        InputError
            If the table holds no usable distribution.
        """
        m, mass, edges, cautions = tables.weights_from_table(molar_mass, values, kind)
        if calibration == "unstated":
            cautions.append(
                Caution(
                    "calibration_unstated",
                    "What the molar masses are is not stated; taken as absolute. State it with "
                    "--calibration absolute, universal or equivalent.",
                )
            )
        elif calibration == "equivalent":
            cautions.append(
                Caution(
                    "calibration_equivalent",
                    "Molar masses equivalent to the calibration standards (often polystyrene) are "
                    "not the chain's own: for polyethylene about twice too high (recalled). "
                    "Convert them before relaxation times are read from them.",
                )
            )
        return cls(m, mass, edges, label, calibration, tuple(cautions), measured=True)

    @classmethod
    def from_averages(
        cls,
        Mw: float | None = None,
        Mn: float | None = None,
        dispersity: float | None = None,
        Mz: float | None = None,
        family: str = "log-normal",
        **more: Any,
    ) -> Distribution:
        """A member of a family with the given averages [g/mol] (see `families.from_averages`)."""
        from mwdlink.chains import families

        return families.from_averages(
            Mw=Mw, Mn=Mn, dispersity=dispersity, Mz=Mz, family=family, **more
        )

    @classmethod
    def blend(
        cls, parts: Iterable[tuple[Distribution, float]], label: str = "", points: int = 50
    ) -> Distribution:
        """Weighted sum of distributions.

        Parameters
        ----------
        parts : iterable of (Distribution, float)
            Components and their weight fractions [-], >= 0, any sum (normalised).
        points : int
            Least number of cells per decade where the components' own nodes differ.

        Returns
        -------
        Distribution
            On the common nodes if all components share them; otherwise the components' curves
            resampled on even cells of log M, fine enough for the narrowest of them.

        Raises
        ------
        InputError
            If there is nothing to blend or a fraction is negative.
        """
        pairs = [(d, float(f)) for d, f in parts]
        total = sum(f for _, f in pairs)
        if not pairs or any(f < 0 or not np.isfinite(f) for _, f in pairs) or total <= 0:
            raise InputError("a blend needs components with fractions >= 0 that are not all zero")
        used = [(d, f / total) for d, f in pairs if f > 0]
        first = used[0][0]
        cautions = merge_cautions(*(d.warnings for d, _ in used))
        kinds = {d.calibration for d, _ in used}
        calibration = kinds.pop() if len(kinds) == 1 else "unstated"
        measured = any(d.measured for d, _ in used)
        if all(
            np.array_equal(d.edges, first.edges) and np.array_equal(d.molar_mass, first.molar_mass)
            for d, _ in used
        ):
            mass = np.sum([f * d.mass for d, f in used], axis=0)
            return cls(first.molar_mass, mass, first.edges, label, calibration, cautions, measured)
        edges = _even_edges([d for d, _ in used], points)
        count = edges.size - 1
        nodes = np.sqrt(edges[:-1] * edges[1:])
        mass = np.zeros(count)
        moved = np.zeros(count)
        for d, f in used:
            if d.molar_mass.size <= DISCRETE:
                # a few chains, not a curve: each keeps its molar mass as far as the cell allows
                cell = np.clip(np.searchsorted(edges, d.molar_mass, side="right") - 1, 0, count - 1)
                np.add.at(mass, cell, f * d.mass)
                np.add.at(moved, cell, f * d.mass * np.log(d.molar_mass / nodes[cell]))
            else:
                curve = tables.resampled(d.molar_mass, d.density, nodes)
                mass += f * curve / curve.sum()
        held = mass > 0
        nodes[held] *= np.exp(moved[held] / mass[held])
        nodes = np.clip(nodes, edges[:-1] * (1 + 1e-12), edges[1:] * (1 - 1e-12))
        return cls(nodes, mass, edges, label, calibration, cautions, measured)

    def to_frame(self) -> Any:
        """Table with `M [g/mol]` and `dW/dlog10M` at the nodes."""
        import pandas as pd

        return pd.DataFrame(
            {
                "M [g/mol]": self.molar_mass,
                "dW/dlog10M": self.density,
            }
        )

    def plot(self, ax: Any = None) -> Any:
        """The curve on the given axes (or new ones); returns the axes."""
        import importlib

        return importlib.import_module("mwdlink.figures").plot_result(self, ax)


def _even_edges(parts: list[Distribution], points: int) -> np.ndarray:
    """Cells even in log M over all parts, fine enough for the narrowest curve among them."""
    low = min(d.edges[0] for d in parts)
    high = max(d.edges[-1] for d in parts)
    step = 1.0 / points
    for d in parts:
        if d.molar_mass.size > DISCRETE:
            step = min(step, 2.0 * float(np.median(np.diff(np.log10(d.molar_mass)))))
    decades = float(np.log10(high / low))
    count = int(np.clip(np.ceil(decades / step), 2, MOST_CELLS))
    return np.geomspace(low, high, count + 1)
