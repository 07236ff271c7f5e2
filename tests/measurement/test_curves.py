"""Measured curves: checked, sorted, merged, and written so that they can be read again."""

from __future__ import annotations

import pickle
from pathlib import Path

import numpy as np
import pytest

from mwdlink.errors import InputError
from mwdlink.files.tables import read_any
from mwdlink.measurement.sweep import FlowCurve, RelaxationCurve, Sweep


def sweep(**more: object) -> Sweep:
    return Sweep.from_arrays([3.0, 1.0, 2.0, 2.0], [1, 2, 3, 5], [4, 5, 6, 8], **more)


def test_sorted_and_merged_by_the_mean_and_said() -> None:
    """Means of the repeats (derived); row of the first of them kept."""
    s = sweep(rows=[10, 11, 12, 13])
    assert s.omega.tolist() == [1, 2, 3]
    assert s.storage.tolist() == [2, 4, 1]
    assert s.loss.tolist() == [5, 7, 4]
    assert s.rows is not None and s.rows.tolist() == [11, 12, 10]
    assert [w.code for w in s.warnings] == ["points_sorted", "points_merged"]
    assert "up to 66.7 % (at 2)" in s.warnings[1].text  # 5 over 3
    near = Sweep.from_arrays([1.0, 2.0, 2.0], [1, 2, 2.1], [4, 5, 5])
    assert "differ" not in near.warnings[0].text


def test_relative_errors_of_merged_points_fall_as_independent_readings() -> None:
    """sqrt(0.03^2 + 0.04^2) / 2 (derived)."""
    s = sweep(sigma_storage=[0.01, 0.02, 0.03, 0.04])
    assert s.sigma_storage is not None
    assert s.sigma_storage[1] == pytest.approx(0.025)


def test_derived_quantities() -> None:
    """Definitions: |G*|, |eta*|, tan delta, decades, reduced variables."""
    s = Sweep([1.0, 100.0], [3.0, 30.0], [4.0, 40.0])
    assert s.complex_modulus.tolist() == [5, 50]
    assert s.complex_viscosity.tolist() == [5, 0.5]
    assert s.tan_delta == pytest.approx([4 / 3, 4 / 3])
    assert s.decades == 2
    moved = s.shifted(10.0, 0.5)
    assert moved.omega.tolist() == [10, 1000]
    assert moved.loss.tolist() == [2, 20]


def test_arrays_are_private_and_read_only() -> None:
    """A change of the source or of the curve is impossible (house rule)."""
    omega = np.array([1.0, 2.0, 3.0])
    s = Sweep(omega, omega, omega)
    omega[0] = 99
    assert s.omega[0] == 1
    with pytest.raises(ValueError):
        s.omega[0] = 5


@pytest.mark.parametrize("bad", [0.0, -1.0, np.nan, np.inf])
def test_values_that_are_no_moduli_are_refused_by_row(bad: float) -> None:
    """The source row of the point is named (house rule)."""
    with pytest.raises(InputError) as info:
        Sweep([1, 2, 3], [1, 2, bad], [1, 2, 3], rows=[5, 6, 7], path="x.csv")
    assert info.value.row == 7
    assert info.value.column == "G' [Pa]"


def test_shapes_order_and_temperature_are_checked() -> None:
    """Constructor's contract."""
    with pytest.raises(InputError, match="shape"):
        Sweep([1, 2, 3], [1, 2], [1, 2, 3])
    with pytest.raises(InputError, match="rise"):
        Sweep([1, 3, 2], [1, 2, 3], [1, 2, 3])
    with pytest.raises(InputError, match="impossible"):
        Sweep([1, 2, 3], [1, 2, 3], [1, 2, 3], temperature_C=-300)
    with pytest.raises(InputError, match="no point"):
        Sweep([], [], [])


def test_select_and_pickle() -> None:
    """Workers send curves back and forth; equality is by value."""
    s = sweep(temperature_C=190.0, label="a")
    assert s.select(s.omega > 1.5).omega.tolist() == [2, 3]
    assert s.select([0, 2]).omega.tolist() == [1, 3]
    assert pickle.loads(pickle.dumps(s)) == s
    assert s != s.with_(label="b")


@pytest.mark.parametrize(
    "curve",
    [
        Sweep([0.1, 1.0, 10.0], [1.1, 2, 3], [4, 5, 6.6], sigma_storage=[0.1, 0.2, 0.03],
              temperature_C=189.7, strain=[0.01, 0.01, 0.02], torque=[1e-6, 2e-6, 3e-6]),
        RelaxationCurve([0.1, 1.0, 10.0], [9, 3, 1.3], sigma=[0.01, 0.02, 0.03], temperature_C=150),
        FlowCurve([0.1, 1.0, 10.0], [9, 3, 1.3]),
    ],
    ids=lambda c: type(c).__name__,
)  # fmt: skip
def test_written_tables_are_read_again(curve: Sweep, tmp_path: Path) -> None:
    """Contract: what is written is accepted as input, number by number."""
    path = tmp_path / "curve.csv"
    frame = curve.to_frame()
    for column in list(frame.columns[1:3]):
        frame[column.replace(" [", " low [")] = frame[column] * 0.9
    frame.to_csv(path, index=False)
    found = read_any(path)
    for name in curve._columns:
        a, b = getattr(curve, name), getattr(found, name)
        assert (a is None) == (b is None) and (a is None or np.array_equal(a, b)), name
    assert found.temperature_C == pytest.approx(curve.temperature_C)
    again = type(curve).from_frame(frame)
    assert np.array_equal(again.to_frame().to_numpy(), curve.to_frame().to_numpy())


def test_from_frame_names_what_is_missing() -> None:
    """The missing header is the error's column."""
    frame = sweep().to_frame().drop(columns="G'' [Pa]")
    with pytest.raises(InputError) as info:
        Sweep.from_frame(frame)
    assert info.value.column == "G'' [Pa]"
