"""Coefficients to indices and indices to whole-number coefficients."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.kernels.jit import kernel


@kernel
def _nearest(coefficients: NDArray[np.float32], inverse: NDArray[np.float32], out: NDArray[np.int32]) -> None:
    limit = np.float32(2.0**30)
    for frequency in range(coefficients.shape[0]):
        factor = inverse[frequency]
        for block in range(coefficients.shape[1]):
            value = np.float32(coefficients[frequency, block] * factor)
            value = min(max(value, -limit), limit)
            # Half away from zero: the cast truncates.
            out[frequency, block] = np.int32(value + (np.float32(0.5) if value >= 0 else np.float32(-0.5)))


def nearest(coefficients: NDArray[np.float32], steps: NDArray[np.float64]) -> NDArray[np.int32]:
    """Return the nearest index of every coefficient.

    Parameters
    ----------
    coefficients : ndarray of float32, shape (n, bz, by, bx)
        First axis fastest in memory.
    steps : ndarray of float64, shape (bz, by, bx)
        One step per frequency.

    Returns
    -------
    ndarray of int32, shape (n, bz, by, bx)
        In the memory order of `coefficients`.
    """
    blocks = np.moveaxis(coefficients, 0, -1)
    flat = np.ascontiguousarray(blocks).reshape(-1, blocks.shape[-1])
    out = np.empty(flat.shape, np.int32)
    _nearest(flat, (1.0 / steps).astype(np.float32).ravel(), out)
    return np.moveaxis(out.reshape(blocks.shape), -1, 0)


@kernel
def dequantize(
    indices: NDArray[Any], steps: NDArray[np.int64], limit: int, first: int, count: int, out: NDArray[np.float64]
) -> None:
    """Write ``clip(index * step)`` of blocks ``first .. first + count`` into `out` (frequencies, lanes).

    The product is formed in float64: both factors are below 2**31, so it is exact or far beyond the limit.
    """
    most = np.float64(limit)
    for frequency in range(out.shape[0]):
        step = np.float64(steps[frequency])
        for lane in range(count):
            value = np.float64(indices[frequency, first + lane]) * step
            out[frequency, lane] = min(max(value, -most), most)
        for lane in range(count, out.shape[1]):
            out[frequency, lane] = 0.0
