"""The cache: what is put is what is got, damage is a miss, objects are refused."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from leakpipe.history.cache import Cache

KEY = "0123456789abcdef"


def test_arrays_come_back_bit_for_bit(tmp_path: Path) -> None:
    """Types, shapes, NaN and attributes survive."""
    cache = Cache(tmp_path / "cache")
    arrays = {
        "a": np.array([[1.5, np.nan]], dtype=np.float32),
        "n": np.arange(5, dtype=np.int64),
        "names": np.array(["D0", "M10"]),
    }
    cache.put(KEY, arrays, {"shots": 5, "text": "ä"})
    entry = cache.get(KEY)
    assert entry is not None
    assert set(entry.arrays) == set(arrays)
    for name, values in arrays.items():
        assert entry.arrays[name].dtype == values.dtype
        np.testing.assert_array_equal(entry.arrays[name], values)
    assert entry.attributes == {"shots": 5, "text": "ä"}
    assert cache.get("another-key") is None


@pytest.mark.parametrize("keep", [0, 10, 200, -1])
def test_a_damaged_entry_is_a_miss(tmp_path: Path, keep: int) -> None:
    """Cut at any place, an entry is as good as absent, and can be written again."""
    cache = Cache(tmp_path)
    cache.put(KEY, {"x": np.arange(4000.0)}, {})
    for path in tmp_path.iterdir():
        path.write_bytes(path.read_bytes()[:keep])
    assert cache.get(KEY) is None
    cache.put(KEY, {"x": np.arange(3.0)}, {})
    assert cache.get(KEY) is not None


def test_a_flipped_byte_of_an_array_is_a_miss(tmp_path: Path) -> None:
    """The archive's checksum is looked at."""
    cache = Cache(tmp_path)
    cache.put(KEY, {"x": np.arange(4000.0)}, {})
    (path,) = tmp_path.iterdir()
    content = bytearray(path.read_bytes())
    content[20000] ^= 0xFF
    path.write_bytes(bytes(content))
    assert cache.get(KEY) is None


def test_objects_are_refused_and_pickles_never_read(tmp_path: Path) -> None:
    """Nothing executable goes in or comes out."""
    cache = Cache(tmp_path)
    with pytest.raises(ValueError, match="objects"):
        cache.put(KEY, {"x": np.array([{}, []], dtype=object)}, {})
    with (tmp_path / f"{KEY}.npz").open("wb") as handle:
        np.savez(handle, x=np.array([{}], dtype=object), attributes=np.array("{}"))
    assert cache.get(KEY) is None


def test_keys_cannot_leave_the_folder(tmp_path: Path) -> None:
    """A key is a hash, not a path."""
    with pytest.raises(ValueError, match="key"):
        Cache(tmp_path).get("../../etc/passwd")


def test_a_failed_write_leaves_nothing(tmp_path: Path) -> None:
    """What cannot be written whole is not written at all."""
    cache = Cache(tmp_path)
    with pytest.raises(TypeError):
        cache.put(KEY, {"x": np.arange(3.0)}, {"not json": {1, 2}})
    assert list(tmp_path.iterdir()) == []


def test_trimming_removes_what_was_unused_for_longest(tmp_path: Path) -> None:
    """The folder stays within its size; a read keeps an entry young."""
    import os

    cache = Cache(tmp_path)
    for number in range(4):
        cache.put(f"entry-{number:03d}", {"x": np.zeros(1000)}, {})
        os.utime(tmp_path / f"entry-{number:03d}.npz", (number, number))
    assert cache.get("entry-000") is not None
    size = sum(path.stat().st_size for path in tmp_path.iterdir())
    assert cache.trim(size // 2) == 2
    assert cache.get("entry-000") is not None
    assert cache.get("entry-001") is None
