"""Run the studies: `python -m studies [NAME ...]`; each prints measured against required figures.

A study is a module of this folder with a `main() -> int` that returns 0 when every figure holds.
"""

from __future__ import annotations

import importlib
import sys
import time
from pathlib import Path


def run(folder: Path, names: list[str]) -> int:
    """Run `main` of the named modules of a folder, or of all that have one; count the failures."""
    package = folder.name
    have_main = sorted(p.stem for p in folder.glob("*.py") if "\ndef main(" in p.read_text())
    unknown = set(names) - set(have_main)
    if unknown:
        print(f"no such module: {', '.join(sorted(unknown))}; there are: {', '.join(have_main)}")
        return 2
    failed = []
    for name in names or have_main:
        print(f"== {package}.{name}", flush=True)
        start = time.monotonic()
        code = importlib.import_module(f"{package}.{name}").main()
        verdict = "ok" if not code else "FAILED"
        print(f"-- {package}.{name}: {verdict}, {time.monotonic() - start:.0f} s")
        if code:
            failed.append(name)
    print(f"{len(names or have_main) - len(failed)} passed, {len(failed)} failed")
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(run(Path(__file__).parent, sys.argv[1:]))
