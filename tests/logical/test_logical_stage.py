"""The logical stage: verdicts, our decoder, findings about how runs were taken."""

from __future__ import annotations

import numpy as np

from leakpipe.codes.rotated import rotated_surface
from leakpipe.config.logical import LogicalSettings
from leakpipe.estimates import read
from leakpipe.findings import findings_of
from leakpipe.logical.stage import LogicalSums, logical, merge, partial, prepare
from leakpipe.recordings.shots import Frame, Readings
from leakpipe.rehearsal.memory import simulate
from leakpipe.rehearsal.noise import MemoryNoise

LAYOUT = rotated_surface(3)


def _readings(rounds: int, shots: int, seed: int, *, verdict: bool) -> tuple[Frame, Readings]:
    rng = np.random.default_rng(seed)
    one = simulate(LAYOUT, "Z", rounds, shots, MemoryNoise(measurement=0.02), rng)
    frame = Frame(f"R{rounds}", LAYOUT, "Z", rounds, shots)
    leak = (one.states == 2).astype(np.float32)
    closing = (one.final_states == 2).astype(np.float32)
    answer = rng.integers(0, 2, shots).astype(np.uint8) if verdict else None
    return frame, Readings(0, one.states, leak, one.final_states, closing, one.prepared, answer)


def _sums(
    rounds: int, seed: int, failing: float, *, start: float = 0.5
) -> tuple[Frame, LogicalSums]:
    rng = np.random.default_rng(seed)
    shots = 5000
    frame = Frame(f"R{rounds}", LAYOUT, "Z", rounds, shots)
    return frame, LogicalSums(
        (rng.random(shots) < failing).astype(np.uint8),
        (rng.random(shots) < start).astype(np.uint8),
        frame.batch_of(0, shots),
    )


def test_verdict_counts_unless_the_config_says_matching() -> None:
    """A recording's verdict is used as it stands; decoder "matching" decodes instead."""
    frame, readings = _readings(5, 2000, 1, verdict=True)
    assert prepare(readings, frame, LogicalSettings()) is None
    by_verdict = partial(readings, frame, None)
    assert readings.verdict is not None
    np.testing.assert_array_equal(by_verdict.failed, readings.verdict)
    decoder = prepare(readings, frame, LogicalSettings(decoder="matching"))
    assert decoder is not None
    # The verdicts here are coin tosses; a decoder does far better.
    assert partial(readings, frame, decoder).failed.mean() < 0.25


def test_chunks_joined_equal_the_whole() -> None:
    """Outcomes of two runs of shots, merged in order, are those of the whole."""
    frame, readings = _readings(4, 1000, 2, verdict=False)
    decoder = prepare(readings, frame, LogicalSettings())
    assert decoder is not None
    whole = partial(readings, frame, decoder)

    def part(start: int, stop: int) -> LogicalSums:
        here = slice(start, stop)
        return partial(
            Readings(
                start,
                readings.states[here],
                readings.leak[here],
                readings.final_states[here],
                readings.final_leak[here],
                readings.prepared[here],
            ),
            frame,
            decoder,
        )

    joined = merge(part(0, 400), part(400, 1000))
    for name in ("failed", "start", "batch"):
        np.testing.assert_array_equal(getattr(joined, name), getattr(whole, name))


def test_rounds_below_the_first_are_left_out() -> None:
    """R = 1 is shown but not fitted; the range of R is stated."""
    eps = 0.02
    recordings = [
        _sums(r, r, (1 - (1 - 2 * eps) ** r) / 2 if r > 1 else 0.3) for r in (1, 3, 6, 10, 15)
    ]
    out = logical(recordings, LogicalSettings())
    assert out["used"].values.tolist() == [0, 1, 1, 1, 1]
    assert out.attrs["range_of_rounds"] == "3 to 15"
    estimate = read(out, "logical_error_per_round")
    assert estimate.low is not None
    assert estimate.high is not None
    assert estimate.low < eps < estimate.high


def test_unbalanced_starts_and_few_durations_are_findings() -> None:
    """Starting values far off balance, and two durations only, are said."""
    out = logical([_sums(3, 1, 0.05, start=0.8), _sums(9, 2, 0.14, start=0.8)], LogicalSettings())
    codes = {finding.code for finding in findings_of(out)}
    assert {"unbalanced-starts", "few-durations"} <= codes


def test_one_duration_is_not_identifiable() -> None:
    """One number of rounds gives no error per round, and says what would be needed."""
    out = logical([_sums(9, 2, 0.14)], LogicalSettings())
    estimate = read(out, "logical_error_per_round")
    assert estimate.value is None
    assert "two or more different numbers of rounds" in estimate.basis
