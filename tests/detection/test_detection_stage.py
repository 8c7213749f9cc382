"""The labelled shell of the detection stage: events, missing readings, pooling, findings."""

from __future__ import annotations

from dataclasses import fields, replace

import numpy as np
import pytest

from leakpipe.codes.events import MISSING
from leakpipe.codes.layout import Layout
from leakpipe.codes.repetition import repetition
from leakpipe.codes.rotated import rotated_surface
from leakpipe.config.detection import DetectionSettings
from leakpipe.detection.stage import DetectionSums, detection, events_of, merge, partial
from leakpipe.findings import findings_of
from leakpipe.recordings.shots import BATCHES, BLOCK, Frame, Readings

SETTINGS = DetectionSettings()


def readings_of(states: np.ndarray, final: np.ndarray, first: int = 0) -> Readings:
    return Readings(
        first=first,
        states=states,
        leak=np.zeros(states.shape, np.float32),
        final_states=final,
        final_leak=np.zeros(final.shape, np.float32),
        prepared=np.zeros(final.shape, np.uint8),
    )


def random_readings(layout: Layout, rounds: int, shots: int, seed: int = 0) -> Readings:
    rng = np.random.default_rng(seed)
    states = rng.choice(3, (shots, rounds, len(layout.measure)), p=[0.92, 0.05, 0.03])
    final = rng.choice(3, (shots, len(layout.data)), p=[0.9, 0.07, 0.03])
    return readings_of(states.astype(np.uint8), final.astype(np.uint8))


def cut(readings: Readings, first: int, stop: int) -> Readings:
    names = ("states", "leak", "final_states", "final_leak", "prepared")
    arrays = {name: getattr(readings, name)[first:stop] for name in names}
    return Readings(first=first, **arrays)


def test_chunked_partial_equals_whole() -> None:
    """Chunks that start at blocks add up to the whole recording to the bit."""
    layout = rotated_surface(3)
    frame = Frame("a", layout, "Z", 7, 5130)
    whole = random_readings(layout, 7, 5130)
    whole.states[17, 3, 2] = MISSING
    parts = [partial(cut(whole, a, b), frame) for a, b in ((0, 1500), (1500, 1550), (1550, 5130))]
    merged = merge(parts[0], merge(parts[1], parts[2]))
    expected = partial(whole, frame)
    for one in fields(DetectionSums):
        np.testing.assert_array_equal(getattr(merged, one.name), getattr(expected, one.name))
    assert merged.missing == 1


def test_chunk_must_start_a_block() -> None:
    """A chunk that starts inside a block is refused, since its local means would be others."""
    layout = rotated_surface(3)
    with pytest.raises(ValueError, match="multiple of 50, got 30 instead"):
        partial(
            replace(random_readings(layout, 3, 100), first=30), Frame("a", layout, "Z", 3, 1000)
        )


@pytest.mark.parametrize("reset", [True, False])
@pytest.mark.parametrize("rounds", [1, 2, 3, 6])
def test_missing_reading_spoils_exactly_the_events_it_enters(rounds: int, reset: bool) -> None:
    """An event is invalid if and only if flipping some missing reading would change it."""
    layout = repetition(3)
    frame = Frame("a", layout, "Z", rounds, 1, reset=reset)
    states = np.zeros((1, rounds, 2), np.uint8)
    final = np.zeros((1, 3), np.uint8)
    base = events_of(readings_of(states, final), frame)[0]
    targets = [(states, (0, r, c)) for r in range(rounds) for c in range(2)]
    targets += [(final, (0, d)) for d in range(3)]
    for array, place in targets:
        array[place] = 1
        flipped = events_of(readings_of(states, final), frame)[0] != base
        array[place] = MISSING
        valid = events_of(readings_of(states, final), frame)[1]
        array[place] = 0
        assert flipped.any()
        np.testing.assert_array_equal(~valid, flipped)


