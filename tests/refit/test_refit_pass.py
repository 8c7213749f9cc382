"""One pass of a refit: what is made, what is not, and why."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest
from refit_fakes import DAMAGED, config_for, make, night, one_pass, plan, state, tools, write

from leakpipe.config.models import Config
from leakpipe.errors import RecordingError
from leakpipe.history.files import append_once, locked
from leakpipe.history.inputs import LEDGER_NAME, Ledger, look, recordings_in
from leakpipe.history.jobs import Tools
from leakpipe.history.results import clear_leftovers, finished, place_for
from leakpipe.progress import Silent
from leakpipe.recordings.finding import recording_paths
from leakpipe.refit import MOST_TRIES, Pass, StopSwitch, refit, repeat, settings_digest


@pytest.fixture
def season(tmp_path: Path) -> Config:
    for number in range(3):
        night(tmp_path / "recordings", number)
    return config_for(tmp_path / "recordings", tmp_path / "results")


def counted() -> tuple[Tools, list[str]]:
    """Return tools that note what they are called for."""
    calls: list[str] = []

    def planned(*arguments: Any) -> Any:
        calls.append("plan")
        return plan(*arguments)

    def run(job: Any, *arguments: Any) -> None:
        calls.append(job.key[1])
        make(job, *arguments)

    return Tools(planned, run), calls


def test_a_first_pass_makes_everything_oldest_first(season: Config) -> None:
    """Every night gets a folder, a row set in the history and a line in the run log."""
    told = one_pass(season)
    assert [folder.name for folder in told.made] == [f"cal-00{i}-west" for i in range(3)]
    found = state(season)
    assert list(found["folders"]) == [f"cal-00{i}-west" for i in range(3)]
    assert [name for name, _ in found["epochs"]] == ["cal-000", "cal-001", "cal-002"]
    assert [line["calibration_id"] for line in found["log"]] == ["cal-000", "cal-001", "cal-002"]
    assert any("leakpipe_leakage_share_ratio" in line for line in found["metrics"])


def test_a_pass_with_nothing_new_neither_plans_nor_makes(season: Config) -> None:
    """Idle passes touch nothing and ask nobody."""
    one_pass(season)
    before = state(season)
    some, calls = counted()
    told = refit(season, some, Silent())
    assert (told.made, told.fresh, calls) == ([], 3, [])
    assert state(season) == before


def test_an_idle_refit_is_fast_and_imports_nothing_heavy(season: Config) -> None:
    """In a process of its own: well below two seconds, without numpy."""
    one_pass(season)
    program = (
        "import sys, json; from pathlib import Path\n"
        "from leakpipe.config.models import Config\n"
        "from leakpipe.progress import Silent\n"
        "from leakpipe.refit import Tools, refit\n"
        "config = Config.model_validate_json(sys.argv[1])\n"
        "told = refit(config, Tools(None, None), Silent())\n"
        "heavy = {'numpy', 'xarray', 'netCDF4', 'scipy', 'numba', 'sklearn', 'matplotlib'}\n"
        "print(json.dumps([told.fresh, sorted(heavy & set(sys.modules))]))\n"
    )
    start = time.process_time() + os.times().children_user + os.times().children_system
    done = subprocess.run(
        [sys.executable, "-c", program, season.model_dump_json()],
        capture_output=True,
        text=True,
        check=True,
    )
    used = time.process_time() + os.times().children_user + os.times().children_system - start
    assert json.loads(done.stdout) == [3, []]
    # The bound of the issue, on processor time: other people's load does not count.
    assert used < 2.0


def test_only_what_is_new_or_changed_is_made_again(season: Config) -> None:
    """A new night, and a night whose recording changed; the others stay."""
    one_pass(season)
    folder = season.recordings.folder
    night(folder, 3)
    write(
        folder / "cal-001-west-45.nc",
        recording="memory",
        patch="west",
        leakage=0.02,
        device="chip",
        calibration_id="cal-001",
    )
    told = one_pass(season)
    assert [path.name for path in told.made] == ["cal-001-west", "cal-003-west"]
    assert told.fresh == 2
    found = state(season)
    assert len(found["log"]) == 5
    assert [name for name, _ in found["epochs"]] == [f"cal-00{i}" for i in range(4)]


def test_identity_is_content_and_not_time(season: Config) -> None:
    """New times, or all recordings moved to another folder, make nothing stale."""
    one_pass(season)
    for path in season.recordings.folder.iterdir():
        os.utime(path, (1e9, 1e9))
    some, calls = counted()
    assert refit(season, some, Silent()).made == []
    elsewhere = season.recordings.folder.parent / "archive" / "deep"
    elsewhere.parent.mkdir()
    shutil.move(season.recordings.folder, elsewhere)
    moved = config_for(elsewhere.parent, season.results)
    assert refit(moved, some, Silent()).made == []
    assert set(calls) <= {"plan"}


def test_same_size_and_time_with_other_content_is_seen_by_a_fresh_ledger(season: Config) -> None:
    """Without the ledger the hashes are made again: content decides."""
    one_pass(season)
    path = season.recordings.folder / "cal-001-west-5.nc"
    status = path.stat()
    path.write_text(path.read_text().replace("0.010", "0.020", 1))
    os.utime(path, ns=(status.st_atime_ns, status.st_mtime_ns))
    assert path.stat().st_size == status.st_size
    (season.results / LEDGER_NAME).unlink()
    assert [folder.name for folder in one_pass(season).made] == ["cal-001-west"]


def test_changed_settings_make_everything_stale_and_limits_do_not(season: Config) -> None:
    """What changes numbers makes them again; where results go, or what is flagged, does not."""
    one_pass(season)
    limits = config_for(season.recordings.folder, season.results, limits={"steady_leakage": 0.001})
    assert one_pass(limits).made == []
    seeded = season.model_copy(update={"seed": 7})
    assert len(one_pass(seeded).made) == 3
    layout = season.recordings.folder / "layout.yaml"
    before = settings_digest(season)
    layout.write_text("data: {}")
    assert settings_digest(season) != before


def test_a_lost_ledger_costs_time_only(season: Config) -> None:
    """It is a cache: deleted or damaged, nothing is made again."""
    one_pass(season)
    ledger = season.results / LEDGER_NAME
    for content in (None, "", "[1, 2", '{"version": 99}', '{"version": 1, "hashes": 5}'):
        if content is None:
            ledger.unlink()
        else:
            ledger.write_text(content)
        assert one_pass(season).made == []


def test_a_recording_that_is_still_being_written_is_left_for_the_next_pass(
    season: Config,
) -> None:
    """Its night waits, the others are made; once quiet, it is made without a hand."""
    now = time.time()
    waiting = season.model_copy(
        update={"history": season.history.model_copy(update={"quiet_seconds": 60.0})}
    )
    for path in season.recordings.folder.iterdir():
        os.utime(path, (now - 3600, now - 3600))
    fresh = season.recordings.folder / "cal-002-west-25.nc"
    os.utime(fresh, (now - 5, now - 5))
    half = season.recordings.folder / "half.nc"
    half.write_text('{"recording": "mem')
    told = refit(waiting, tools(), Silent(), clock=lambda: now)
    assert [folder.name for folder in told.made] == ["cal-000-west", "cal-001-west"]
    assert fresh.name in told.waiting
    assert half.name in told.waiting
    assert told.problems == []
    half.unlink()
    told = refit(waiting, tools(), Silent(), clock=lambda: now + 120)
    assert [folder.name for folder in told.made] == ["cal-002-west"]


def test_a_finished_night_waits_while_one_of_its_recordings_is_rewritten(season: Config) -> None:
    """It is not made again without the recording in the meantime."""
    waiting = season.model_copy(
        update={"history": season.history.model_copy(update={"quiet_seconds": 60.0})}
    )
    one_pass(season)
    now = time.time()
    path = season.recordings.folder / "cal-001-west-5.nc"
    path.write_text('{"rec')
    os.utime(path, (now - 1, now - 1))
    told = refit(waiting, tools(), Silent(), clock=lambda: now)
    assert told.made == []
    assert "chip-cal-001-west" in told.waiting


def test_a_time_in_the_future_does_not_keep_a_recording_waiting_forever(tmp_path: Path) -> None:
    """A wrong clock on the writer's side: quiet is then judged by when it was first seen."""
    path = tmp_path / "a.nc"
    path.write_text("x")
    os.utime(path, (5e9, 5e9))
    ledger = Ledger({}, {}, {}, {})
    assert look([path], ledger, quiet_seconds=60, now=1000.0).waiting == (path,)
    assert look([path], ledger, quiet_seconds=60, now=1030.0).waiting == (path,)
    assert list(look([path], ledger, quiet_seconds=60, now=1061.0).hashes) == [path]


