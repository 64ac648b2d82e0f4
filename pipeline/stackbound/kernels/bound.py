"""The residual that pulls a prediction inside the tolerance, and the pixels that come of it."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.kernels.jit import kernel


@kernel
def residual(values: NDArray[np.int32], predicted: NDArray[np.int32], wide: int, out: NDArray[np.int32]) -> None:
    """Write the nearest whole number to ``(value - predicted) / wide`` for an odd `wide`; `out` may be `predicted`.

    In float64 with the reciprocal of `wide` this is exact: an odd divisor leaves the quotient at least 1/(2 wide) from
    a tie, and the two roundings move it by less than 2**-52 times the quotient, for magnitudes below 2**51.
    """
    x, p, r = values.ravel(), predicted.ravel(), out.ravel()
    factor = 1.0 / wide
    for i in range(x.size):
        quotient = np.float64(x[i] - p[i]) * factor
        r[i] = np.int32((quotient + 6755399441055744.0) - 6755399441055744.0)


@kernel
def reconstruct(
    predicted: NDArray[np.int32], residuals: NDArray[np.int32], wide: int, span: int, out: NDArray[np.int32]
) -> None:
    """Write ``clip(predicted + wide * residual, 0, span)``; `out` may be `predicted`.

    Hostile residuals go up to 2**31 in magnitude and `wide` up to 2**25: the sum is formed in float64, exactly below
    2**53 and clipped beyond.
    """
    p, r, x = predicted.ravel(), residuals.ravel(), out.ravel()
    step, most = np.float64(wide), np.float64(span)
    for i in range(p.size):
        x[i] = np.int32(min(max(np.float64(p[i]) + step * np.float64(r[i]), 0.0), most))


@kernel
def residual_each(values: Any, predicted: Any, wide: Any, out: Any) -> None:
    """As `residual` with an odd `wide` (nz, ny, nx) of its own for each pixel, axes of length 1 standing for all."""
    for z in range(values.shape[0]):
        for y in range(values.shape[1]):
            own = wide[z % wide.shape[0], y % wide.shape[1]]
            for x in range(values.shape[2]):
                difference = np.float64(values[z, y, x] - predicted[z, y, x])
                quotient = difference / own[x % own.size]
                out[z, y, x] = np.int32((quotient + 6755399441055744.0) - 6755399441055744.0)


@kernel
def reconstruct_each(predicted: Any, residuals: Any, wide: Any, span: int, out: Any) -> None:
    """As `reconstruct` with a `wide` of its own for each pixel."""
    most = np.float64(span)
    for z in range(predicted.shape[0]):
        for y in range(predicted.shape[1]):
            own = wide[z % wide.shape[0], y % wide.shape[1]]
            for x in range(predicted.shape[2]):
                value = np.float64(predicted[z, y, x]) + np.float64(own[x % own.size]) * np.float64(residuals[z, y, x])
                out[z, y, x] = np.int32(min(max(value, 0.0), most))
