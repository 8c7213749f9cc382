"""Progress on stderr: a bar on a terminal, one line a step elsewhere."""

from __future__ import annotations

import sys
import time
from collections.abc import Iterator
from contextlib import AbstractContextManager, contextmanager
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from leakpipe.progress import Reporter, Step


def reporter_for(*, quiet: bool) -> Reporter:
    """Return the reporter that suits stderr: silent, a bar on a terminal, lines elsewhere."""
    from leakpipe.progress import Silent

    if quiet:
        return Silent()
    return Bars() if sys.stderr.isatty() else Lines()


class _Counting:
    def __init__(self) -> None:
        self.done = 0

    def advance(self, amount: int = 1) -> None:
        """Count the units done."""
        self.done += amount


class Lines:
    """One plain line when a step ends, for cron mails and log files."""

    def step(self, label: str, total: int | None = None) -> AbstractContextManager[Step]:
        """Open a step; its line is written when it closes without an error."""
        return self._line(label)

    @contextmanager
    def _line(self, label: str) -> Iterator[Step]:
        start = time.monotonic()
        step = _Counting()
        yield step
        self.say(f"{label}: done in {time.monotonic() - start:.1f} s")

    def say(self, text: str) -> None:
        """Write one line."""
        print(text, file=sys.stderr, flush=True)


class Bars:
    """A bar per running step on the terminal."""

    def step(self, label: str, total: int | None = None) -> AbstractContextManager[Step]:
        """Open a step with a bar."""
        return self._bar(label, total)

    @contextmanager
    def _bar(self, label: str, total: int | None) -> Iterator[Step]:
        from rich.console import Console
        from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

        columns = (TextColumn("{task.description}"), BarColumn(bar_width=30), TimeElapsedColumn())
        with Progress(*columns, console=Console(stderr=True)) as progress:
            task = progress.add_task(label, total=total)

            class Advancing:
                def advance(self, amount: int = 1) -> None:
                    progress.advance(task, amount)

            yield Advancing()
            if total is None:
                progress.update(task, total=1, completed=1)

    def say(self, text: str) -> None:
        """Write one line."""
        print(text, file=sys.stderr, flush=True)
