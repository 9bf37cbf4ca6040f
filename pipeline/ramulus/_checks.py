"""Validators that are given the parameter's name, so that every refusal shows it."""

from collections.abc import Sequence
from math import isfinite
from typing import Any

import numpy as np

from .errors import SpacingError, UnusableInputError

__all__ = ["checked_points", "checked_positive", "checked_spacing_um", "checked_volume"]


def checked_spacing_um(name: str, value: Sequence[float]) -> tuple[float, float, float]:
    """Return three finite positive floats in the order z, y, x."""
    spacing = tuple(float(v) for v in value)
    if len(spacing) != 3:
        msg = f"{name}: found {len(spacing)} values {spacing!r}, expected three: z y x in um"
        raise SpacingError(msg)
    for axis, size_um in zip("zyx", spacing, strict=True):
        if not isfinite(size_um) or size_um <= 0:
            msg = f"{name}: the {axis} spacing is {size_um!r}, expected um > 0"
            raise SpacingError(msg)
    return spacing


def checked_volume(name: str, value: Any, *, dtype: Any = None) -> np.ndarray:
    """Return a 3-D array of at least one voxel, with the dtype asked for."""
    array = np.asarray(value)
    if array.ndim != 3 or array.size == 0:
        msg = f"{name}: found an array of shape {array.shape}, expected (z, y, x) with voxels in it"
        raise UnusableInputError(msg)
    if dtype is not None and array.dtype != np.dtype(dtype):
        msg = f"{name}: found dtype {array.dtype}, expected {np.dtype(dtype)}"
        raise UnusableInputError(msg)
    return array


def checked_points(name: str, value: Any) -> np.ndarray:
    """Return an (n, 3) float64 array of finite positions."""
    array = np.asarray(value, dtype=np.float64)
    if array.ndim != 2 or array.shape[1] != 3:
        msg = f"{name}: found an array of shape {array.shape}, expected (n, 3): z, y, x in um"
        raise UnusableInputError(msg)
    if not np.isfinite(array).all():
        msg = f"{name}: found a position that is not finite"
        raise UnusableInputError(msg)
    return array


def checked_positive(name: str, value: float, *, unit: str = "") -> float:
    """Return a finite float above zero."""
    number = float(value)
    if not isfinite(number) or number <= 0:
        msg = f"{name}: found {value!r}, expected a number > 0 {unit}".rstrip()
        raise UnusableInputError(msg)
    return number
