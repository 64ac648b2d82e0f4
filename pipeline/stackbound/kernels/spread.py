"""Spread classes: how large the numbers of a neighbourhood are, two classes an octave of their mean magnitude.

A class says which table codes a number and how many low bits go beside it as they are:

* class 0: every number is zero, nothing is coded;
* classes 1 to `DIRECT`: table = class - 1, symbol = number + 128;
* above: the low `shift` bits are written as they are, symbol = (number >> shift) + 128, and the table is one of the two
  last, in turn: at eight and more steps of spread the low bits are as good as uniform (less than 0.001 bit lost).

Numbers that do not fit a symbol are coded as symbol 0 and listed.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stackbound.kernels.jit import inlined, kernel

CELL = 8
"""Residuals have one class per cell of 8 by 8 pixels of a plane (4 by 4 cost 0.05 bit per pixel more)."""

UNIT_BITS = 12
"""A class is computed from a mean magnitude in units of 2**-12."""

DIRECT = 33
"""Classes up to this one, a mean magnitude of 16, are coded without low bits."""

TOP = 100
"""No class is larger: means stay below 2**31."""


@inlined
def class_of(mean: int) -> int:
    """Return the class of a mean magnitude in units of 2**-12: 1 + floor(2 log2(mean)), 0 for 0."""
    if mean <= 0:
        return 0
    octave, rest = 0, mean
    while rest > 1:
        rest >>= 1
        octave += 1
    # mean >= 2**(octave + 1/2), compared in whole numbers; from 2**24 on by the leading bits alone.
    if octave > 24:
        mean, half = mean >> (octave - 24), 24
    else:
        half = octave
    upper = mean * mean >= 1 << (2 * half + 1)
    return 1 + 2 * octave + (1 if upper else 0)


@inlined
def shift_of(spread: int) -> int:
    """Return how many low bits numbers of a class write as they are."""
    return (spread - DIRECT + 1) // 2 if spread > DIRECT else 0


@inlined
def table_of(spread: int) -> int:
    """Return the table of a class above 0."""
    if spread <= DIRECT:
        return spread - 1
    return DIRECT - 2 + (spread - DIRECT + 1) % 2


@kernel
def cell_classes(residuals: NDArray[np.int32], out: NDArray[np.uint8]) -> None:
    """Write the class of each cell of a tile (nz, ny, nx) to `out` (nz, cells down, cells across)."""
    nz, ny, nx = residuals.shape
    for z in range(nz):
        for row in range(out.shape[1]):
            y1 = min(ny, row * CELL + CELL)
            for column in range(out.shape[2]):
                x1 = min(nx, column * CELL + CELL)
                total = 0
                for y in range(row * CELL, y1):
                    for x in range(column * CELL, x1):
                        total += abs(residuals[z, y, x])
                pixels = (y1 - row * CELL) * (x1 - column * CELL)
                mean = (total << UNIT_BITS) // pixels
                out[z, row, column] = max(class_of(mean), 1 if total else 0)


@kernel
def mean_class(residuals: NDArray[np.int32]) -> int:
    """Return the class of the mean magnitude of all residuals, at least 1."""
    total, flat = 0, residuals.ravel()
    for i in range(flat.size):
        total += abs(np.int64(flat[i]))
    return max(class_of((min(total, 1 << 50) << UNIT_BITS) // flat.size), 1)


@kernel
def split(
    residuals: NDArray[np.int32],
    classes: NDArray[np.uint8],
    symbols: NDArray[np.uint8],
    tables: NDArray[np.uint8],
    histogram: NDArray[np.uint32],
) -> tuple[int, int]:
    """Write symbols (nz * ny, runs * 8) and tables (nz * ny, runs); count symbols per table.

    Returns
    -------
    tuple of int
        How many low bits and how many listed numbers there are.
    """
    nz, ny, nx = residuals.shape
    low_bits = listed = 0
    for z in range(nz):
        for y in range(ny):
            for run in range(classes.shape[2]):
                spread = classes[z, y // CELL, run]
                if spread == 0:
                    tables[z * ny + y, run] = 255
                    continue
                shift, table = shift_of(spread), table_of(spread)
                tables[z * ny + y, run] = table
                count = min(CELL, nx - run * CELL)
                for x in range(run * CELL, run * CELL + count):
                    value = residuals[z, y, x] >> shift
                    symbol = value + 128
                    if symbol <= 0 or symbol > 255:
                        symbol = 0
                        listed += 1
                    symbols[z * ny + y, x] = symbol
                    histogram[table, symbol] += 1
                low_bits += shift * count
    return low_bits, listed


@kernel
def split_rest(
    residuals: NDArray[np.int32], classes: NDArray[np.uint8], bits: NDArray[np.uint8], listed: NDArray[np.int64]
) -> None:
    """Pack the low bits (least significant first) of shifted classes and list what did not fit, in coding order."""
    nz, ny, nx = residuals.shape
    at = position = 0
    for z in range(nz):
        for y in range(ny):
            for run in range(classes.shape[2]):
                spread = classes[z, y // CELL, run]
                shift = shift_of(spread)
                for x in range(run * CELL, min(nx, run * CELL + CELL)):
                    value = residuals[z, y, x]
                    for bit in range(shift):
                        bits[at >> 3] |= ((value >> bit) & 1) << (at & 7)
                        at += 1
                    high = value >> shift
                    if spread > 0 and (high <= -128 or high > 127):
                        listed[position] = high
                        position += 1


@kernel
def join_rest(
    residuals: NDArray[np.int32], classes: NDArray[np.uint8], bits: NDArray[np.uint8], listed: NDArray[np.int64]
) -> int:
    """Put listed numbers and low bits back in place; return 0, or 1 if there are too few or too many of either."""
    nz, ny, nx = residuals.shape
    at = position = 0
    for z in range(nz):
        for y in range(ny):
            for run in range(classes.shape[2]):
                spread = classes[z, y // CELL, run]
                shift = shift_of(spread)
                for x in range(run * CELL, min(nx, run * CELL + CELL)):
                    value = np.int64(residuals[z, y, x])
                    if value == -128 and spread > 0:
                        if position >= listed.size:
                            return 1
                        value = np.int64(listed[position])
                        position += 1
                    if shift > 0:
                        if at + shift > bits.size * 8:
                            return 1
                        value <<= shift
                        for bit in range(shift):
                            value |= np.int64((bits[at >> 3] >> (at & 7)) & 1) << bit
                            at += 1
                    residuals[z, y, x] = np.int32(value)
    return 0 if position == listed.size and (at + 7) >> 3 == bits.size else 1


@kernel
def run_tables(classes: NDArray[np.uint8], group: NDArray[np.uint8], rows: int, out: NDArray[np.uint8]) -> None:
    """Write the shared table of each run of eight pixels to `out` (nz * rows, cells across); 255 where all are zero."""
    for z in range(classes.shape[0]):
        for y in range(rows):
            for run in range(classes.shape[2]):
                spread = classes[z, y // CELL, run]
                out[z * rows + y, run] = group[table_of(spread)] if spread > 0 else 255
