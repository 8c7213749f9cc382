"""Loading a config: all problems at once, places, nearest keys, overrides, unreadable files."""

from __future__ import annotations

import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
import yaml
from hypothesis import given
from hypothesis import strategies as st

from leakpipe.config.loading import load
from leakpipe.config.models import Config
from leakpipe.errors import ConfigError

Write = Callable[[str | bytes], Path]


@pytest.fixture
def written(tmp_path: Path) -> Write:
    def write(content: str | bytes) -> Path:
        path = tmp_path / "night.yaml"
        path.write_bytes(content.encode() if isinstance(content, str) else content)
        return path

    return write


def message_of(path: Path, *overrides: str) -> str:
    with pytest.raises(ConfigError) as caught:
        load(path, overrides)
    assert caught.value.exit_code == 2
    return str(caught.value)


def test_all_problems_at_once(written: Write) -> None:
    """Six mistakes in six places are said in one message, in the order of the file."""
    path = written(
        "recordings:\n"
        "  foldr: here\n"
        "code: {family: rotated surface}\n"
        "readout:\n"
        "  weights: boxcart\n"
        "rates:\n"
        "  boundary_rounds: 0\n"
        "  draws: many\n"
        "share: 3\n"
        "sead: 5\n"
    )
    lines = message_of(path).splitlines()
    assert lines == [
        f'{path}:2  recordings.foldr  unknown key; did you mean "folder"?',
        f'{path}:3  code  a "rotated surface" code needs a distance, '
        'got {"family": "rotated surface"}',
        f"{path}:5  readout.weights  must be 'discriminant', 'matched filter' or 'boxcar', "
        'got "boxcart"',
        f"{path}:7  rates.boundary_rounds  must be >= 1, got 0",
        f'{path}:8  rates.draws  must be a whole number, got "many"',
        f"{path}:9  share  must be a mapping, got 3",
        f'{path}:10  sead  unknown key; did you mean "seed"?',
        "7 problems, nothing was run.",
    ]


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("rates: {draws: 1.5}", "rates.draws  must be a whole number, got 1.5"),
        ("rates: {draws: on}", 'rates.draws  must be a whole number, got "on"'),
        ("share: {twin: yes}", 'share.twin  must be true or false, got "yes"'),
        ("share: {twin: 1}", "share.twin  must be true or false, got 1"),
        ("readout: {refuse_misfit: small}", 'readout.refuse_misfit  must be a number, got "small"'),
        ("readout: {refuse_misfit: 0}", "readout.refuse_misfit  must be > 0.0, got 0"),
        ("device: 5", "device  must be text, got 5"),
        ("results: [a]", 'results  must be text, got ["a"]'),
        ("recordings: {patterns: '*.nc'}", 'recordings.patterns  must be a list, got "*.nc"'),
        ("recordings: {patterns: ['*.nc', 5]}", "recordings.patterns.1  must be text, got 5"),
        ("recordings:", "recordings  must be a mapping, got null"),
        ("history: {limits: {jmp: 3}}", 'history.limits.jmp  unknown key; did you mean "jump"?'),
        (
            "share: {zzz: 1}",
            "share.zzz  unknown key; allowed: twin, twin_shots",
        ),
        ("seed: .nan", "seed  must be a whole number, got NaN"),
        ("readout: {refuse_misfit: .nan}", "readout.refuse_misfit  must be finite, got NaN"),
        ("history: {quiet_seconds: .inf}", "history.quiet_seconds  must be finite, got Infinity"),
        (
            "code: {family: repetition, distance: 3, layout: a.yaml}",
            'code  a layout goes with family "layout file" only, got {"family": "repetition", '
            '"distance": 3, "layout": "a.yaml"}',
        ),
    ],
)
def test_each_kind_of_problem(written: Write, text: str, sentence: str) -> None:
    """A problem says its dotted path, what is allowed and what was found."""
    path = written(text + "\n")
    assert message_of(path) == f"{path}:1  {sentence}\n1 problem, nothing was run."


