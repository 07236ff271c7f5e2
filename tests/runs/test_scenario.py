"""The invented example: marked, readable, the same every time, not of the tool's defaults."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from mwdlink.files.tables import read_distribution, read_sweep, read_sweeps
from mwdlink.relaxation.kernels import DEFAULT_KERNEL
from mwdlink.runs.scenario import EXCLUSION, TEMPERATURES, TRUE_MODEL, grades, write_scenario

SHIPPED = Path(__file__).parents[2] / "examples" / "netting"


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    top = tmp_path_factory.mktemp("example")
    write_scenario(top)
    return top


def test_same_files_every_time(folder, tmp_path):
    """Seeded: a second run gives the same bytes."""
    for path in write_scenario(tmp_path):
        assert path.read_bytes() == (folder / path.name).read_bytes()


def test_shipped_files_are_what_the_script_makes(folder):
    """Same names; same numbers but for the last digit (other processors round otherwise)."""
    assert {p.name for p in SHIPPED.iterdir()} == {p.name for p in folder.iterdir()}
    for path in sorted(SHIPPED.glob("*-190.csv")):
        a, b = read_sweep(path), read_sweep(folder / path.name)
        np.testing.assert_allclose(a.storage, b.storage, rtol=2e-4)
        np.testing.assert_allclose(a.loss, b.loss, rtol=2e-4)


def test_every_file_says_that_it_is_invented(folder):
    """No reader may take the example for data."""
    for path in folder.iterdir():
        assert "invented" in path.read_text(encoding="utf-8").lower()


def test_files_read_as_meant(folder):
    """GPC within its noise of the true averages below exclusion; three temperatures in one file."""
    fell = read_distribution(folder / "fell-gpc.csv", calibration="absolute")
    true = grades()["fell"].chains
    seen = true.molar_mass < EXCLUSION
    mean = float(true.mass[seen] @ true.molar_mass[seen] / true.mass[seen].sum())
    assert fell.Mw == pytest.approx(mean, rel=0.03)
    sweeps = read_sweeps(folder / "fell-sweeps.csv")
    assert [round(s.temperature_C) for s in sweeps] == list(map(round, TEMPERATURES))
    assert sweeps[0].omega[0] == pytest.approx(2 * np.pi * 0.005, rel=1e-3)


def test_the_world_is_not_the_tools_own():
    """Another kernel and exponent than the defaults."""
    assert TRUE_MODEL.kernel != DEFAULT_KERNEL and TRUE_MODEL.exponent != 2.0
