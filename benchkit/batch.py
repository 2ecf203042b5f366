"""Dataclasses whose arrays run over a batch, taken apart and multiplied whole."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Index = NDArray[np.intp] | slice
Laws = TypeVar("Laws")


def entries(of: Laws, index: Index) -> Laws:
    """A dataclass with some entries of the batch: of every array in it, however deep.

    An array of one entry holds for the whole batch and stays.
    """
    return _each(of, lambda values: values[index] if values.size > 1 else values)


def repeated(of: Laws, times: int) -> Laws:
    """A dataclass with each entry ``times`` times in a row."""
    return _each(of, lambda values: np.repeat(values, times))


def _each(of: Laws, change: Callable[[Floats], Floats]) -> Laws:
    changed: dict[str, Any] = {}
    for key, value in vars(of).items():
        if isinstance(value, np.ndarray):
            if value.ndim:
                changed[key] = change(value)
        elif dataclasses.is_dataclass(value) and not isinstance(value, type):
            changed[key] = _each(value, change)
    new: Laws = dataclasses.replace(of, **changed) if changed else of  # type: ignore[type-var]
    return new
