"""Make the example's data (invented): python examples/make_data.py [FOLDER]

The files in examples/netting were made by this script; `mwdlink demo` makes the same ones.
"""

import sys
from pathlib import Path

from mwdlink.runs.scenario import write_scenario

if __name__ == "__main__":
    target = Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent / "netting"
    for path in write_scenario(target):
        sys.stdout.write(f"{path}\n")
