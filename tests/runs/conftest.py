"""Lots that several tests share."""

from __future__ import annotations

import sys
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).parent))

from lots_made import QUICK, write_lots  # noqa: E402

from mwdlink.runs.batch import batch  # noqa: E402


@pytest.fixture(scope="session")
def lots(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Eight lots, the sixth of another length."""
    return write_lots(tmp_path_factory.mktemp("made") / "lots", 8, odd=6)


@pytest.fixture(scope="session")
def whole(lots: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The result of an undisturbed run in this process."""
    out = tmp_path_factory.mktemp("whole") / "out"
    batch([lots], "hdpe", out=out, **QUICK)
    return out


@pytest.fixture(autouse=True)
def without_pictures(monkeypatch: pytest.MonkeyPatch) -> None:
    """The trend pictures take longer than the quick lots; `whole` has them."""
    monkeypatch.setattr("mwdlink.figures.gather.pictures_of", lambda *parts: {})
