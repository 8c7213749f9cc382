"""What a new result says against the history: for its own summary, and for the page over all."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from leakpipe.codes.layout import Layout
from leakpipe.config.history import HistorySettings
from leakpipe.findings import Finding
from leakpipe.history.changes import CHARTED, at_epoch, changes
from leakpipe.history.chart import WARM_UP
from leakpipe.history.limits import over_limits
from leakpipe.history.rows import Row, rows_of
from leakpipe.history.store import Store


def neighbours_of(layout: Layout) -> dict[str, tuple[str, ...]]:
    """Return the qubits that share a gate with each qubit of a layout."""
    return {qubit: layout.neighbours(qubit) for qubit in (*layout.data, *layout.measure)}


def since_last(
    store: Store,
    summary: Mapping[str, Any],
    neighbours: Mapping[str, Sequence[str]],
    settings: HistorySettings,
) -> list[Finding] | None:
    """Return what moved in a result, or None if there is no earlier epoch to compare with.

    Only epochs recorded before this one count, so that a result says the same whenever it is made
    again. The result itself need not be in the history yet.

    Parameters
    ----------
    store
        The history.
    summary
        Content of `summary.json` of one epoch, its changes not filled in yet.
    neighbours
        Qubits that share a gate with each qubit.
    settings
        Limits and severities.
    """
    mine = list(rows_of(summary))
    patches = {row.patch for row in mine}
    before = _before(store, summary, patches)
    if not before:
        return None
    found = changes([*before, *mine], neighbours, settings)
    earlier = len({row.calibration_id for row in before})
    told = at_epoch(found, str(summary["calibration_id"]))
    return told if earlier >= WARM_UP else [*told, _too_early(patches, earlier, settings)]


def _too_early(patches: set[str], earlier: int, settings: HistorySettings) -> Finding:
    """Silence of a chart that has not begun is no good news: say so."""
    sentence = (
        f"{earlier} earlier epoch{'' if earlier == 1 else 's'} of {WARM_UP} that comparison "
        f"needs: so far only jumps of a qubit by a factor {settings.limits.jump:g} would be told."
    )
    where = ", ".join(sorted(patches))
    return Finding("changes-not-watched-yet", "note", where, sentence, {"earlier": earlier})


def limits_of(summary: Mapping[str, Any], settings: HistorySettings) -> list[Finding]:
    """Return a finding for every quantity of a result above its limit in the config."""
    return over_limits(rows_of(summary), settings)


def _before(store: Store, summary: Mapping[str, Any], patches: set[str]) -> list[Row]:
    this = str(summary["calibration_id"])
    device, until = str(summary["device"]), str(summary["acquired_at"])
    rows = store.rows(device=device, until=until, quantity=CHARTED)
    return [row for row in rows if row.patch in patches and row.calibration_id != this]


def write_epochs_page(
    results: Path,
    store: Store,
    neighbours: Mapping[str, Sequence[str]],
    settings: HistorySettings,
) -> Path:
    """Write `epochs.html` beside the result folders and return its path."""
    from leakpipe.history.files import write_whole
    from leakpipe.history.terminal import page_rows
    from leakpipe.report.epochs import epochs_page

    rows = store.rows()
    flags = [one.to_json() for one in changes(rows, neighbours, settings)]
    place = results / "epochs.html"
    write_whole(place, epochs_page(page_rows(rows, flags), flags).encode())
    return place
