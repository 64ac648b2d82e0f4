"""One row of all bands at a time: flat loops that the compiler turns into vector instructions.

All arrays are flat; entry ``column * LANES + lane``. What lies to the left of a pixel lies LANES entries before it, so
no step of a loop waits for the one before. Whole numbers of 32 bits throughout; `stackbound.neighbours` sees to it that
no sum can leave them.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from stackbound.kernels.jit import inlined

LANES = 16
"""Bands of a tile, coded side by side."""

SERIAL = 3
"""Neighbours to the left in the pixel's own row that a prediction may use."""

NEAREST = np.float32(12582912.0)
"""1.5 * 2**23: adding it to a float32 leaves the nearest whole number in the low bits of the sum."""

NEAREST_BITS = np.int32(0x4B400000)

FARTHEST = np.int32(65535)
"""Larger magnitudes count as this in contexts."""


@inlined
def fill(target: Any, value: Any) -> None:
    """Write one value everywhere: a loop compiles in a fraction of the time of a slice assignment."""
    for i in range(target.size):
        target[i] = value


@inlined
def copy(target: Any, source: Any) -> None:
    """Write `source` to `target`; they do not overlap."""
    for i in range(target.size):
        target[i] = source[i]


@inlined
def add_taps(sums: Any, weights: Any, a: Any, b: Any, c: Any, d: Any, e: Any, f: Any, g: Any, h: Any) -> None:
    """Add eight weighted neighbours to the sums of a row."""
    w0, w1, w2, w3, w4, w5, w6, w7 = (
        weights[0], weights[1], weights[2], weights[3], weights[4], weights[5], weights[6], weights[7],
    )  # fmt: skip
    for i in range(sums.size):
        sums[i] += w0 * a[i] + w1 * b[i] + w2 * c[i] + w3 * d[i] + w4 * e[i] + w5 * f[i] + w6 * g[i] + w7 * h[i]


@inlined
def sum_taps(sums: Any, decoded: Any, at: Any, weights: Any, half: Any) -> None:
    """Write the weighted sums of neighbours that begin at entries `at` of `decoded`, a multiple of 8."""
    n = sums.size
    fill(sums, half)
    for k in range(0, at.size, 8):
        add_taps(
            sums, weights[k : k + 8],
            decoded[at[k] : at[k] + n], decoded[at[k + 1] : at[k + 1] + n], decoded[at[k + 2] : at[k + 2] + n],
            decoded[at[k + 3] : at[k + 3] + n], decoded[at[k + 4] : at[k + 4] + n], decoded[at[k + 5] : at[k + 5] + n],
            decoded[at[k + 6] : at[k + 6] + n], decoded[at[k + 7] : at[k + 7] + n],
        )  # fmt: skip


@inlined
def limits(above: Any, low: Any, high: Any) -> None:
    """Write the smallest and largest of the three nearest neighbours in the row above (a column more on each side)."""
    for i in range(low.size):
        a, b, c = above[i], above[i + LANES], above[i + 2 * LANES]
        low[i] = min(min(a, b), c)
        high[i] = max(max(a, b), c)


@inlined
def quantize(
    values: Any, sums: Any, serial: Any, shift: Any, width: Any, low: Any, high: Any, bottom: Any, top: Any,
    scratch: Any, residuals: Any, decoded: Any,
) -> None:  # fmt: skip
    """Predict a row, quantize what is left, and form what the decoder will form.

    `decoded` begins SERIAL columns before the row; `low` and `high` are the smallest and largest value that neighbours
    above allow, widened here by the left neighbour; `bottom` and `top` those of the tile.
    """
    w1, w2, w3 = serial[0], serial[1], serial[2]
    inverse = np.float32(1.0) / np.float32(width)
    bits = scratch.view(np.int32)
    for i in range(sums.size):
        left = decoded[i + 2 * LANES]
        total = np.int32(sums[i] + w1 * left + w2 * decoded[i + LANES] + w3 * decoded[i])
        predicted = min(max(np.int32(total >> shift), min(low[i], left)), max(high[i], left))
        # Exact: the quotient is off by less than 2**-6 / width, and no tie is nearer than 1 / (2 * width).
        scratch[i] = np.float32(np.int32(values[i] - predicted)) * inverse + NEAREST
        steps = np.int32(bits[i] - NEAREST_BITS)
        residuals[i] = steps
        decoded[i + 3 * LANES] = min(max(np.int32(predicted + steps * width), bottom), top)


@inlined
def rebuild(
    residuals: Any, sums: Any, serial: Any, shift: Any, width: Any, low: Any, high: Any, bottom: Any, top: Any,
    decoded: Any,
) -> None:  # fmt: skip
    """Form a row from its residuals."""
    w1, w2, w3 = serial[0], serial[1], serial[2]
    for i in range(sums.size):
        left = decoded[i + 2 * LANES]
        total = np.int32(sums[i] + w1 * left + w2 * decoded[i + LANES] + w3 * decoded[i])
        predicted = min(max(np.int32(total >> shift), min(low[i], left)), max(high[i], left))
        decoded[i + 3 * LANES] = min(max(np.int32(predicted + residuals[i] * width), bottom), top)


@inlined
def smooth(residuals: Any, magnitudes: Any, out: Any) -> None:
    """Write magnitudes weighted 1 2 3 2 1 along the row; `magnitudes` is scratch, two columns wider on each side."""
    n = residuals.size
    for i in range(n):
        magnitudes[i + 2 * LANES] = min(max(residuals[i], np.int32(-residuals[i])), FARTHEST)
    for i in range(2 * LANES):
        magnitudes[i] = magnitudes[2 * LANES + i % LANES]
        magnitudes[n + 2 * LANES + i] = magnitudes[n + LANES + i % LANES]
    for i in range(n):
        out[i] = np.int32(
            magnitudes[i] + magnitudes[i + 4 * LANES]
            + (magnitudes[i + LANES] + magnitudes[i + 3 * LANES]) * np.int32(2)
            + magnitudes[i + 2 * LANES] * np.int32(3)
        )  # fmt: skip


@inlined
def classify(rows: Any, planes: Any, alone: bool, scratch: Any, classes: Any) -> None:
    """Write the class of each pixel: 1 + floor(2 log2 energy), from a float's leading bits; 0 where all is zero.

    The energy adds up smoothed magnitudes of the two rows above and, unless `alone`, of three rows of the plane before;
    a mean magnitude of 1 gives 189 either way.
    """
    n1, n2 = rows
    p0, p1, p2 = planes
    if alone:
        for i in range(scratch.size):
            scratch[i] = np.float32(np.int32(n1[i] * np.int32(14) + n2[i] * np.int32(7)))
    else:
        for i in range(scratch.size):
            scratch[i] = np.float32(
                np.int32((n1[i] * np.int32(2) + n2[i] + p0[i] + p1[i] * np.int32(2) + p2[i]) * np.int32(3))
            )
    bits = scratch.view(np.int32)
    for i in range(scratch.size):
        classes[i] = max(np.int32(np.int32(bits[i] >> np.int32(22)) - np.int32(253)), np.int32(0))