def test_undefined_layers_have_no_trials() -> None:
    """Checks of the other basis have no trials in the first and the closing layer."""
    layout = rotated_surface(3)
    frame = Frame("a", layout, "X", 4, 200)
    sums = partial(random_readings(layout, 4, 200), frame)
    trials = sums.trials.sum(axis=0)
    of_basis = layout.of_basis("X")
    assert (trials[[0, 4]] == 200 * of_basis).all()
    assert (trials[1:4] == 200).all()


def test_products_pool_over_plain_recordings_only() -> None:
    """Products of different durations add up; a run with an injected leak stays out of them."""
    layout = rotated_surface(3)
    frames = [
        Frame("short", layout, "Z", 3, 2500),
        Frame("long", layout, "Z", 6, 2500),
        Frame("injected", layout, "Z", 6, 2500, injected=(layout.data[0], 1, 1.0)),
    ]
    reduced = [
        (frame, partial(random_readings(layout, frame.rounds, 2500, seed), frame))
        for seed, frame in enumerate(frames)
    ]
    out = detection(reduced, SETTINGS)
    assert out["products"].dims == ("batch", "pair", "round", "lag")
    short, long = (np.asarray(sums.products) for _, sums in reduced[:2])
    pooled = out["products"].values
    np.testing.assert_array_equal(pooled[:, :, 1:3], short + long[:, :, :2])
    np.testing.assert_array_equal(pooled[:, :, 3:6], long[:, :, 2:])
    assert not pooled[:, :, 0].any()
    assert out["product_shots"].sum("batch").values.tolist() == [0, 5000, 5000, 2500, 2500, 2500]
    assert out["blocks"].sum("batch").values.tolist() == [0, 100, 100, 50, 50, 50]
    assert out["injected"].values.tolist() == [0, 0, 1]
    assert out["injected_qubit"].values.tolist() == ["", "", layout.data[0]]
    assert out["injected_round"].values.tolist() == [0, 0, 1]
    np.testing.assert_array_equal(out["injected_probability"], [np.nan, np.nan, 1.0])
    assert all("units" in out[name].attrs for name in out.data_vars)
    assert out.attrs["reset"] == 1
    mixed = [(replace(frame, reset=frame.name != "long"), sums) for frame, sums in reduced]
    assert detection(mixed, SETTINGS).attrs["reset"] == 0


@pytest.mark.parametrize("rounds", [1, 2])
def test_few_rounds_and_few_shots_still_count(rounds: int) -> None:
    """One or two rounds and fewer shots than a block give empty products, not a failure."""
    layout = rotated_surface(3)
    frame = Frame("tiny", layout, "Z", rounds, 20)
    out = detection([(frame, partial(random_readings(layout, rounds, 20), frame))], SETTINGS)
    assert out["blocks"].sum() == 0
    assert out["events"].sizes["layer"] == rounds + 1
    assert out["batch_shots"].sum() == 20
    assert "few-shots" in {finding.code for finding in findings_of(out)}


def codes(readings: Readings, frame: Frame) -> dict[str, list[str]]:
    found: dict[str, list[str]] = {}
    for finding in findings_of(detection([(frame, partial(readings, frame))], SETTINGS)):
        found.setdefault(finding.code, []).append(finding.where)
    return found


def test_findings_name_what_is_wrong() -> None:
    """Missing readings and a check whose starting bits are wrong become findings; else none."""
    layout = rotated_surface(3)
    frame = Frame("a", layout, "Z", 5, BATCHES * BLOCK)
    clean = random_readings(layout, 5, frame.shots)
    assert codes(clean, frame) == {}
    check = int(np.flatnonzero(layout.of_basis("Z"))[0])
    wrong = replace(clean, prepared=clean.prepared.copy())
    wrong.prepared[:, layout.touches[check][0]] = 1
    touched = [
        layout.measure[c]
        for c, qubits in enumerate(layout.touches)
        if layout.touches[check][0] in qubits and layout.checks[c] == "Z"
    ]
    assert sorted(codes(wrong, frame)["check-fires-always"]) == sorted(touched)
    lost = replace(clean, states=clean.states.copy())
    lost.states[:, :, check] = MISSING
    found = codes(lost, frame)
    assert found["missing-readings"] == ["a"]
    assert found["check-without-readings"] == [layout.measure[check]]
