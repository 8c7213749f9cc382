"""The commands as a person or a timer runs them: outputs, exit codes, nothing half-written."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import netCDF4
import numpy as np
import pytest
import xarray as xr
import yaml
from tests_shared import SCENARIO, leakpipe

ConfigFor = Callable[..., Path]


def no_result_in(folder: Path) -> bool:
    """Nothing was written: no result folder and no leftover of one."""
    return not list(folder.glob("*/summary.json")) + list(folder.glob(".*.new-*"))


@dataclass(frozen=True)
class Finished:
    """One run of the small epoch, shared by the tests that only look at it."""

    folder: Path
    log: Path
    stdout: str
    stderr: str
    summary: dict[str, Any]


@pytest.fixture(scope="module")
def finished(small_epoch: Path, tmp_path_factory: pytest.TempPathFactory) -> Finished:
    """Run the small epoch once."""
    home = tmp_path_factory.mktemp("finished")
    config = home / "config.yaml"
    config.write_text(
        yaml.safe_dump(
            {
                "recordings": {"folder": str(small_epoch)},
                "code": SCENARIO["code"],
                "results": "results",
                "run_log": "log.jsonl",
                "share": {"twin": False},
            }
        )
    )
    done = leakpipe("run", config)
    assert done.returncode == 0, done.stderr
    (folder,) = (path.parent for path in (home / "results").glob("*/summary.json"))
    summary = json.loads((folder / "summary.json").read_text())
    return Finished(folder, home / "log.jsonl", done.stdout, done.stderr, summary)


def test_run_writes_every_part_of_a_result(finished: Finished) -> None:
    """A run leaves a complete result folder, one line in the run log, and the block on stdout."""
    for name in ("leakage.nc", "summary.json", "summary.md", "page.html", "figures"):
        assert (finished.folder / name).exists()
    block = (finished.folder / "summary.md").read_text()
    assert block.strip() in finished.stdout
    assert len(block.splitlines()) <= 25
    (line,) = finished.log.read_text().splitlines()
    assert json.loads(line) == finished.summary
    assert "reading shots: done" in finished.stderr


def test_every_estimate_has_an_interval_or_says_why_not(finished: Finished) -> None:
    """Walk through summary.json: a value without an interval, or a null without reason, fails."""
    found = list(estimates(finished.summary))
    assert len(found) > 17 * 4
    for path, estimate in found:
        if estimate["identifiable"]:
            assert estimate["low"] <= estimate["value"] <= estimate["high"], path
        else:
            assert estimate["value"] is None, path
            assert estimate["basis"], path


def estimates(node: Any, path: str = "") -> Any:
    """Yield every estimate of a summary with its path."""
    if isinstance(node, dict):
        if "identifiable" in node:
            yield path, node
        else:
            for key, value in node.items():
                yield from estimates(value, f"{path}.{key}")
    elif isinstance(node, list):
        for index, value in enumerate(node):
            yield from estimates(value, f"{path}[{index}]")


def test_rerun_from_itself_in_two_processes_gives_the_same_numbers(
    finished: Finished, tmp_path: Path
) -> None:
    """The config kept in leakage.nc, run again in a process pool, agrees to the last digit."""
    with netCDF4.Dataset(finished.folder / "leakage.nc") as file:
        again = tmp_path / "again.yaml"
        again.write_text(file.config)
        hashes = json.loads(file.input_hashes)
    assert len(hashes) == 5
    out = tmp_path / "results"
    done = leakpipe("run", again, "--out", out, "--set", "compute.processes=2", "--json", "--quiet")
    assert done.stderr == ""
    (second,) = json.loads(done.stdout)
    first = dict(finished.summary)
    assert first.pop("made_at") != second.pop("made_at")
    assert first == second


def test_every_stage_sets_its_own_attributes(finished: Finished) -> None:
    """Numbers in leakage.nc carry units of their own quantity: times in rounds, the rest none."""
    tree = xr.open_datatree(finished.folder / "leakage.nc", engine="netcdf4")
    for stage in ("model", "readout", "detection", "rates", "logical", "share"):
        assert f"/Z/{stage}" in tree.groups
    rates = tree["/Z/rates"].to_dataset()
    assert rates["qubit_settling_rounds"].attrs["units"] == "rounds"
    assert rates["qubit_seepage"].attrs["units"] == "per round"
    assert rates["qubit_steady_leakage"].attrs["units"] == "1"
    tree.close()


def test_check_says_what_would_run_and_writes_nothing(
    small_epoch: Path, config_for: ConfigFor, tmp_path: Path
) -> None:
    """`check` counts recordings and shots and leaves no trace."""
    done = leakpipe("check", config_for(small_epoch))
    assert done.returncode == 0
    assert "4, R = 1, 3, 6, 10, 10,000 shots" in done.stdout
    assert "nothing was run" in done.stdout
    assert not (tmp_path / "results").exists()
    plan = json.loads(leakpipe("check", config_for(small_epoch), "--json").stdout)
    assert plan["patches"][0]["shots"] == 10_000


def test_flag_exit_only_when_asked(small_epoch: Path, config_for: ConfigFor) -> None:
    """A finding that says "act" gives exit code 4 with --flag-exit."""
    config = config_for(small_epoch, history={"limits": {"steady_leakage": 1e-6}})
    assert leakpipe("run", config, "--flag-exit").returncode == 4


def test_help_answers_without_heavy_imports() -> None:
    """`--help` imports no numerical library (the start-up time follows from that)."""
    code = (
        "import sys; sys.argv = ['leakpipe', '--help']\n"
        "from leakpipe.cli import main\n"
        "try:\n    main()\nexcept SystemExit:\n    pass\n"
        "heavy = {'numpy', 'scipy', 'xarray', 'sklearn', 'lmfit', 'matplotlib', 'numba', 'rich'}\n"
        "print('HEAVY', sorted(heavy & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert "HEAVY []" in done.stdout
    for verb in ("run", "check", "refit", "log", "rehearse"):
        assert verb in done.stdout


@pytest.mark.parametrize(
    ("sections", "words"),
    [
        ({"readuot": {}}, 'readuot  unknown key; did you mean "readout"?'),
        ({"seed": "two"}, 'seed  must be a whole number, got "two"'),
        ({"compute": {"processes": 0}}, "compute.processes  must be >= 1, got 0"),
        ({"code": {"family": "rotated surface"}}, "needs a distance"),
    ],
)
def test_config_mistakes_end_with_code_2(
    small_epoch: Path, config_for: ConfigFor, tmp_path: Path, sections: dict[str, Any], words: str
) -> None:
    """Each mistake is said with file and line, nothing is run, no traceback."""
    done = leakpipe("run", config_for(small_epoch, **sections))
    assert done.returncode == 2
    assert words in done.stderr
    assert "config.yaml:" in done.stderr
    assert "1 problem, nothing was run." in done.stderr
    assert "Traceback" not in done.stderr
    assert no_result_in(tmp_path / "results")


def test_usage_mistakes_end_with_code_2(tmp_path: Path) -> None:
    """An unknown option, a missing file and an unknown command are usage errors."""
    assert leakpipe("run", tmp_path / "none.yaml").returncode == 2
    assert leakpipe("run").returncode == 2
    assert leakpipe("fly").returncode == 2
    assert leakpipe("run", tmp_path / "none.yaml", "--wings").returncode == 2


def _memory(folder: Path, rounds: int) -> Path:
    (path,) = folder.glob(f"*R{rounds:02d}.nc")
    return path


def _calibration(folder: Path) -> Path:
    (path,) = folder.glob("*calibration.nc")
    return path


def _truncate(folder: Path) -> None:
    path = _memory(folder, 6)
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 3])


def _empty(folder: Path) -> None:
    _memory(folder, 6).write_bytes(b"")


def _rewrite(path: Path, change: Callable[[xr.Dataset], xr.Dataset]) -> None:
    with xr.open_dataset(path, engine="netcdf4") as file:
        data = change(file.load()).drop_encoding()
    path.unlink()
    data.to_netcdf(path, engine="netcdf4")


def _wrong_contract(folder: Path) -> None:
    with netCDF4.Dataset(_memory(folder, 6), "a") as file:
        file.contract = "7"


def _wrong_dims(folder: Path) -> None:
    _rewrite(_memory(folder, 6), lambda data: data.transpose("round", "shot", ...))


def _other_name(folder: Path) -> None:
    def rename(data: xr.Dataset) -> xr.Dataset:
        names = [str(name) for name in data["measure"].values]
        return data.assign_coords(measure=["M99", *names[1:]])

    _rewrite(_memory(folder, 6), rename)


def _no_shots(folder: Path) -> None:
    _rewrite(_memory(folder, 6), lambda data: data.isel(shot=slice(0, 0)))


def _no_calibration(folder: Path) -> None:
    _calibration(folder).unlink()


@pytest.mark.parametrize(
    ("damage", "words"),
    [
        (_truncate, "truncated"),
        (_empty, "is empty"),
        (_wrong_contract, 'attribute contract: found "7", expected "1"'),
        (_wrong_dims, "variable iq: found (round, shot, measure, quadrature), expected (shot,"),
        (_other_name, 'measure qubit "M99": not in the layout'),
        (_no_shots, "dimension shot: found length 0"),
        (_no_calibration, "which is not among the recordings"),
    ],
    ids=lambda value: value.__name__ if callable(value) else "",
)
def test_unusable_recordings_end_with_code_3(
    epoch_copy: Path,
    config_for: ConfigFor,
    tmp_path: Path,
    damage: Callable[[Path], None],
    words: str,
) -> None:
    """A damaged or foreign file is named with what was found and expected; nothing is left."""
    damage(epoch_copy)
    done = leakpipe("run", config_for(epoch_copy))
    assert done.returncode == 3, done.stderr
    assert words in done.stderr
    assert ".nc  " in done.stderr
    assert "Traceback" not in done.stderr
    assert no_result_in(tmp_path / "results")


def test_missing_folder_of_recordings_ends_with_code_3(
    config_for: ConfigFor, tmp_path: Path
) -> None:
    """A folder that does not exist, and an empty one, are said as such."""
    done = leakpipe("run", config_for(tmp_path / "nowhere"))
    assert (done.returncode, "is not a folder" in done.stderr) == (3, True)
    (tmp_path / "void").mkdir()
    done = leakpipe("run", config_for(tmp_path / "void"))
    assert (done.returncode, "holds no recordings" in done.stderr) == (3, True)


def test_missing_readings_are_a_finding_not_a_failure(
    epoch_copy: Path, config_for: ConfigFor
) -> None:
    """NaN readings are left out, and a finding says how many there were."""

    def lose(data: xr.Dataset) -> xr.Dataset:
        values = data["iq"].values.copy()
        values[::50, :, 0] = np.nan
        return data.assign(iq=(data["iq"].dims, values, data["iq"].attrs))

    _rewrite(_memory(epoch_copy, 6), lose)
    done = leakpipe("run", config_for(epoch_copy), "--json")
    assert done.returncode == 0, done.stderr
    codes = {finding["code"] for finding in json.loads(done.stdout)[0]["findings"]}
    assert "missing-readings" in codes


def test_one_round_only_leaves_rates_unknown(epoch_copy: Path, config_for: ConfigFor) -> None:
    """A single recording of one round: no logical error per round, no rise, and reasons for it."""
    for rounds in (3, 6, 10):
        _memory(epoch_copy, rounds).unlink()
    done = leakpipe("run", config_for(epoch_copy), "--json")
    assert done.returncode == 0, done.stderr
    patch = json.loads(done.stdout)[0]["patches"][0]
    for name in ("logical_error_per_round", "leakage_share", "detection_rise", "settling_rounds"):
        assert patch[name]["value"] is None
        assert patch[name]["basis"]


def test_calibration_without_leaked_preparation_goes_on(
    epoch_copy: Path, config_for: ConfigFor
) -> None:
    """Without state 2 no leaked population is identifiable; detection is reported all the same."""
    _rewrite(_calibration(epoch_copy), lambda data: data.sel(prepared=[0, 1]))
    done = leakpipe("run", config_for(epoch_copy), "--json")
    assert done.returncode == 0, done.stderr
    (summary,) = json.loads(done.stdout)
    assert "leak-not-identifiable" in {finding["code"] for finding in summary["findings"]}
    patch = summary["patches"][0]
    assert patch["logical_error_per_round"]["value"] is not None
    assert patch["steady_leakage"]["measure"]["value"] is None


def test_refit_does_new_work_once(small_epoch: Path, config_for: ConfigFor, tmp_path: Path) -> None:
    """A second refit with nothing new makes nothing; the history holds the epoch once."""
    config = config_for(small_epoch, history={"quiet_seconds": 0.0})
    first = json.loads(leakpipe("refit", config, "--json").stdout)
    second = json.loads(leakpipe("refit", config, "--json").stdout)
    assert (len(first["made"]), first["fresh"]) == (1, 0)
    assert (len(second["made"]), second["fresh"]) == (0, 1)
    epochs = json.loads(leakpipe("log", config, "--json").stdout)["epochs"]
    assert [epoch["calibration_id"] for epoch in epochs] == ["cal-001"]
    assert len((tmp_path / "log.jsonl").read_text().splitlines()) == 1
    assert "logical error per round" in leakpipe("log", config).stdout


def test_interrupt_ends_with_code_130_and_leaves_nothing(
    small_epoch: Path, config_for: ConfigFor, tmp_path: Path
) -> None:
    """Ctrl-C during a run leaves no result and no leftover."""
    command = [sys.executable, "-m", "leakpipe", "run", str(config_for(small_epoch))]
    environment = {**os.environ, "PYTHONUNBUFFERED": "1"}
    process = subprocess.Popen(command, stderr=subprocess.PIPE, text=True, env=environment)
    assert process.stderr is not None
    # The first line says that recordings are open: the run is under way.
    assert "opening recordings" in process.stderr.readline()
    time.sleep(0.2)
    process.send_signal(signal.SIGINT)
    process.communicate(timeout=60)
    assert process.returncode == 130
    assert no_result_in(tmp_path / "results")