def test_a_corrupt_recording_becomes_a_finding_of_the_newest_result(season: Config) -> None:
    """The nights are made without it; the finding does not make old nights stale."""
    one_pass(season)
    folder = season.recordings.folder
    night(folder, 3)
    (folder / "cal-003-west-9.nc").write_text("no recording at all")
    told = one_pass(season)
    assert [path.name for path in told.made] == ["cal-003-west"]
    assert told.exit_code == 0
    assert "cannot be opened" in told.problems[0]
    (finding,) = state(season)["folders"]["cal-003-west"]["summary.json"]["findings"]
    assert finding["code"] == "recording-unreadable"
    assert finding["where"] == "cal-003-west-9.nc"
    again = one_pass(season)
    assert again.made == []
    assert again.problems == told.problems
    assert again.news() == ""
    night(folder, 4)
    assert [path.name for path in one_pass(season).made] == ["cal-004-west"]
    assert state(season)["folders"]["cal-004-west"]["summary.json"]["findings"] == []
    assert str(season.recordings.folder) not in finding["sentence"]


def test_a_corrupt_recording_is_told_to_the_night_in_its_folder(tmp_path: Path) -> None:
    """With a folder per night, it is clear whose it is."""
    for number in range(3):
        night(tmp_path / "recordings" / f"night-{number}", number)
    (tmp_path / "recordings" / "night-1" / "bad.nc").write_text("?")
    config = config_for(tmp_path / "recordings", tmp_path / "results")
    one_pass(config)
    folders = state(config)["folders"]
    told = {name: len(files["summary.json"]["findings"]) for name, files in folders.items()}
    assert told == {"cal-000-west": 0, "cal-001-west": 1, "cal-002-west": 0}


