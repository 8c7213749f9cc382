"""Progress reporters: the pipeline tells one what it does; numerics never see it."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import AbstractContextManager, contextmanager
from typing import Protocol


class Step(Protocol):
    """One running step of known or unknown length."""

    def advance(self, amount: int = 1) -> None:
        """Say that `amount` more units of the step are done."""


class Reporter(Protocol):
    """What the pipeline needs of a progress display."""

    def step(self, label: str, total: int | None = None) -> AbstractContextManager[Step]:
        """Open a step; it closes when its context ends."""

    def say(self, text: str) -> None:
        """Show one line of text."""


class _Nothing:
    def advance(self, amount: int = 1) -> None:
        """Do nothing."""


class Silent:
    """The null reporter, default of every function that takes one."""

    @contextmanager
    def _nothing(self) -> Iterator[Step]:
        yield _Nothing()

    def step(self, label: str, total: int | None = None) -> AbstractContextManager[Step]:
        """Open a step that shows nothing."""
        return self._nothing()

    def say(self, text: str) -> None:
        """Show nothing."""
