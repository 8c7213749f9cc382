"""The ready files for unattended use: they load, and they start what exists."""

from __future__ import annotations

import configparser
import re
from pathlib import Path

import pytest

from leakpipe.cli import commands
from leakpipe.config.loading import load

ROOT = Path(__file__).parents[2]


def test_the_nightly_config_loads_and_sets_what_a_night_needs() -> None:
    """Every key is known; results, run log and metrics have a place."""
    config = load(ROOT / "configs" / "nightly.yaml")
    assert config.run_log is not None
    assert config.metrics is not None
    assert config.history.quiet_seconds > 0


@pytest.mark.parametrize("name", ["leakpipe-refit.service", "leakpipe-refit.timer"])
def test_the_timer_files_keep_the_format(name: str) -> None:
    """Sections and keys as systemd reads them; the service starts a command that exists."""
    parser = configparser.ConfigParser(interpolation=None, strict=True)
    parser.optionxform = str
    parser.read(ROOT / "configs" / "systemd" / name)
    if name.endswith(".service"):
        start = parser["Service"]["ExecStart"]
        assert parser["Service"]["Type"] == "oneshot"
        _takes(start)
    else:
        assert parser["Timer"]["OnCalendar"] == "*:0/15"
        assert parser["Install"]["WantedBy"] == "timers.target"


def test_the_cron_line_starts_a_command_that_exists() -> None:
    """Five fields of time, then the command."""
    lines = (ROOT / "configs" / "cron" / "leakpipe.cron").read_text().splitlines()
    (line,) = [line for line in lines if line and line[0] not in "#O"]
    assert re.fullmatch(r"(?:[\d*/,-]+ ){5}nice .*", line)
    _takes(line)


def _takes(line: str) -> None:
    """Check the words after the program: a command, a config, options that the command has."""
    words = line.split('leakpipe" ' if '"' in line else "bin/leakpipe ")[1].split()
    command = commands.commands[words[0]]
    known = {option for parameter in command.params for option in parameter.opts}
    assert "nightly.yaml" in words[1]
    assert set(words[2:]) <= known