def test_a_recording_damaged_inside_is_left_out_and_told(season: Config) -> None:
    """The header is fine, the data are not: the night runs without it, once."""
    path = season.recordings.folder / "cal-001-west-25.nc"
    content = json.loads(path.read_text())
    path.write_text(json.dumps({**content, "inside": DAMAGED}))
    told = one_pass(season)
    assert len(told.made) == 3
    assert "damaged while reading" in told.problems[0]
    summary = state(season)["folders"]["cal-001-west"]["summary.json"]
    assert [one["where"] for one in summary["findings"]] == [path.name]
    some, calls = counted()
    assert refit(season, some, Silent()).made == []
    assert calls == []
    path.write_text(json.dumps(content))
    assert [folder.name for folder in one_pass(season).made] == ["cal-001-west"]


def test_an_unexpected_failure_stops_neither_the_others_nor_the_next_passes(
    season: Config,
) -> None:
    """Tried again a few times, then left until something changes; said each time."""
    tries = []

    def run(job: Any, *arguments: Any) -> None:
        if job.key[1] == "cal-001":
            tries.append(job.key)
            raise MemoryError("too large")
        make(job, *arguments)

    failing = Tools(plan, run)
    told = refit(season, failing, Silent())
    assert len(told.made) == 2
    assert told.exit_code == 1
    assert "MemoryError: too large (tried again)" in told.failures[0]
    for _ in range(5):
        told = refit(season, failing, Silent())
        assert told.exit_code == 1
    assert len(tries) == MOST_TRIES
    assert "not tried again until something changes" in told.failures[0]
    night(season.recordings.folder, 1, leakage=0.02)
    assert len(one_pass(season).made) == 1
    assert one_pass(season).exit_code == 0


def test_a_result_without_a_summary_of_its_own_is_refused(season: Config) -> None:
    """A runner that writes nothing, or another's summary, leaves no result folder."""
    told = refit(season, Tools(plan, lambda *_: None), Silent())
    assert told.made == []
    assert len(told.failures) == 3
    assert finished(season.results) == []


def test_a_lost_history_or_run_log_line_is_written_again(season: Config) -> None:
    """What a kill between renaming and telling leaves untold, the next pass tells."""
    one_pass(season)
    before = state(season)
    (season.results / "history.sqlite").unlink()
    lines = season.run_log.read_text().splitlines(keepends=True)
    season.run_log.write_text("".join(lines[:-1]) + lines[-1][:40])
    assert one_pass(season).made == []
    assert state(season) == before


def test_a_damaged_history_is_set_aside_and_filled_anew(season: Config) -> None:
    """It is only an index: nobody has to get up for it."""
    one_pass(season)
    before = state(season)
    history = season.results / "history.sqlite"
    for damage in (b"no database" * 100, history.read_bytes()[:5000] + b"x" * 9000):
        history.write_bytes(damage)
        told = one_pass(season)
        assert told.made == []
        assert "filled anew" in told.problems[0]
        aside = season.results / "history.sqlite.damaged"
        assert aside.read_bytes() == damage
        aside.unlink()
        assert state(season) == before


def test_an_empty_folder_and_a_night_without_data_are_no_errors(tmp_path: Path) -> None:
    """Nothing there yet: nothing to do."""
    (tmp_path / "recordings").mkdir()
    config = config_for(tmp_path / "recordings", tmp_path / "results")
    assert one_pass(config).text() == "0 made, 0 up to date"
    with pytest.raises(RecordingError, match="not a folder"):
        one_pass(config_for(tmp_path / "nowhere", tmp_path / "results"))


def test_archived_recordings_leave_their_results_alone(season: Config) -> None:
    """Old recordings are taken away; their results and history stay."""
    one_pass(season)
    before = state(season)
    for path in season.recordings.folder.glob("cal-000*"):
        path.unlink()
    assert one_pass(season).made == []
    assert state(season) == before


