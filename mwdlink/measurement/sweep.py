"""Measured curves as the rest of the house sees them: SI units, ascending, positive, read-only.

Three kinds: a frequency sweep, a relaxation curve after a step, a steady flow curve. Each can be
made from arrays in any order (`from_arrays` sorts and merges, and says so) and gives a table that
the readers accept again (`to_frame`).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, fields, replace
from typing import Any, ClassVar, TypeVar

import numpy as np

from mwdlink.errors import Caution, InputError
from mwdlink.quantity import readonly

# Abscissae closer than this (relative) are one point: unit conversion and printed digits differ
# by less, two set points of an instrument by far more.
SAME_POINT = 1e-9
# repeated readings further apart than this ratio are no repeats of one thing (common practice)
REPEATS_DIFFER = 1.2

CurveType = TypeVar("CurveType", bound="_Curve")


class _Curve:
    """What the three kinds of curve have in common; the dataclasses below name the fields."""

    # field name -> header of the written table; the first is the abscissa
    _columns: ClassVar[dict[str, str]] = {}
    _required: ClassVar[tuple[str, ...]] = ()
    _sigmas: ClassVar[tuple[str, ...]] = ()
    # columns written by this kind that tell it apart from none; may be absent, may be any sign
    _loose: ClassVar[tuple[str, ...]] = ()

    def _settle(self) -> None:
        """Make the arrays private, read-only and checked (called by __post_init__)."""
        put = object.__setattr__
        first = self._required[0]
        count = np.size(getattr(self, first))
        for name in self._columns:
            value = getattr(self, name)
            if value is None:
                continue
            array = readonly(np.atleast_1d(np.asarray(value, dtype=float)))
            if array.ndim != 1 or array.size != count:
                raise InputError(
                    f"{self._columns[name]} has shape {array.shape}, {self._columns[first]} has "
                    f"{count} values.",
                    path=self.path,  # type: ignore[attr-defined]
                    column=self._columns[name],
                    remedy="Give one value per point.",
                )
            if name not in self._loose:
                self._check_positive(name, array)
            put(self, name, array)
        if count == 0:
            raise InputError("there is no point.", path=self.path)  # type: ignore[attr-defined]
        if np.any(np.diff(getattr(self, first)) <= 0):
            raise InputError(
                f"{self._columns[first]} must rise from point to point.",
                path=self.path,  # type: ignore[attr-defined]
                column=self._columns[first],
                remedy=f"{type(self).__name__}.from_arrays sorts and merges.",
            )
        rows = self.rows  # type: ignore[attr-defined]
        if rows is not None:
            rows = readonly(rows, dtype=int)
            if rows.shape != (count,):
                raise InputError("there must be one source row per point.")
            put(self, "rows", rows)
        temperature = self.temperature_C  # type: ignore[attr-defined]
        if temperature is not None:
            if not np.isfinite(temperature) or not -273.15 < temperature < 2000:
                raise InputError(
                    f"a temperature of {temperature} C is impossible.",
                    path=self.path,  # type: ignore[attr-defined]
                    remedy="Give it in degrees Celsius.",
                )
            put(self, "temperature_C", float(temperature))
        put(self, "warnings", tuple(self.warnings))  # type: ignore[attr-defined]
        put(self, "comments", tuple(self.comments))  # type: ignore[attr-defined]

    def _check_positive(self, name: str, array: np.ndarray) -> None:
        bad = np.flatnonzero(~(np.isfinite(array) & (array > 0)))
        if bad.size == 0:
            return
        rows = self.rows  # type: ignore[attr-defined]
        k = int(bad[0])
        more = f" ({bad.size} such values)" if bad.size > 1 else ""
        raise InputError(
            f"{self._columns[name]} is {array[k]:g} at point {k + 1}{more}; it must be finite "
            "and above zero.",
            path=self.path,  # type: ignore[attr-defined]
            row=None if rows is None else int(np.asarray(rows)[k]),
            column=self._columns[name],
            remedy="Leave such points out, and say so.",
        )

    @classmethod
    def from_arrays(
        cls: type[CurveType], *arrays: Any, merge: bool = True, **named: Any
    ) -> CurveType:
        """Points in any order: sorted by the abscissa, equal abscissae merged by their mean.

        Parameters
        ----------
        *arrays : array_like of shape (n,)
            The required columns in the order of the fields.
        merge : bool
            False raises on equal abscissae instead of merging.
        **named
            The remaining fields by name.

        Returns
        -------
        Sweep, RelaxationCurve or FlowCurve
            With a caution `points_sorted` or `points_merged` where something was done.
        """
        data = dict(zip(cls._required, arrays, strict=False)) | named
        columns = {
            k: np.atleast_1d(np.asarray(data[k], dtype=float))
            for k in cls._columns
            if data.get(k) is not None
        }
        rows = data.get("rows")
        rows = None if rows is None else np.asarray(rows, dtype=int)
        x = columns[cls._required[0]]
        warnings = list(data.get("warnings") or ())
        what = cls._columns[cls._required[0]]
        sizes = {a.shape for a in columns.values()}
        if len(sizes) == 1 and x.ndim == 1 and np.all(np.isfinite(x)) and x.size > 1:
            step = np.diff(x)
            if np.all(step < 0):
                text = f"The rows ran downwards in {what}: turned round."
                warnings.append(Caution("points_sorted", text))
            elif np.any(step < 0):
                text = f"The rows were not in order of {what}: sorted."
                warnings.append(Caution("points_sorted", text))
            order = np.argsort(x, kind="stable")
            columns = {k: v[order] for k, v in columns.items()}
            rows = None if rows is None else rows[order]
            x = columns[cls._required[0]]
            new = np.concatenate([[True], np.diff(x) > SAME_POINT * np.abs(x[1:])])
            if not np.all(new) and merge:
                columns, rows, note = _merge(columns, rows, new, cls._sigmas, what)
                warnings.append(note)
        data |= columns | {"rows": rows, "warnings": tuple(warnings)}
        return cls(**data)

    @classmethod
    def from_frame(cls: type[CurveType], frame: Any, **named: Any) -> CurveType:
        """From a pandas DataFrame with this project's own headers (those of `to_frame`).

        Other columns (low, high and the like) are left aside. Tables with other spellings or
        units are for the file readers.

        Parameters
        ----------
        frame : pandas.DataFrame
        **named
            Remaining fields: temperature_C, label, ...

        Raises
        ------
        InputError
            If a required column is missing.
        """
        headers = {str(h).strip(): h for h in frame.columns}
        data: dict[str, Any] = {}
        for name, header in cls._columns.items():
            if header in headers:
                data[name] = frame[headers[header]].to_numpy(dtype=float)
            elif name in cls._required:
                raise InputError(
                    f"there is no column {header!r}.",
                    column=header,
                    remedy=f"The frame has {', '.join(map(repr, headers))}.",
                )
        temperature = headers.get("T [C]")
        if temperature is not None and named.get("temperature_C") is None and len(frame):
            values = frame[temperature].to_numpy(dtype=float)
            if np.ptp(values) > 1.0:
                raise InputError(
                    f"temperatures from {values.min():g} to {values.max():g} C in one curve.",
                    column="T [C]",
                    remedy="Make one curve per temperature.",
                )
            named = named | {"temperature_C": exact_mean(values)}
        return cls.from_arrays(**(data | named))

    def to_frame(self) -> Any:
        """The curve as a pandas DataFrame, units in the headers."""
        import pandas as pd

        frame = pd.DataFrame(
            {h: getattr(self, k) for k, h in self._columns.items() if getattr(self, k) is not None}
        )
        if self.temperature_C is not None:  # type: ignore[attr-defined]
            frame["T [C]"] = self.temperature_C  # type: ignore[attr-defined]
        return frame

    def select(self: CurveType, mask: Any) -> CurveType:
        """The points where the mask is true (or at the given indices, in ascending order)."""
        mask = np.asarray(mask)
        if mask.dtype != bool:
            mask = np.isin(np.arange(len(self)), mask)
        changes = {k: getattr(self, k)[mask] for k in (*self._columns, "rows")
                   if getattr(self, k) is not None}  # fmt: skip
        return replace(self, **changes)  # type: ignore[type-var]

    def with_(self: CurveType, **changes: Any) -> CurveType:
        """A copy with some fields changed."""
        return replace(self, **changes)  # type: ignore[type-var]

    def with_warnings(self: CurveType, more: Iterable[Caution]) -> CurveType:
        """A copy that carries further cautions."""
        from mwdlink.errors import merge_cautions

        return self.with_(warnings=merge_cautions(self.warnings, more))  # type: ignore[attr-defined]

    def __len__(self) -> int:
        return int(getattr(self, self._required[0]).size)

    @property
    def decades(self) -> float:
        """Decades of the abscissa covered."""
        x = getattr(self, self._required[0])
        return float(np.log10(x[-1] / x[0]))

    def __eq__(self, other: object) -> bool:
        if type(other) is not type(self):
            return NotImplemented
        for field in fields(self):  # type: ignore[arg-type]
            a, b = getattr(self, field.name), getattr(other, field.name)
            if isinstance(a, np.ndarray) or isinstance(b, np.ndarray):
                if not np.array_equal(a, b):
                    return False
            elif a != b:
                return False
        return True

    __hash__ = None  # type: ignore[assignment]


def exact_mean(values: np.ndarray) -> float:
    """The mean; of equal numbers the number itself, to the last bit."""
    return float(values[0]) if np.all(values == values[0]) else float(np.mean(values))


def _merge(
    columns: dict[str, np.ndarray],
    rows: np.ndarray | None,
    new: np.ndarray,
    sigmas: tuple[str, ...],
    what: str,
) -> tuple[dict[str, np.ndarray], np.ndarray | None, Caution]:
    """Mean of each run of equal abscissae; relative errors fall as independent readings do."""
    start = np.flatnonzero(new)
    count = np.diff(np.append(start, new.size))
    out = {}
    for name, value in columns.items():
        if name in sigmas:
            out[name] = np.sqrt(np.add.reduceat(value**2, start)) / count
        else:
            mean = np.add.reduceat(value, start) / count
            # a mean of equal numbers may differ in the last bit; single points stay exact
            out[name] = np.where(count == 1, value[start], mean)
    where = columns[next(iter(columns))][start[count > 1]]
    shown = ", ".join(f"{v:g}" for v in where[:5]) + (", ..." if where.size > 5 else "")
    text = (
        f"{int(new.size - start.size)} repeated points in {what} ({shown}) were merged "
        "by their mean."
    )
    # the abscissa is the first column; the readings are what may differ
    apart = [
        np.maximum.reduceat(v, start) / np.maximum(np.minimum.reduceat(v, start), 1e-300)
        for name, v in columns.items()
        if name not in sigmas and name != next(iter(columns))
    ]
    ratio = np.max(apart, axis=0) if apart else np.ones(start.size)
    if ratio.max() > REPEATS_DIFFER:
        worst = int(np.argmax(ratio))
        at = columns[next(iter(columns))][start[worst]]
        text += (
            f" They differ by up to {100 * (ratio[worst] - 1):.3g} % (at {at:g}): a change of the "
            "sample or a bad reading lies in the mean; leave the wrong one out by its row."
        )
    return out, (None if rows is None else rows[start]), Caution("points_merged", text)


@dataclass(frozen=True, eq=False)
class Sweep(_Curve):
    """A frequency sweep in the linear range at one temperature.

    Attributes
    ----------
    omega : ndarray of shape (n,)
        Angular frequency [rad/s], > 0, ascending.
    storage, loss : ndarray of shape (n,)
        G' and G'' [Pa], > 0.
    sigma_storage, sigma_loss : ndarray of shape (n,) or None
        Relative standard errors [-] where the file gave them.
    temperature_C : float or None
        [C]
    label : str
    rows : ndarray of int of shape (n,) or None
        Line numbers in the source file, for messages that name a point.
    path : str or None
        The source file.
    warnings : tuple of Caution
        What was done on the way here.
    strain, torque : ndarray of shape (n,) or None
        Strain amplitude [-] and torque [N m] where given.
    comments : tuple of str
        Comment and preamble lines of the source.
    stated_viscosity : ndarray of shape (n,) or None
        |eta*| [Pa s] as a column of its own beside the moduli. Nothing is computed from it: it
        bears witness on the units of the frequency and the moduli.
    """

    omega: np.ndarray
    storage: np.ndarray
    loss: np.ndarray
    sigma_storage: np.ndarray | None = None
    sigma_loss: np.ndarray | None = None
    temperature_C: float | None = None
    label: str = ""
    rows: np.ndarray | None = None
    path: str | None = None
    warnings: tuple[Caution, ...] = ()
    strain: np.ndarray | None = None
    torque: np.ndarray | None = None
    comments: tuple[str, ...] = ()
    stated_viscosity: np.ndarray | None = None

    _columns: ClassVar[dict[str, str]] = {
        "omega": "omega [rad/s]",
        "storage": "G' [Pa]",
        "loss": "G'' [Pa]",
        "sigma_storage": "sigma' [-]",
        "sigma_loss": "sigma'' [-]",
        "strain": "strain [-]",
        "torque": "torque [N m]",
        "stated_viscosity": "|eta*| [Pa s]",
    }
    _required: ClassVar[tuple[str, ...]] = ("omega", "storage", "loss")
    _sigmas: ClassVar[tuple[str, ...]] = ("sigma_storage", "sigma_loss")
    _loose: ClassVar[tuple[str, ...]] = ("strain", "torque")

    def __post_init__(self) -> None:
        self._settle()

    @property
    def complex_modulus(self) -> np.ndarray:
        """|G*| [Pa], shape (n,)."""
        return np.hypot(self.storage, self.loss)

    @property
    def complex_viscosity(self) -> np.ndarray:
        """|eta*| [Pa s], shape (n,)."""
        return np.hypot(self.storage, self.loss) / self.omega

    @property
    def tan_delta(self) -> np.ndarray:
        """G''/G' [-], shape (n,)."""
        return self.loss / self.storage

    def shifted(self, a_T: float, b_T: float = 1.0) -> Sweep:
        """The sweep at reduced frequency a_T omega and reduced moduli b_T G', b_T G''.

        Parameters
        ----------
        a_T : float
            Horizontal factor [-], > 0; above 1 when the sweep is colder than the reference.
        b_T : float
            Vertical factor [-], > 0.
        """
        if not (np.isfinite(a_T) and a_T > 0 and np.isfinite(b_T) and b_T > 0):
            raise InputError(f"shift factors must be above zero, not {a_T:g} and {b_T:g}.")
        stated = self.stated_viscosity
        return replace(
            self,
            omega=self.omega * a_T,
            storage=self.storage * b_T,
            loss=self.loss * b_T,
            stated_viscosity=None if stated is None else stated * (b_T / a_T),
        )


