"""The pages run beside the other tests: each takes seconds, and waits for nothing."""

from __future__ import annotations

import tempfile
from concurrent.futures import Future, ThreadPoolExecutor
from pathlib import Path

import pytest
from pages import name_of, run_page

RUNNING = pytest.StashKey[dict[str, "Future[str]"]]()


def _of_a_page(item: pytest.Item) -> bool:
    return getattr(item, "originalname", "") == "test_code_blocks_run"


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Ask for the pages' outcome last, so that they have run by then."""
    items.sort(key=_of_a_page)


def pytest_collection_finish(session: pytest.Session) -> None:
    """Start the pages, one after the other, in a thread of their own.

    With --full they run when asked for: there, timings of other tests are asserted.
    """
    if session.config.getoption("--full") or session.config.getoption("collectonly"):
        return
    pages = [item.callspec.params["page"] for item in session.items if _of_a_page(item)]
    pool = ThreadPoolExecutor(1)
    session.config.add_cleanup(lambda: pool.shutdown(wait=False, cancel_futures=True))
    session.config.stash[RUNNING] = {name_of(p): pool.submit(_run, p) for p in pages}


def _run(page: Path) -> str:
    with tempfile.TemporaryDirectory(prefix="page-") as top:
        folder = Path(top) / "reader"
        folder.mkdir()
        return run_page(page, folder)


@pytest.fixture
def outcome_of(request: pytest.FixtureRequest):
    """A function from a page to the words of its first failure, or ""."""
    running = request.config.stash.get(RUNNING, {})

    def outcome(page: Path) -> str:
        started = running.get(name_of(page))
        return _run(page) if started is None else started.result()

    return outcome
