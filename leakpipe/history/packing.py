"""Nested frozen dataclasses as named arrays and a JSON structure, and back: no pickles."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import fields, is_dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Arrays = dict[str, NDArray[Any]]


def packed(value: object) -> tuple[Arrays, Any]:
    """Take a value apart.

    Parameters
    ----------
    value
        Arrays, plain scalars, None, tuples, lists, mappings with text keys, and dataclasses of
        such.

    Returns
    -------
    arrays, structure
        The arrays by name, and what JSON can write to put them together again.

    Raises
    ------
    TypeError
        Something in the value is of another kind.
    """
    arrays: Arrays = {}
    return arrays, _pack(value, arrays)


def unpacked(arrays: Mapping[str, NDArray[Any]], structure: Any, classes: Sequence[type]) -> Any:
    """Put a value together again.

    Parameters
    ----------
    arrays, structure
        What `packed` returned.
    classes
        The dataclasses that may occur; no other is made.

    Raises
    ------
    ValueError
        The structure is damaged, of another version of a class, or names another class.
    """
    try:
        return _unpack(structure, arrays, {one.__name__: one for one in classes})
    except (KeyError, TypeError, IndexError) as error:
        raise ValueError(f"the packed value cannot be read: {error!r}") from error


def _pack(value: object, arrays: Arrays) -> Any:
    if isinstance(value, np.ndarray):
        if value.dtype.hasobject:
            raise TypeError("an array of Python objects cannot be packed")
        name = f"a{len(arrays)}"
        arrays[name] = value
        return ["array", name]
    if isinstance(value, np.generic):
        # As an array of no dimensions: its type comes back too.
        name = f"a{len(arrays)}"
        arrays[name] = np.asarray(value)
        return ["scalar", name]
    if value is None or isinstance(value, bool | int | float | str):
        return ["plain", value]
    if is_dataclass(value) and not isinstance(value, type):
        inside = {one.name: _pack(getattr(value, one.name), arrays) for one in fields(value)}
        return ["class", type(value).__name__, inside]
    if isinstance(value, tuple | list):
        kind = "tuple" if isinstance(value, tuple) else "list"
        return [kind, [_pack(one, arrays) for one in value]]
    if isinstance(value, Mapping):
        return ["map", {str(key): _pack(one, arrays) for key, one in value.items()}]
    raise TypeError(f"a {type(value).__name__} cannot be packed")


def _unpack(node: Any, arrays: Mapping[str, NDArray[Any]], classes: Mapping[str, type]) -> Any:
    kind, *rest = node
    match kind:
        case "array":
            return arrays[rest[0]]
        case "scalar":
            return arrays[rest[0]][()]
        case "plain":
            return rest[0]
        case "class":
            inside = {name: _unpack(one, arrays, classes) for name, one in rest[1].items()}
            return classes[rest[0]](**inside)
        case "tuple" | "list":
            found = [_unpack(one, arrays, classes) for one in rest[0]]
            return tuple(found) if kind == "tuple" else found
        case "map":
            return {key: _unpack(one, arrays, classes) for key, one in rest[0].items()}
    raise ValueError(f"the packed value holds an unknown kind {kind!r}")
