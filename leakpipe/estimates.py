"""An estimate: a number with its interval, or the statement that the data cannot tell.

Every number leakpipe reports is an `Estimate`. Inside a stage's dataset one estimate is stored as
the variables ``name``, ``name_low``, ``name_high`` (float, NaN where unknown),
``name_identifiable`` (bool as int8) and ``name_basis`` (text), all over the same dimensions.
"""

from __future__ import annotations

from collections.abc import Hashable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from scipy.stats import norm, t

LEVEL = 0.95


@dataclass(frozen=True)
class Estimate:
    """A value with its confidence interval.

    Attributes
    ----------
    value
        Point estimate, or None where the data cannot tell.
    low, high
        Ends of the interval. An upper limit has ``value=None``, a ``high`` and
        ``identifiable=False``.
    level
        Confidence level of the interval.
    identifiable
        False where the data do not determine the quantity; then `basis` says why.
    basis
        Which data the number rests on, in words.
    """

    value: float | None
    low: float | None
    high: float | None
    level: float = LEVEL
    identifiable: bool = True
    basis: str = ""

    @classmethod
    def from_error(
        cls,
        value: float,
        error: float,
        basis: str,
        *,
        freedom: float | None = None,
        level: float = LEVEL,
    ) -> Estimate:
        """Return the symmetric interval of a value with a standard error.

        Student's t with `freedom` degrees of freedom where the error itself was estimated from few
        batches; the normal distribution otherwise.
        """
        if not (np.isfinite(value) and np.isfinite(error)):
            return cls.unknown(f"{basis}: no finite error", level=level)
        tail = 0.5 + level / 2
        width = error * float(norm.ppf(tail) if freedom is None else t.ppf(tail, freedom))
        return cls(float(value), float(value - width), float(value + width), level, True, basis)

    @classmethod
    def unknown(cls, reason: str, *, level: float = LEVEL) -> Estimate:
        """Return the estimate of a quantity that the data do not determine."""
        return cls(None, None, None, level, False, reason)

    @classmethod
    def upper_limit(cls, high: float, reason: str, *, low: float = 0.0) -> Estimate:
        """Return a one-sided statement: the quantity is below `high`, no more is known."""
        return cls(None, low, float(high), LEVEL, False, reason)

    def to_json(self) -> dict[str, float | str | bool | None]:
        """Return the estimate as `summary.json` writes it (contract "1")."""
        return {
            "value": self.value,
            "low": self.low,
            "high": self.high,
            "level": self.level,
            "identifiable": self.identifiable,
            "basis": self.basis,
        }


def _number(value: float | None) -> float:
    return np.nan if value is None else value


def store(
    name: str,
    dims: Sequence[str],
    estimates: Estimate | Sequence[Any],
    *,
    units: str = "1",
    long_name: str = "",
) -> dict[str, Any]:
    """Return the variables that hold an array of estimates, ready for `xarray.Dataset`.

    Parameters
    ----------
    name
        Name of the quantity.
    dims
        Dimension names; ``()`` with a single estimate.
    estimates
        One estimate, or nested sequences of them in the shape of `dims`.
    units, long_name
        Attributes of the variables.
    """
    cells = np.empty((), dtype=object) if isinstance(estimates, Estimate) else None
    if cells is None:
        cells = np.array(estimates, dtype=object)
    else:
        cells[()] = estimates
    level = cells.flat[0].level if cells.size else LEVEL
    attrs: dict[str, str | float] = {
        "units": units,
        "long_name": long_name or name,
        "level": level,
    }

    def collect(get: Any, dtype: Any) -> np.ndarray[Any, Any]:
        return np.array([get(cell) for cell in cells.flat], dtype=dtype).reshape(cells.shape)

    return {
        name: (dims, collect(lambda e: _number(e.value), float), attrs),
        f"{name}_low": (dims, collect(lambda e: _number(e.low), float), attrs),
        f"{name}_high": (dims, collect(lambda e: _number(e.high), float), attrs),
        f"{name}_identifiable": (dims, collect(lambda e: e.identifiable, np.int8), {}),
        f"{name}_basis": (dims, collect(lambda e: e.basis, str), {}),
    }


def read(stage: xr.Dataset, name: str, where: Mapping[str, Hashable] | None = None) -> Estimate:
    """Return one estimate from a stage's dataset.

    Parameters
    ----------
    stage
        Dataset with the variables written by `store`.
    name
        Name of the quantity.
    where
        Coordinate value per dimension, for quantities that have dimensions.

    Raises
    ------
    KeyError
        The dataset has no such quantity or coordinate value.
    """
    where = dict(where or {})

    def cell(suffix: str) -> Any:
        return stage[name + suffix].sel(where).item()

    def optional(suffix: str) -> float | None:
        value = float(cell(suffix))
        return value if np.isfinite(value) else None

    return Estimate(
        value=optional(""),
        low=optional("_low"),
        high=optional("_high"),
        level=float(stage[name].attrs.get("level", LEVEL)),
        identifiable=bool(cell("_identifiable")),
        basis=str(cell("_basis")),
    )
