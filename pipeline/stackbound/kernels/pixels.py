"""Stored pixels to lattice values and back."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.kernels.jit import kernel


@kernel
def extremes(pixels: NDArray[Any]) -> tuple[Any, Any]:
    """Return the smallest and the largest of a flat array."""
    low, high = pixels[0], pixels[0]
    for i in range(pixels.size):
        low, high = min(low, pixels[i]), max(high, pixels[i])
    return low, high


@kernel
def lower(pixels: NDArray[Any], low: int, out: NDArray[np.int32]) -> None:
    """Write ``pixel - low``, which is known to fit."""
    for i in range(pixels.size):
        out[i] = np.int32(pixels[i] - low)


@kernel
def raise_(values: NDArray[np.int32], low: int, out: NDArray[Any]) -> None:
    """Write ``value + low`` in the type of `out`, where it is known to fit."""
    for i in range(values.size):
        out[i] = values[i] + low
