"""Options and marks that all tests share."""

from __future__ import annotations

import os
import shutil
import signal

import pytest

# matrices here are small: more threads than one only wait for each other
for _library in ("OPENBLAS", "OMP", "MKL"):
    os.environ.setdefault(f"{_library}_NUM_THREADS", "1")

# a shell starts what runs in the background deaf to Ctrl-C, and so would be every process the tests
# start to see what Ctrl-C does
if signal.getsignal(signal.SIGINT) is signal.SIG_IGN:
    signal.signal(signal.SIGINT, signal.default_int_handler)

BROWSERS = ("chromium", "chromium-browser", "google-chrome")


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--full", action="store_true", help="run the long tests too")


def browser_path() -> str | None:
    """The first Chromium found on the path."""
    return next((path for name in BROWSERS if (path := shutil.which(name))), None)


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    full = config.getoption("--full")
    browser = browser_path()
    for item in items:
        if "full" in item.keywords and not full:
            item.add_marker(pytest.mark.skip(reason="long: runs with --full"))
        if "browser" in item.keywords and browser is None:
            item.add_marker(pytest.mark.skip(reason="no Chromium on the path"))


def pytest_configure(config: pytest.Config) -> None:
    """Properties are tried on the same cases in every run, and on new ones with --full."""
    try:
        from hypothesis import settings
    except ImportError:
        return
    settings.register_profile("the same", derandomize=not config.getoption("--full"))
    settings.load_profile("the same")


@pytest.fixture(scope="session")
def full(request: pytest.FixtureRequest) -> bool:
    """True when the long tests were asked for: timings are asserted only then."""
    return bool(request.config.getoption("--full"))


@pytest.fixture(scope="session")
def browser() -> str:
    """Path of a Chromium (tests that use it carry the `browser` mark)."""
    path = browser_path()
    if path is None:
        pytest.skip("no Chromium on the path")
    return path
