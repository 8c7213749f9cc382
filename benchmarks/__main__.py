"""Run the benchmarks: `python -m benchmarks [NAME ...]`; speeds are ratios within one run.

A benchmark is a module of this folder with a `main() -> int` that prints its ratios and returns 0
when they reach the figures it names.
"""

from __future__ import annotations

import sys
from pathlib import Path

from studies.__main__ import run

if __name__ == "__main__":
    sys.exit(run(Path(__file__).parent, sys.argv[1:]))
