"""Helpers that tests import by name (pytest puts this folder on the path)."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path


def leakpipe(*arguments: str | Path) -> subprocess.CompletedProcess[str]:
    """Run a command in a process of its own and return what it printed."""
    command = [sys.executable, "-m", "leakpipe", *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, check=False, timeout=300)
