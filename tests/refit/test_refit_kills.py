"""Kills: at every file operation in turn, at random moments, by signals, and two at once."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import refit_fakes
from refit_fakes import config_for, night, one_pass, state

from leakpipe.config.models import Config
from leakpipe.refit import refit, stop_on_signals

KILLED = 9
EVENTS = (
    "open",
    "os.rename",
    "os.mkdir",
    "os.rmdir",
    "os.remove",
    "os.truncate",
    "os.listdir",
    "os.scandir",
    "shutil.rmtree",
    "sqlite3.connect",
    "fcntl.flock",
)
"""Audit events (PEP 578) of the operations by which a pass changes what is on disk."""


@pytest.fixture(autouse=True)
def _no_syncs(monkeypatch: pytest.MonkeyPatch) -> None:
    """Syncs guard against power cuts; a killed process loses no written data without them."""
    monkeypatch.setattr(os, "fsync", lambda _handle: None)


def undisturbed(tmp_path: Path, nights: int) -> tuple[Config, dict]:
    """Make a season without any kill and return a config for another one and what is expected."""
    for number in range(nights):
        night(tmp_path / "recordings", number, leakage=0.01 + 0.001 * number)
    calm = config_for(tmp_path / "recordings", tmp_path / "calm")
    one_pass(calm)
    return config_for(tmp_path / "recordings", tmp_path / "results"), state(calm)


def dies_at(config: Config, operation: int) -> bool:
    """Do a pass in a forked process that ends, without any clean-up, before an operation.

    Returns
    -------
    died
        False if the pass was through before it came to that operation.
    """
    child = os.fork()
    if child == 0:
        left = operation

        def watch(event: str, _arguments: object) -> None:
            nonlocal left
            if event in EVENTS:
                left -= 1
                if left < 0:
                    os._exit(KILLED)

        try:
            sys.addaudithook(watch)
            one_pass(config)
            os._exit(0)
        except BaseException:
            os._exit(1)
    _, status = os.waitpid(child, 0)
    code = os.waitstatus_to_exitcode(status)
    assert code in (0, KILLED), "the pass failed by itself"
    return code == KILLED


def test_a_kill_before_any_file_operation_loses_and_doubles_nothing(tmp_path: Path) -> None:
    """For every n: killed before its n-th operation, then run once more, all is as undisturbed."""
    import leakpipe.result  # noqa: F401

    _, expected = undisturbed(tmp_path, 2)
    operation = 0
    while True:
        config = config_for(tmp_path / "recordings", tmp_path / f"killed-{operation}")
        died = dies_at(config, operation)
        one_pass(config)
        assert state(config) == expected, f"after a kill before operation {operation}"
        if not died:
            break
        operation += 1
    # Two results with their files, history, log and metrics: far fewer would mean a blind watch.
    assert operation > 60


def test_a_kill_while_a_result_is_replaced_loses_and_doubles_nothing(tmp_path: Path) -> None:
    """The same where a stale result is made again: old or new, never neither, never twice told."""
    import leakpipe.result  # noqa: F401

    recordings = tmp_path / "recordings"
    operation = 0
    while True:
        night(recordings, 0)
        config = config_for(recordings, tmp_path / f"killed-{operation}")
        one_pass(config)
        old = state(config)
        night(recordings, 0, leakage=0.02)
        died = dies_at(config, operation)
        one_pass(config)
        new = state(config)
        assert new["history"] != old["history"]
        assert len(new["log"]) == 2
        assert new["log"][0] == old["log"][0]
        assert list(new["folders"]) == list(old["folders"])
        if operation == 0:
            expected = new
        assert new == expected, f"after a kill before operation {operation}"
        if not died:
            break
        operation += 1
    assert operation > 40


def test_random_kills_leave_the_season_as_an_undisturbed_one(tmp_path: Path) -> None:
    """Ten SIGKILLs at random moments of real processes; the last clean run completes the season."""
    config, expected = undisturbed(tmp_path, 8)
    generator = np.random.default_rng(int(time.time()))
    arguments = [refit_fakes.__file__, str(config.recordings.folder), str(config.results), "0.1"]
    killed = 0
    for _ in range(10):
        with subprocess.Popen(
            [sys.executable, *arguments], stdout=subprocess.PIPE, text=True
        ) as process:
            assert process.stdout is not None
            assert process.stdout.readline() == "ready\n"
            time.sleep(generator.uniform(0, 0.25))
            process.send_signal(signal.SIGKILL)
            killed += process.wait() == -signal.SIGKILL
    # A result takes .1 s of sleeping alone, a life .25 s at most: no life makes more than two of
    # the eight, so that at least the first three are ended by the kill.
    assert killed >= 3
    one_pass(config)
    assert state(config) == expected


def test_two_at_once_leave_one_season(tmp_path: Path) -> None:
    """Started together, one works and the other says so; both end well."""
    config, expected = undisturbed(tmp_path, 3)
    arguments = [refit_fakes.__file__, str(config.recordings.folder), str(config.results), "0.3"]
    both = [
        subprocess.Popen([sys.executable, *arguments], stdout=subprocess.PIPE, text=True)
        for _ in range(2)
    ]
    told = [process.communicate()[0] for process in both]
    assert [process.returncode for process in both] == [0, 0]
    made = ["made" in text and "3 made" in text for text in told]
    busy = ["another refit" in text or "0 made, 3 up to date" in text for text in told]
    assert sorted(made) == [False, True]
    assert [not one for one in made] == busy
    assert state(config) == expected


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_signal_ends_the_pass_cleanly(tmp_path: Path, number: signal.Signals) -> None:
    """The result being made is given up at once and its folder removed; handlers are restored."""
    config, expected = undisturbed(tmp_path, 2)
    before = signal.getsignal(number)
    fake = refit_fakes.tools()

    def run(job: object, folder: Path, *arguments: object) -> None:
        if "cal-001" in str(folder):
            os.kill(os.getpid(), number)
            raise AssertionError("the signal did not interrupt")
        fake.run(job, folder, *arguments)

    with stop_on_signals() as stop:
        told = refit(config, refit_fakes.Tools(fake.plan, run), refit_fakes.Silent(), stop=stop)
        assert stop.is_set()
    assert told.stopped
    assert [folder.name for folder in told.made] == ["cal-000-west"]
    assert not list(config.results.glob(".*new*"))
    assert signal.getsignal(number) is before
    one_pass(config)
    assert state(config) == expected


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_the_repeating_command_ends_cleanly_when_asked(
    tmp_path: Path, number: signal.Signals
) -> None:
    """`--every` sleeps most of its life: a signal ends it at once, with 0 and without a word."""
    (tmp_path / "recordings").mkdir()
    config = tmp_path / "nightly.yaml"
    config.write_text("code: {family: repetition, distance: 3}\n")
    command = [sys.executable, "-m", "leakpipe", "refit", str(config), "--every", "1h", "--quiet"]
    with subprocess.Popen(command, stderr=subprocess.PIPE, text=True) as process:
        while not (tmp_path / "results" / ".refit.json").exists():
            assert process.poll() is None, "the loop ended by itself"
            time.sleep(0.02)
        time.sleep(0.2)
        process.send_signal(number)
        _, said = process.communicate(timeout=20)
    assert process.returncode == 0
    assert said == ""
