"""A tile cut into sixteen bands of rows that are coded side by side, and the walk through it.

Band layout: array (planes, rows of a band, columns, LANES). With n rows in a plane, a band has ceil(n / 16) rows; where
they do not come out even, the last bands have one row less, which stands at the end and is not coded. A row that is not
decoded yet, above the first row of a band, is taken from the plane before.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.kernels.bandcode import decode_row, join_rest
from stackbound.kernels.bandrows import LANES, classify, copy, fill, limits, quantize, rebuild, smooth, sum_taps
from stackbound.kernels.jit import inlined, kernel

HALO = 3
"""Rows and columns around a plane that neighbours may reach into."""


@inlined
def first_row(band: int, rows: int, height: int) -> int:
    """Return the first row of a band when a plane has `height` rows and the longest band `rows`."""
    full = height - LANES * (rows - 1)
    return band * rows - max(0, band - full)


@kernel
def plane_means(values: NDArray[np.int32], out: NDArray[np.int64]) -> None:
    """Write the mean of every fourth row of each plane, rounded down."""
    nz, ny, nx = values.shape
    for z in range(nz):
        total, count = 0, 0
        for y in range(0, ny, 4):
            row = values[z, y]
            for x in range(nx):
                total += row[x]
            count += nx
        out[z] = total // count


@kernel
def to_bands(
    values: NDArray[np.int32], predicted: NDArray[np.int32], offsets: NDArray[np.int64], out: NDArray[np.int32]
) -> None:
    """Write values less what is known of them in band layout.

    Parameters
    ----------
    values : ndarray of int32, shape (nz, ny, nx)
    predicted : ndarray of int32
        A prediction of the same shape, or an empty array.
    offsets : ndarray of int64, shape (nz,)
        What to subtract from each plane where nothing is predicted.
    out : ndarray of int32, shape (nz, rows, nx, LANES)
    """
    nz, ny, nx = values.shape
    rows = out.shape[1]
    for z in range(nz):
        for y in range(rows):
            target = out[z, y]
            for band in range(LANES):
                row = min(first_row(band, rows, ny) + y, ny - 1)
                source = values[z, row]
                if predicted.size:
                    known = predicted[z, row]
                    for x in range(nx):
                        target[x, band] = np.int32(source[x] - known[x])
                else:
                    offset = np.int32(offsets[z])
                    for x in range(nx):
                        target[x, band] = np.int32(source[x] - offset)


@kernel
def from_bands(
    decoded: NDArray[np.int32], predicted: NDArray[np.int32], offsets: NDArray[np.int64], span: int,
    out: NDArray[np.int32],
) -> None:  # fmt: skip
    """Undo `to_bands` and clip to the lattice."""
    nz, ny, nx = out.shape
    rows = decoded.shape[1]
    top = np.int32(span)
    for z in range(nz):
        for y in range(rows):
            source = decoded[z, y]
            for band in range(LANES):
                row = first_row(band, rows, ny) + y
                if row >= first_row(band + 1, rows, ny):
                    continue
                target = out[z, row]
                if predicted.size:
                    known = predicted[z, row]
                    for x in range(nx):
                        target[x] = min(max(np.int32(source[x, band] + known[x]), np.int32(0)), top)
                else:
                    offset = np.int32(offsets[z])
                    for x in range(nx):
                        target[x] = min(max(np.int32(source[x, band] + offset), np.int32(0)), top)


@inlined
def _around(values: Any, row: int, above: int, columns: int) -> None:
    """Extend a row: to the left by the first value of the row above, known before the row is."""
    for i in range(HALO * LANES):
        values[row - HALO * LANES + i] = values[above + i % LANES]


@inlined
def _beyond(values: Any, row: int, columns: int) -> None:
    """Extend a decoded row to the right by its last value."""
    end = row + columns * LANES
    for i in range(HALO * LANES):
        values[end + i] = values[end - LANES + i % LANES]


@inlined
def _neighbour_rows(values: Any, first: int, stride: int, rows: int) -> None:
    """Fill the halo above and below a decoded plane from the bands above and below; the outer ones repeat their own."""
    last = first + (rows - 1) * stride
    for k in range(1, HALO + 1):
        source, target = first + max(rows - k, 0) * stride, first - k * stride
        for i in range(1, stride):
            values[target + i] = values[source + i - 1]
        for i in range(0, stride, LANES):
            values[target + i] = values[first + i]
        source, target = first + min(k - 1, rows - 1) * stride, last + k * stride
        for i in range(stride - 1):
            values[target + i] = values[source + i + 1]
        for i in range(LANES - 1, stride, LANES):
            values[target + i] = values[last + i]


@inlined
def _mean_class(residuals: Any) -> int:
    """Return the class of the mean magnitude of a row (`classify`)."""
    total = 0
    for i in range(residuals.size):
        total += min(abs(np.int64(residuals[i])), 65535)
    energy, spread = 189 * total // residuals.size, 0
    while energy * energy >= 1 << spread:
        spread += 1
    return spread


@kernel
def walk(
    values: NDArray[np.int32], residuals: NDArray[np.int32], classes: NDArray[np.uint8], present: NDArray[np.uint8],
    taps: NDArray[np.int64], weights: NDArray[np.int32], serial: NDArray[np.int32], shift: int, alone: bool,
    clamped: bool, width: int, bottom: int, top: int, decode: bool, first_class: int, tables: NDArray[np.int64],
    slots: NDArray[np.uint32], words: NDArray[np.uint16], states: NDArray[np.uint32], bits: NDArray[np.uint8],
    listed: NDArray[np.int64],
) -> int:  # fmt: skip
    """Go through a tile row by row, all bands at once: predict, quantize or decode, choose the class of each pixel.

    Parameters
    ----------
    values : ndarray of int32, shape (nz, rows, nx, LANES)
        Band layout. What to code when encoding; becomes what is decoded.
    residuals : ndarray of int32, flat
        As many entries when encoding, which writes all; one row (nx * LANES) when decoding.
    classes : ndarray of uint8
        As `residuals`.
    present : ndarray of uint8, shape (nz * rows,)
        How many lanes each row codes.
    taps : ndarray of int64, shape (n, 3)
        (plane, row, column) of neighbours in rows or planes before, relative to the pixel; n a multiple of 8.
    weights, serial : ndarray of int32, shapes (4, n) and (4, SERIAL)
        Weights in units of 2**-shift of those and of the left neighbours, for the first row and the others of the first
        plane, the first row and the others of later planes.
    alone : bool
        Whether classes leave out the plane before.
    clamped : bool
        Whether predictions stay between the smallest and the largest of the four nearest neighbours.
    width : int
        2E + 1.
    bottom, top : int
        Smallest and largest of `values`.
    first_class : int
        Class of the very first row (decoding).
    tables, slots, words, states, bits, listed
        What the range decoder needs; not looked at when encoding.

    Returns
    -------
    int
        Encoding: the class of the very first row. Decoding: how many words were used, or -1 where something runs out.
    """
    nz, rows, nx, _ = values.shape
    n, stride = nx * LANES, (nx + 2 * HALO) * LANES
    plane = (rows + 2 * HALO) * stride
    left, above = HALO * LANES, HALO * stride
    decoded, energy = np.zeros(2 * plane, np.int32), np.zeros(2 * plane, np.int32)
    sums, low, high = np.empty(n, np.int32), np.empty(n, np.int32), np.empty(n, np.int32)
    scratch, magnitudes = np.empty(n, np.float32), np.empty(n + 4 * LANES, np.int32)
    begin, entries, places = np.empty(len(taps), np.int64), np.empty(LANES, np.uint32), np.zeros(2, np.int64)
    shift32, width32, bottom32, top32 = np.int32(shift), np.int32(width), np.int32(bottom), np.int32(top)
    half = np.int32((1 << shift) >> 1)
    flat_values = values.reshape(-1)
    wide = bits.size > 0 or listed.size > 0
    used = 0
    for z in range(nz):
        first = (z & 1) * plane + above + left
        before = (1 - (z & 1)) * plane + above + left
        if z > 0:
            start, known = first - left - above, before - left - above
            copy(decoded[start : start + above], decoded[known : known + above])
            copy(energy[start : start + above], energy[known : known + above])
        for y in range(rows):
            row = first + y * stride
            up, same = row - stride, before + y * stride
            kind = 2 * min(z, 1) + min(y, 1)
            _around(decoded, row, up, nx)
            for k in range(len(taps)):
                begin[k] = (row if taps[k, 0] == 0 else same) + taps[k, 1] * stride + taps[k, 2] * LANES
            sum_taps(sums, decoded, begin, weights[kind], half)
            if clamped and y > 0:
                limits(decoded[up - LANES : up + n + LANES], low, high)
            else:
                fill(low, bottom32)
                fill(high, top32)
            number = z * rows + y
            entry = 0 if decode else number * n
            r, c = residuals[entry : entry + n], classes[entry : entry + n]
            v = flat_values[number * n : number * n + n]
            if number > 0:
                above_rows = (energy[up : up + n], energy[up - stride : up - stride + n])
                upper, lower = same - stride, same + stride
                before_rows = (energy[upper : upper + n], energy[same : same + n], energy[lower : lower + n])
                classify(above_rows, before_rows, alone or z == 0, scratch, c)
            d = decoded[row - left : row + n]
            lanes = np.int64(present[number])
            if decode:
                if number == 0:
                    fill(c, first_class)
                used = decode_row(c, lanes, tables, slots, words, used, states, entries, r)
                if used < 0 or (wide and not join_rest(r, c, bits, listed, places)):
                    return -1
                rebuild(r, sums, serial[kind], shift32, width32, low, high, bottom32, top32, d)
                copy(v, d[left:])
            else:
                quantize(
                    v, sums, serial[kind], shift32, width32, low, high, bottom32, top32, scratch, r, d
                )  # fmt: skip
                if lanes < LANES:
                    for i in range(0, n, LANES):
                        fill(r[i + lanes : i + LANES], 0)
                    rebuild(r, sums, serial[kind], shift32, width32, low, high, bottom32, top32, d)
                copy(v, d[left:])
                if number == 0:
                    first_class = _mean_class(r)
                    fill(c, first_class)
            smooth(r, magnitudes, energy[row : row + n])
            _beyond(decoded, row, nx)
            if y == 0:
                for k in range(1, HALO + 1):
                    start = row - left
                    copy(decoded[start - k * stride : start - k * stride + stride], decoded[start : start + stride])
                    if z == 0:
                        copy(energy[row - k * stride : row - k * stride + n], energy[row : row + n])
        if z + 1 < nz:
            _neighbour_rows(decoded, first - left, stride, rows)
            _neighbour_rows(energy, first - left, stride, rows)
    if decode:
        return used if places[0] == bits.size and places[1] == listed.size else -1
    return first_class
