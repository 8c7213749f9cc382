"""Telling others of a result: history, run log, metrics. Every step can be done again safely."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from leakpipe.history.files import append_once, write_whole
from leakpipe.history.metrics import metrics_text
from leakpipe.history.results import Finished, read_summary
from leakpipe.history.rows import in_utc
from leakpipe.history.store import FILE_NAME, HistoryDamaged, Store


def store_of(results: Path) -> Store:
    """Return the history that lies beside the result folders."""
    return Store(results / FILE_NAME)


def set_aside(store: Store) -> str | None:
    """Move a damaged history away, so that it can be filled anew; say so, or return None."""
    try:
        store.made()
    except HistoryDamaged:
        aside = store.path.with_name(f"{store.path.name}.damaged")
        store.path.replace(aside)
        return f"{store.path}  was damaged: moved to {aside.name} and filled anew"
    return None


def unpublished(done: Iterable[Finished], store: Store) -> list[Finished]:
    """Return the results that the history does not hold as they are, first made first."""
    made = store.made()
    found = [one for one in done if made.get(one.key) != _utc(one.made_at)]
    return sorted(found, key=lambda one: (_utc(one.made_at), one.folder.name))


def _utc(moment: str) -> str:
    try:
        return in_utc(moment)
    except ValueError:
        return moment


def publish(summary: Mapping[str, Any], store: Store, run_log: Path | None) -> None:
    """Put a result into the run log and the history.

    The history comes last: what it holds is published. A kill in between leaves the line in the
    run log, where the next try finds it and does not write it again.
    """
    if run_log is not None:
        line = json.dumps(summary, allow_nan=False, separators=(",", ":"))
        append_once(run_log, line)
    store.add(summary)


def write_metrics(path: Path, done: Iterable[Finished]) -> None:
    """Write the metrics of the newest result of every device and patch."""
    newest: dict[tuple[str, str], tuple[str, dict[str, Any]]] = {}
    for one in done:
        summary = read_summary(one.folder)
        if summary is None:
            continue
        at = _utc(str(summary["acquired_at"]))
        place = (one.key[0], one.key[2])
        if place not in newest or newest[place][0] < at:
            newest[place] = (at, summary)
    text = metrics_text([summary for _, (_, summary) in sorted(newest.items())])
    write_whole(path, text.encode())