@pytest.mark.parametrize(
    ("content", "start"),
    [
        ("", ":1  must be a mapping of sections, got nothing"),
        ("# only words\n", ":1  must be a mapping of sections, got nothing"),
        ("- a\n- b\n", ":1  must be a mapping of sections, got list"),
        ("just text\n", ":1  must be a mapping of sections, got str"),
        ("rates:\n\tdraws: 200\n", ":2  not valid YAML: found character '\\t'"),
        ("rates: {draws: 200\n", ":2  not valid YAML: "),
        ("seed: 1\nrates:\n  draws: 200\nseed: 2\n", ":4  not valid YAML: key 'seed' stands twice"),
        ("a: 1\n---\nb: 2\n", ":2  not valid YAML: "),
        (b"seed: \xff\xfe\n", "  cannot be read: not UTF-8 text"),
        (b"seed: \x00\n", "  not valid YAML: "),
        ("a: !!int many\n", ":1  not valid YAML: "),
    ],
    ids=[
        "empty",
        "comment",
        "list",
        "text",
        "tab",
        "open bracket",
        "twice",
        "two documents",
        "not UTF-8",
        "zero byte",
        "int of words",
    ],
)
def test_files_that_are_no_config(written: Write, content: str | bytes, start: str) -> None:
    """A file that is no mapping is refused with its place and one sentence, without a traceback."""
    path = written(content)
    message = message_of(path)
    assert message.startswith(f"{path}{start}"), message
    assert "\n" not in message


def test_missing_file_and_folder(tmp_path: Path) -> None:
    """A path that is no file is said by the system's own words."""
    missing = tmp_path / "missing.yaml"
    assert message_of(missing) == f"{missing}  cannot be read: No such file or directory"
    assert message_of(tmp_path) == f"{tmp_path}  cannot be read: Is a directory"


def test_a_byte_order_mark_is_no_problem(written: Write) -> None:
    """Files of editors that begin with a byte order mark are read."""
    assert load(written(b"\xef\xbb\xbfseed: 4\n")).seed == 4


def test_relative_paths_start_at_the_config(written: Write, tmp_path: Path) -> None:
    """Paths in the file are relative to its folder; absolute ones stay; dots are resolved."""
    path = written(
        "recordings: {folder: ../shots}\nresults: out\nrun_log: logs/night.jsonl\n"
        "metrics: /var/metrics.txt\ncode: {layout: chip.yaml}\n"
    )
    config = load(path)
    assert config.recordings.folder == tmp_path.parent / "shots"
    assert config.results == tmp_path / "out"
    assert config.run_log == tmp_path / "logs" / "night.jsonl"
    assert config.metrics == Path("/var/metrics.txt")
    assert config.code.layout == tmp_path / "chip.yaml"


