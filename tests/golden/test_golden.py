"""Numbers that stay right: ten cases against what was kept, on any supported library.

The kept numbers are the tool's own (made by `python tests/golden/make.py`); what they are held
against in turn are the tests of the other folders. A change here is a change of results, to be
meant and said.
"""

from __future__ import annotations

import json

import pytest
from golden.cases import CASES, KEPT, tolerance


@pytest.mark.parametrize("name", CASES)
def test_numbers_stay(name):
    """Each number of the case within its tolerance (reason in cases.py)."""
    kept = json.loads(KEPT.read_text(encoding="utf-8"))[name]
    found = CASES[name]()
    assert set(found) == set(kept)
    for key, value in found.items():
        assert value == pytest.approx(kept[key], rel=tolerance(name)), key
