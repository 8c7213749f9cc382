"""Reading arrays of netCDF-4 and Zarr recordings a slice at a time.

Automatic masking costs a third of the reading time, so raw values are read and decoded here.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from leakpipe.config.mapping import MappingSettings
from leakpipe.errors import RecordingError
from leakpipe.recordings.contract import Outline
from leakpipe.recordings.mapping import mapped, role_of

SMALL = ("qubit", "prepared", "quadrature", "sample", "round", "measure", "data")
NUMERIC = "iufb"
"""Kinds of numpy types that readings may have; complex points are two quadratures here."""


class Source(Protocol):
    """An open recording."""

    def outline(self) -> Outline:
        """Return what the file says of itself."""

    def read(self, name: str, start: int = 0, stop: int | None = None) -> NDArray[Any]:
        """Return a slice of a variable along its first dimension, as stored."""

    def encoding(self, name: str) -> dict[str, float]:
        """Return scale_factor, add_offset and _FillValue where the variable has them."""


@contextmanager
def opened(path: Path, mapping: MappingSettings | None = None) -> Iterator[Source]:
    """Open a recording for reading.

    Parameters
    ----------
    path
        File or store.
    mapping
        How foreign files are read; files that fit none of its patterns keep the contract.

    Raises
    ------
    RecordingError
        The file is missing, unreadable or truncated.
    """
    if not path.exists():
        raise RecordingError(f"{path}  does not exist")
    role = role_of(path, mapping)
    if mapping is not None and role is not None:
        with mapped(path, mapping, role) as source:
            yield source
        return
    if path.is_dir():
        yield _ZarrSource(path)
        return
    import netCDF4

    try:
        dataset = netCDF4.Dataset(path, "r")
    except (OSError, RuntimeError) as error:
        reason = "is empty" if path.stat().st_size == 0 else f"cannot be opened: {_short(error)}"
        raise RecordingError(f"{path}  {reason} (truncated, or not netCDF-4)") from None
    try:
        dataset.set_auto_maskandscale(False)
        yield _NetcdfSource(dataset)
    except (OSError, RuntimeError, IndexError) as error:
        raise RecordingError(f"{path}  damaged while reading: {_short(error)}") from None
    finally:
        dataset.close()


def _short(error: BaseException) -> str:
    return str(error).splitlines()[0].split("] ")[-1] if str(error) else type(error).__name__


class _NetcdfSource:
    def __init__(self, dataset: Any) -> None:
        self._dataset = dataset

    def outline(self) -> Outline:
        variables = self._dataset.variables
        return Outline(
            attributes={name: self._dataset.getncattr(name) for name in self._dataset.ncattrs()},
            dims={name: tuple(variable.dimensions) for name, variable in variables.items()},
            sizes={name: len(dim) for name, dim in self._dataset.dimensions.items()},
            coordinates={
                name: np.asarray(variables[name][:])
                for name in SMALL
                if name in variables and variables[name].dimensions == (name,)
            },
            numeric={
                name: np.dtype(variable.dtype).kind in NUMERIC
                for name, variable in variables.items()
            },
        )

    def read(self, name: str, start: int = 0, stop: int | None = None) -> NDArray[Any]:
        return np.asarray(self._dataset.variables[name][start:stop])

    def encoding(self, name: str) -> dict[str, float]:
        variable = self._dataset.variables[name]
        return {
            key: float(variable.getncattr(key))
            for key in ("scale_factor", "add_offset", "_FillValue")
            if key in variable.ncattrs()
        }


class _ZarrSource:
    def __init__(self, path: Path) -> None:
        import xarray as xr

        try:
            self._dataset = xr.open_zarr(path, chunks=None, mask_and_scale=False)
        except ImportError:
            raise RecordingError(
                f"{path}  needs the zarr extra: pip install leakpipe[zarr]"
            ) from None
        except Exception as error:  # zarr raises its own classes for damaged stores
            raise RecordingError(f"{path}  cannot be opened: {_short(error)}") from None

    def outline(self) -> Outline:
        data = self._dataset
        return Outline(
            attributes=dict(data.attrs),
            dims={
                str(name): tuple(map(str, variable.dims))
                for name, variable in data.variables.items()
            },
            sizes={str(name): size for name, size in data.sizes.items()},
            coordinates={name: data[name].values for name in SMALL if name in data.coords},
            numeric={
                str(name): variable.dtype.kind in NUMERIC
                for name, variable in data.variables.items()
            },
        )

    def read(self, name: str, start: int = 0, stop: int | None = None) -> NDArray[Any]:
        return np.asarray(self._dataset[name][start:stop].values)

    def encoding(self, name: str) -> dict[str, float]:
        attributes = self._dataset[name].attrs
        keys = ("scale_factor", "add_offset", "_FillValue")
        return {key: float(attributes[key]) for key in keys if key in attributes}


def decoded(raw: NDArray[Any], encoding: dict[str, float]) -> NDArray[np.float32]:
    """Return packed or plain values as float32 with NaN where the fill value stands.

    Parameters
    ----------
    raw
        Values as stored.
    encoding
        scale_factor, add_offset, _FillValue, each optional (netCDF conventions).
    """
    values = raw.astype(np.float32)
    if "scale_factor" in encoding:
        values *= np.float32(encoding["scale_factor"])
    if "add_offset" in encoding:
        values += np.float32(encoding["add_offset"])
    if "_FillValue" in encoding and np.isfinite(encoding["_FillValue"]):
        values[raw == raw.dtype.type(encoding["_FillValue"])] = np.nan
    return values
