"""What several test folders share: a small rehearsed epoch on disk and a config that runs it."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
import yaml
from tests_shared import SCENARIO


def rehearse_into(folder: Path, changes: dict[str, Any] | None = None) -> Path:
    """Rehearse the small epoch, with changes of the scenario, and return its folder."""
    from leakpipe.rehearsal.scenario import load_scenario
    from leakpipe.rehearsal.write import rehearse

    folder.mkdir(parents=True, exist_ok=True)
    file = folder / "scenario.yaml"
    file.write_text(yaml.safe_dump({**SCENARIO, **(changes or {})}))
    rehearse(load_scenario(file), folder / "recordings")
    return folder / "recordings"


@pytest.fixture(scope="session")
def small_epoch(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Folder with the recordings of a small epoch; copy it before you break it."""
    return rehearse_into(tmp_path_factory.mktemp("small"))


@pytest.fixture
def epoch_copy(small_epoch: Path, tmp_path: Path) -> Path:
    """A copy of the small epoch's recordings that a test may break."""
    return Path(shutil.copytree(small_epoch, tmp_path / "recordings"))


@pytest.fixture
def config_for(tmp_path: Path) -> Callable[..., Path]:
    """Give a function that writes a config for a folder of recordings."""

    def write(recordings: Path, **sections: Any) -> Path:
        content = {
            "recordings": {"folder": str(recordings)},
            "code": SCENARIO["code"],
            "results": str(tmp_path / "results"),
            "run_log": str(tmp_path / "log.jsonl"),
            "share": {"twin": False},
            **sections,
        }
        path = tmp_path / "config.yaml"
        path.write_text(yaml.safe_dump(content))
        return path

    return write