def test_folders_given_to_a_command_start_where_it_was_called(
    written: Write, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """`--recordings` and `--out` are relative to the working directory, and win."""
    path = written("recordings: {folder: a, patterns: ['*.nc']}\nresults: b\n")
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    monkeypatch.chdir(elsewhere)
    config = load(path, recordings=Path("shots"), out=Path("out"))
    assert config.recordings.folder == elsewhere / "shots"
    assert config.recordings.patterns == ("*.nc",)
    assert config.results == elsewhere / "out"


def test_settings_are_frozen() -> None:
    """Nothing changes a setting after loading."""
    with pytest.raises(Exception, match="frozen"):
        Config().seed = 5  # type: ignore[misc]


SETTINGS: dict[str, st.SearchStrategy[Any]] = {
    "seed": st.integers(0, 2**40),
    "device": st.text("abc 0123456789.:-_on", max_size=12),
    "results": st.sampled_from(["out", "../out", "/somewhere/out"]),
    "recordings.folder": st.sampled_from(["a b", "../c", "010", "12:30"]),
    "recordings.patterns": st.lists(st.sampled_from(["*.nc", "*.zarr", "run-*"]), min_size=1),
    "code.family": st.just("repetition"),
    "code.distance": st.integers(-1, 9),
    "rates.boundary_rounds": st.integers(-1, 4),
    "rates.draws": st.one_of(st.integers(90, 1000), st.just("many"), st.floats(100, 101)),
    "readout.refuse_misfit": st.floats(-1e-3, 1e-1),
    "share.twin": st.booleans(),
    "history.limits.jump": st.floats(0.5, 9.0),
    "history.limits.steady_leakage": st.one_of(st.none(), st.floats(0.0, 1.0)),
    "readout.no_such_key": st.integers(),
}
START = "seed: 3\nrecordings: {folder: shots}\nreadout:\n  adapt: false\n"


@given(st.fixed_dictionaries({}, optional=SETTINGS))
def test_set_equals_editing_the_file(changes: dict[str, Any]) -> None:
    """`--set` gives the config, or the refusals, that the same change in the file gives."""
    edited = yaml.safe_load(START)
    for key, value in changes.items():
        *parts, last = key.split(".")
        target = edited
        for part in parts:
            target = target.setdefault(part, {})
        target[last] = value
    overrides = [f"{key}={yaml_of(value)}" for key, value in changes.items()]
    with tempfile.TemporaryDirectory() as folder:
        start, other = Path(folder) / "start.yaml", Path(folder) / "edited.yaml"
        start.write_text(START)
        other.write_text(
            "\n".join(f"{key}: {yaml_of(value)}" for key, value in edited.items()), encoding="utf-8"
        )
        assert outcome(start, overrides) == outcome(other, [])


def yaml_of(value: Any) -> str:
    """Write a value in one line; strings in quotes, floats as Python prints them."""
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key}: {yaml_of(inner)}" for key, inner in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(map(yaml_of, value)) + "]"
    if isinstance(value, str):
        return '"' + value + '"'
    return {True: "true", False: "false", None: "null"}.get(value, repr(value))


def outcome(path: Path, overrides: list[str]) -> Any:
    """Give the config, or what is wrong with it without the places."""
    try:
        return load(path, overrides)
    except ConfigError as error:
        return sorted(line.split("  ", 1)[-1] for line in str(error).splitlines())


@pytest.mark.parametrize(
    ("override", "sentence"),
    [
        ("rates.draws", "--set rates.draws  must be KEY=VALUE with a dotted key"),
        ("=5", "--set =5  must be KEY=VALUE with a dotted key"),
        ("rates..draws=5", "--set rates..draws=5  must be KEY=VALUE with a dotted key"),
        ("seed=[", "--set seed=[  the value is not valid YAML"),
        ("rates.draws=5", "--set rates.draws  rates.draws  must be >= 100, got 5"),
        (
            "rates.drews=500",
            '--set rates.drews  rates.drews  unknown key; did you mean "draws"?',
        ),
    ],
)
def test_bad_overrides_are_named(written: Write, override: str, sentence: str) -> None:
    """A mistake in `--set` is said of `--set`, not of a line of the file."""
    path = written("seed: 1\n")
    assert message_of(path, override) == f"{sentence}\n1 problem, nothing was run."


def test_overrides_and_the_file_are_refused_together(written: Write) -> None:
    """Mistakes of the command line and of the file are one list."""
    path = written("sead: 1\n")
    lines = message_of(path, "rates.draws=5", "oops").splitlines()
    assert sorted(lines[:-1]) == sorted(
        [
            f'{path}:1  sead  unknown key; did you mean "seed"?',
            "--set rates.draws  rates.draws  must be >= 100, got 5",
            "--set oops  must be KEY=VALUE with a dotted key",
        ]
    )
    assert lines[-1] == "3 problems, nothing was run."
