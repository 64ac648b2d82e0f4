"""Floating-point pixels to lattice steps, and the exact comparison with what they decode to."""

from __future__ import annotations

from typing import Any

import numpy as np

from stackbound.kernels.jit import kernel


@kernel
def to_steps(pixels: Any, low: float, step: float, span: int, out: Any) -> None:
    """Write the nearest lattice value of flat float64 pixels; what is not finite repeats the value before."""
    before = 0
    for i in range(pixels.size):
        if np.isfinite(pixels[i]) and step > 0:
            before = np.int64(min(max(np.rint((pixels[i] - low) / step), 0.0), np.float64(span)))
        out[i] = before


@kernel
def outside(pixels: Any, decoded: Any, tolerance: Any, out: Any) -> None:
    """Mark pixels that are not finite or further than the tolerance (one, or one each) from what they decode to.

    The difference d of two float64 rounds to nearest, so d < t proves that the exact difference is at most t; where
    d = t the rounding error, which the two-sum of Knuth (TAOCP 2, 4.2.2) gives exactly, decides.
    """
    for i in range(pixels.size):
        limit = tolerance[i] if tolerance.size > 1 else tolerance[0]
        a, b = pixels[i], -decoded[i]
        d = a + b
        t = d - a
        error = (a - (d - t)) + (b - t)
        if d < 0:
            d, error = -d, -error
        out[i] = not (np.isfinite(a) and np.isfinite(b) and (d < limit or (d == limit and error <= 0)))
