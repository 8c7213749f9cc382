"""What `leakpipe log` shows of a config's history."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from history_examples import season

from leakpipe.config.models import Config
from leakpipe.errors import ConfigError
from leakpipe.history.log import log
from leakpipe.history.publish import store_of


@pytest.fixture(scope="module")
def config(tmp_path_factory: pytest.TempPathFactory) -> Config:
    results = tmp_path_factory.mktemp("results")
    made = Config.model_validate_json(json.dumps({"results": str(results)}))
    for one in season(24, np.random.default_rng(1), moved={"D4": (20, 3.0)}):
        store_of(results).add(one)
    return made


def test_every_view_shows_its_part(config: Config) -> None:
    """Overview, epochs, changes, one quantity, one qubit."""
    assert "leakage share" in log(config)
    assert "D4 steady leakage" in log(config)
    assert len(log(config, "epochs").splitlines()) == 25
    assert "D4" in log(config, "changes")
    assert len(log(config, quantity="seepage").splitlines()) == 18
    assert len(log(config, qubit="D4").splitlines()) == 25


def test_since_shows_later_epochs_only(config: Config) -> None:
    """The chart still knows the epochs before; only what is shown is cut."""
    assert len(log(config, "epochs", since="cal-022").splitlines()) == 3
    assert "cal-020" in log(config, "changes", since="cal-019")
    assert log(config, "changes", since="cal-023") == "nothing moved beyond noise"
    with pytest.raises(ConfigError, match="newest is cal-023"):
        log(config, since="cal-999")


def test_machines_get_what_was_chosen(config: Config) -> None:
    """JSON holds the epochs, rows and changes of the same choice."""
    content = log(config, qubit="D4", quantity="steady_leakage", since="cal-020", as_json=True)
    json.dumps(content, allow_nan=False)
    assert len(content["epochs"]) == len(content["rows"]) == 4
    assert {row["qubit"] for row in content["rows"]} == {"D4"}
    assert any(flag["where"] == "D4" for flag in content["changes"])


def test_an_empty_history_is_said(tmp_path: Path) -> None:
    """Before the first refit there is nothing to show, and no error."""
    empty = Config.model_validate_json(json.dumps({"results": str(tmp_path)}))
    assert log(empty) == "the history is empty"
    assert log(empty, "epochs") == "the history is empty"
    assert log(empty, as_json=True) == {"epochs": [], "rows": [], "changes": []}
