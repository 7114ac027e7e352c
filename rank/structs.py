"""Rows of structures of arrays: dataclasses whose fields are arrays of N rows, or such dataclasses again."""

from __future__ import annotations

from dataclasses import fields
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Sequence

    from _typeshed import DataclassInstance
    from numpy.typing import NDArray

    Struct = TypeVar("Struct", bound=DataclassInstance)
else:
    Struct = TypeVar("Struct")


def rows_of(struct: Struct, rows: NDArray[np.generic] | slice) -> Struct:
    """Return the chosen rows of every array; fields that are None stay None."""
    return _each(struct, lambda values: values[rows])


def joined(structs: Sequence[Struct]) -> Struct:
    """Return the rows of all, one after the other; matrices are padded with 0 to the widest."""
    return _zipped(list(structs), _stacked)


def placed(struct: Struct, rows: NDArray[np.intp], part: Struct) -> Struct:
    """Return the structure with some of its rows replaced; matrices of the part may be narrower."""

    def put(arrays: list[NDArray[Any]]) -> NDArray[Any]:
        whole, new = arrays[0].copy(), arrays[1]
        if whole.ndim == 1:
            whole[rows] = new
        else:
            whole[rows] = 0
            whole[rows, : new.shape[1]] = new
        return whole

    return _zipped([struct, part], put)


def _each(struct: Struct, change: Any) -> Struct:  # noqa: ANN401 -- arrays of any kind
    return _zipped([struct], lambda arrays: change(arrays[0]))


def _zipped(structs: list[Struct], change: Any) -> Struct:  # noqa: ANN401 -- arrays of any kind
    values: list[Any] = []
    for one in fields(structs[0]):
        parts = [getattr(struct, one.name) for struct in structs]
        if parts[0] is None:
            values.append(None)
        elif isinstance(parts[0], np.ndarray):
            values.append(change(parts))
        else:
            values.append(_zipped(parts, change))
    return type(structs[0])(*values)


def _stacked(arrays: list[NDArray[Any]]) -> NDArray[Any]:
    if arrays[0].ndim == 1:
        return np.concatenate(arrays)
    width = max(array.shape[1] for array in arrays)
    return np.concatenate([np.pad(array, ((0, 0), (0, width - array.shape[1]))) for array in arrays])
