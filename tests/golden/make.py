"""Keep the numbers of the ten cases as they are now: python tests/golden/make.py"""

import json
import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))
from golden.cases import CASES, KEPT  # noqa: E402

KEPT.write_text(
    json.dumps({name: case() for name, case in CASES.items()}, indent=1) + "\n", encoding="utf-8"
)