@dataclass(frozen=True, eq=False)
class RelaxationCurve(_Curve):
    """A relaxation modulus after a small step.

    Attributes
    ----------
    time : ndarray of shape (n,)
        [s], > 0, ascending.
    modulus : ndarray of shape (n,)
        G(t) [Pa], > 0.
    sigma : ndarray of shape (n,) or None
        Relative standard error [-].
    temperature_C, label, rows, path, warnings, comments
        As for `Sweep`.
    """

    time: np.ndarray
    modulus: np.ndarray
    sigma: np.ndarray | None = None
    temperature_C: float | None = None
    label: str = ""
    rows: np.ndarray | None = None
    path: str | None = None
    warnings: tuple[Caution, ...] = ()
    comments: tuple[str, ...] = ()

    _columns: ClassVar[dict[str, str]] = {
        "time": "t [s]",
        "modulus": "G [Pa]",
        "sigma": "sigma [-]",
    }
    _required: ClassVar[tuple[str, ...]] = ("time", "modulus")
    _sigmas: ClassVar[tuple[str, ...]] = ("sigma",)

    def __post_init__(self) -> None:
        self._settle()


@dataclass(frozen=True, eq=False)
class FlowCurve(_Curve):
    """A steady shear viscosity against the shear rate.

    Attributes
    ----------
    rate : ndarray of shape (n,)
        Shear rate [1/s], > 0, ascending.
    viscosity : ndarray of shape (n,)
        [Pa s], > 0.
    sigma : ndarray of shape (n,) or None
        Relative standard error [-].
    temperature_C, label, rows, path, warnings, comments
        As for `Sweep`.
    """

    rate: np.ndarray
    viscosity: np.ndarray
    sigma: np.ndarray | None = None
    temperature_C: float | None = None
    label: str = ""
    rows: np.ndarray | None = None
    path: str | None = None
    warnings: tuple[Caution, ...] = ()
    comments: tuple[str, ...] = ()

    _columns: ClassVar[dict[str, str]] = {
        "rate": "rate [1/s]",
        "viscosity": "eta [Pa s]",
        "sigma": "sigma [-]",
    }
    _required: ClassVar[tuple[str, ...]] = ("rate", "viscosity")
    _sigmas: ClassVar[tuple[str, ...]] = ("sigma",)

    def __post_init__(self) -> None:
        self._settle()
