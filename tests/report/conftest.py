"""Pages of the made-up results, and one browser for all tests."""

from __future__ import annotations

import importlib.util
import sys
from collections.abc import Iterator
from pathlib import Path
from types import ModuleType
from typing import Any

import pytest

HERE = Path(__file__).parent


def load(name: str, path: Path) -> ModuleType:
    spec = importlib.util.spec_from_file_location(name, path)
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="session")
def made_up() -> ModuleType:
    return load("mwdlink_made_up", HERE.parent / "figures" / "made_up.py")


def record_of(result: Any) -> dict[str, Any]:
    """A whole result.json with a card and labels that try to break out."""
    from mwdlink.chains.polymer import builtin

    return {
        "schema": f"mwdlink/{result.command}/1",
        "version": "0.0",
        "command": result.command,
        "inputs": [{"path": "data/<b>A & B</b>/sweep.csv", "sha256": "ab12" * 16}],
        "labels": {
            "sample": "Pipe <script>alert(1)</script> & 'co'",
            "lot": 'L"42',
            "operator": "N. N.",
            "date": "2026-03-02",
        },
        "polymer": builtin("hdpe").to_dict(),
        "model": {"kernels": ["power-law"], "exponent": 2.0, "rouse": True},
        "seed": 0,
        **result.to_dict(),
    }


COMMAND_LINE = "mwdlink do 'data/A & B/<x>.csv' --label 'sample=a \"b\"' --out result"


@pytest.fixture(scope="session")
def page_of(made_up: ModuleType) -> Any:
    """Function from a result to its page; each kind is made once."""
    from mwdlink.figures import figures_for
    from mwdlink.report import render

    made: dict[str, str] = {}

    def page(name: str) -> str:
        if name not in made:
            results = {
                "live": lambda: made_up.blend(made_up.live_quadratic()),
                "grid": lambda: made_up.blend(made_up.live_grid()),
            }
            result = results.get(name, made_up.ALL.get(name))()
            pictures = figures_for(result)
            if name in {"live", "grid"}:
                # the slider does not need every picture beside it
                pictures = {k: pictures[k] for k in ("fractions", "moduli")}
            made[name] = render(result, record_of(result), pictures, command_line=COMMAND_LINE)
        return made[name]

    return page


@pytest.fixture(scope="session")
def chromium(browser: str) -> Iterator[Any]:
    """A running headless browser."""
    module = load("mwdlink_test_browser", HERE / "browser.py")
    running = module.Browser(browser)
    yield running
    running.close()
