"""Named arrays of HDF5, netCDF, Zarr and NPZ files, read a slice at a time, nothing executed.

HDF5 opens through the netCDF-4 library. An array of an NPZ archive is read whole: its format knows
no slices, so keep long recordings in one of the others.
"""

from __future__ import annotations

import zipfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from leakpipe.errors import RecordingError

ENCODING = ("scale_factor", "add_offset", "_FillValue")
Index = tuple[slice, ...]


class Arrays(Protocol):
    """An open file of named arrays."""

    attributes: Mapping[str, Any]

    def __contains__(self, name: str) -> bool: ...

    def shape(self, name: str) -> tuple[int, ...]:
        """Return an array's shape."""

    def dtype(self, name: str) -> np.dtype[Any]:
        """Return an array's type."""

    def read(self, name: str, index: Index) -> NDArray[Any]:
        """Return a part of an array, as stored; an empty index is the whole."""

    def encoding(self, name: str) -> dict[str, float]:
        """Return scale_factor, add_offset and _FillValue where the array has them."""


@contextmanager
def foreign(path: Path) -> Iterator[Arrays]:
    """Open a file of named arrays by its suffix: `.npz`, a folder (Zarr), or HDF5 and netCDF.

    Raises
    ------
    RecordingError
        The file is missing, cannot be opened, turns out damaged, or holds pickled objects.
    """
    if not path.exists():
        raise RecordingError(f"{path}  does not exist")
    try:
        if path.is_dir():
            yield _ZarrArrays(path)
        elif path.suffix == ".npz":
            with np.load(path, allow_pickle=False) as archive:
                yield _NpzArrays(archive)
        else:
            import netCDF4

            with netCDF4.Dataset(path, "r") as dataset:
                dataset.set_auto_maskandscale(False)
                yield _HdfArrays(dataset)
    except ImportError:
        raise RecordingError(f"{path}  needs the zarr extra: pip install leakpipe[zarr]") from None
    except (OSError, RuntimeError, ValueError, EOFError, zipfile.BadZipFile) as error:
        reason = str(error).splitlines()[0] if str(error) else type(error).__name__
        raise RecordingError(f"{path}  cannot be read: {reason}") from None


class _NpzArrays:
    def __init__(self, archive: Any) -> None:
        self._archive = archive
        self._loaded: dict[str, NDArray[Any]] = {}
        self.attributes: Mapping[str, Any] = {}

    def __contains__(self, name: str) -> bool:
        return name in self._archive.files

    def _array(self, name: str) -> NDArray[Any]:
        if name not in self._loaded:
            self._loaded[name] = self._archive[name]
        return self._loaded[name]

    def shape(self, name: str) -> tuple[int, ...]:
        return self._array(name).shape

    def dtype(self, name: str) -> np.dtype[Any]:
        return np.dtype(self._array(name).dtype)

    def read(self, name: str, index: Index) -> NDArray[Any]:
        return self._array(name)[index]

    def encoding(self, name: str) -> dict[str, float]:
        return {}


class _HdfArrays:
    def __init__(self, dataset: Any) -> None:
        self._dataset = dataset
        self.attributes: Mapping[str, Any] = {
            name: dataset.getncattr(name) for name in dataset.ncattrs()
        }

    def _variable(self, name: str) -> Any:
        *groups, last = name.strip("/").split("/")
        group = self._dataset
        for part in groups:
            group = group.groups[part]
        return group.variables[last]

    def __contains__(self, name: str) -> bool:
        try:
            self._variable(name)
        except KeyError:
            return False
        return True

    def shape(self, name: str) -> tuple[int, ...]:
        return tuple(self._variable(name).shape)

    def dtype(self, name: str) -> np.dtype[Any]:
        kind: np.dtype[Any] = np.dtype(self._variable(name).dtype)
        return kind

    def read(self, name: str, index: Index) -> NDArray[Any]:
        return np.asarray(self._variable(name)[index or ...])

    def encoding(self, name: str) -> dict[str, float]:
        variable = self._variable(name)
        found = variable.ncattrs()
        return {key: float(variable.getncattr(key)) for key in ENCODING if key in found}


class _ZarrArrays:
    def __init__(self, path: Path) -> None:
        import zarr

        self._group: Any = zarr.open_group(path, mode="r")
        self.attributes: Mapping[str, Any] = dict(self._group.attrs)

    def __contains__(self, name: str) -> bool:
        return name in self._group and hasattr(self._group[name], "dtype")

    def shape(self, name: str) -> tuple[int, ...]:
        return tuple(self._group[name].shape)

    def dtype(self, name: str) -> np.dtype[Any]:
        kind: np.dtype[Any] = np.dtype(self._group[name].dtype)
        return kind

    def read(self, name: str, index: Index) -> NDArray[Any]:
        return np.asarray(self._group[name][index or ...])

    def encoding(self, name: str) -> dict[str, float]:
        attributes = self._group[name].attrs
        return {key: float(attributes[key]) for key in ENCODING if key in attributes}
