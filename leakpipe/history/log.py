"""The `log` command's one function: the history of a config as text or for machines."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from leakpipe.errors import ConfigError, LeakpipeError
from leakpipe.history.publish import store_of
from leakpipe.history.rows import Row
from leakpipe.history.store import EpochLine
from leakpipe.history.terminal import (
    changes_text,
    epochs_text,
    log_json,
    overview_text,
    quantity_text,
    qubit_text,
)

if TYPE_CHECKING:
    from leakpipe.config.models import Config

VIEWS = ("overview", "epochs", "changes")


def log(
    config: Config,
    view: str = "overview",
    *,
    qubit: str | None = None,
    quantity: str | None = None,
    patch: str | None = None,
    since: str | None = None,
    as_json: bool = False,
) -> str | dict[str, Any]:
    """Return the history as text, or as what JSON can write.

    Parameters
    ----------
    config
        Says where the results are.
    view
        ``"overview"``: every number of the code, its trend, and what changed; ``"epochs"``: the
        list of epochs; ``"changes"``: what changed only.
    qubit
        Show this qubit over time instead (`quantity`, by default its steady leakage).
    quantity
        Show this quantity, a line per qubit, instead.
    patch
        Only this patch.
    since
        Only epochs from this calibration on.
    as_json
        Return everything chosen for machines.

    Raises
    ------
    ConfigError
        The history has no calibration named `since`.
    """
    store = store_of(config.results)
    rows = store.rows(device=config.device, patch=patch)
    epochs = store.epochs(device=config.device, patch=patch)
    chosen = _since(epochs, since)
    if view == "epochs" and not as_json:
        return epochs_text([one for one in epochs if one.calibration_id in chosen])
    recent = [row for row in rows if row.calibration_id in chosen]
    if qubit is not None and not as_json:
        return qubit_text(recent, qubit, quantity or "steady_leakage")
    if quantity is not None and not as_json:
        return quantity_text(recent, quantity)
    flags = [flag for flag in _flags(config, rows) if flag["numbers"].get("epoch") in chosen]
    if as_json:
        shown = [
            row for row in recent if qubit in (None, row.qubit) and quantity in (None, row.quantity)
        ]
        return log_json([one for one in epochs if one.calibration_id in chosen], shown, flags)
    return changes_text(flags) if view == "changes" else overview_text(recent, flags)


def _since(epochs: Sequence[EpochLine], since: str | None) -> set[str]:
    names = [one.calibration_id for one in epochs]
    if since is None:
        return set(names)
    if since not in names:
        known = f"; the newest is {names[-1]}" if names else ", it is empty"
        raise ConfigError(f'the history has no calibration "{since}"{known}')
    return set(names[names.index(since) :])


def _flags(config: Config, rows: Sequence[Row]) -> list[dict[str, Any]]:
    # The chart needs numerics, which the other views do without.
    from leakpipe.history.changes import changes

    found = changes(rows, _neighbours(config), config.history)
    return [one.to_json() for one in found]


def _neighbours(config: Config) -> Mapping[str, Sequence[str]]:
    """Return the neighbours of the config's layout; none if there is no layout to read."""
    from leakpipe.codes.files import layout_for
    from leakpipe.history.compare import neighbours_of
    from leakpipe.recordings.finding import LAYOUT_NAMES

    folder = config.recordings.folder
    named = next((folder / name for name in LAYOUT_NAMES if (folder / name).is_file()), None)
    try:
        return neighbours_of(layout_for(config.code, named))
    except LeakpipeError:
        # The history outlives the recordings; without a layout only the hints are missing.
        return {}