def test_names_that_collide_get_folders_of_their_own(tmp_path: Path) -> None:
    """Two devices with one calibration name, and names that differ in odd characters only."""
    folder = tmp_path / "recordings"
    for device in ("chip", "other"):
        night(folder / device, 0, device=device)
    night(folder / "p1", 0, patch="we st")
    night(folder / "p2", 0, patch="we/st")
    config = config_for(folder, tmp_path / "results")
    assert len(one_pass(config).made) == 4
    assert len({one.key for one in finished(config.results)}) == 4
    assert one_pass(config).made == []
    assert place_for(tmp_path, ("d", "../..", "p"), {}).parent == tmp_path
    long = place_for(tmp_path, ("d", "c" * 400, "p"), {})
    assert len(long.name) < 200


def test_two_at_once_are_safe(season: Config) -> None:
    """The second does nothing, says so and is no failure; the lock goes with its holder."""
    with locked(season.results) as mine:
        assert mine
        told = one_pass(season)
    assert told.busy
    assert told.exit_code == 0
    assert "another refit" in told.text()
    assert len(one_pass(season).made) == 3


def test_leftovers_of_a_kill_are_put_back_or_removed(tmp_path: Path) -> None:
    """An old folder whose successor never came returns; half-made ones go."""
    for name in (".a-west.new-0123abcd", ".b-west.old-0123abcd", ".c-west.old-0123abcd", "c-west"):
        (tmp_path / name).mkdir()
    (tmp_path / ".hidden").mkdir()
    clear_leftovers(tmp_path)
    assert sorted(path.name for path in tmp_path.iterdir()) == [".hidden", "b-west", "c-west"]


def test_a_line_is_appended_once_and_a_torn_one_is_removed(tmp_path: Path) -> None:
    """The run log has whole lines, each once."""
    log = tmp_path / "logs" / "run.jsonl"
    assert append_once(log, '{"a": 1}')
    assert not append_once(log, '{"a": 1}\n')
    assert append_once(log, '{"a": 11}')
    with log.open("a") as handle:
        handle.write('{"a": 1')
    assert append_once(log, '{"a": 2}')
    assert log.read_text() == '{"a": 1}\n{"a": 11}\n{"a": 2}\n'


def test_the_listing_agrees_with_the_one_of_the_recordings(season: Config) -> None:
    """The light listing of the idle pass sees what the pipeline would see."""
    folder = season.recordings.folder
    (folder / ".hidden.nc").write_text("x")
    (folder / "sub" / "store.zarr").mkdir(parents=True)
    (folder / "notes.txt").write_text("x")
    light = recordings_in(folder, season.recordings.patterns)
    assert light == recording_paths(season)
    assert len(light) == 10


def test_stores_are_hashed_over_all_their_files(tmp_path: Path) -> None:
    """A changed chunk of a store is a changed recording."""
    from leakpipe.history.inputs import content_hash
    from leakpipe.recordings.opening import content_hash as theirs

    store = tmp_path / "m.zarr"
    (store / "iq").mkdir(parents=True)
    (store / "iq" / "0.0").write_bytes(b"chunk")
    (store / "zarr.json").write_text("{}")
    before = content_hash(store)
    assert before == theirs(store)
    (store / "iq" / "0.0").write_bytes(b"chonk")
    assert content_hash(store) != before
    ledger = Ledger({}, {}, {}, {})
    hashes = look([store], ledger, quiet_seconds=0, now=time.time() + 5).hashes
    assert hashes[store] == theirs(store)


def test_a_stop_between_results_leaves_the_rest_for_later(season: Config) -> None:
    """Asked to stop, a pass ends after what it is at, and the next one goes on."""
    stop = StopSwitch()

    def run(job: Any, *arguments: Any) -> None:
        make(job, *arguments)
        stop.set()

    told = refit(season, Tools(plan, run), Silent(), stop=stop)
    assert told.stopped
    assert len(told.made) == 1
    assert len(one_pass(season).made) == 2


def test_repeating_goes_on_after_an_error_and_ends_when_asked() -> None:
    """One bad pass is said; the loop goes on until the switch is set."""
    stop, said, count = StopSwitch(), [], 0

    def sometimes() -> Pass:
        nonlocal count
        count += 1
        if count == 2:
            raise RecordingError("the disk is away")
        if count == 4:
            stop.set()
        return Pass()

    repeat(sometimes, 0.01, stop, said.append)
    assert count == 4
    assert said == ["the disk is away"]


def test_the_fake_season_is_a_function_of_its_recordings(season: Config, tmp_path: Path) -> None:
    """Two seasons of the same recordings leave the same, so kills can be compared with none."""
    one_pass(season)
    other = config_for(season.recordings.folder, tmp_path / "other")
    one_pass(other)
    first, second = state(season), state(other)
    assert first == second
