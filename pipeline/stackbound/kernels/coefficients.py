"""Coefficient indices, frequency by frequency over all blocks of a tile.

How large the indices of a frequency are is sent per band. Where in the tile they are large is foreseen from the lower
frequencies of the same block and of the blocks around it, all decoded before, so the class of every index of one
frequency is known before the first of them is decoded, and nothing waits.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stackbound.kernels.jit import inlined, kernel
from stackbound.kernels.spread import class_of, shift_of, table_of

MAGNITUDE_LIMIT = 4095
"""Larger magnitudes count as this one when classes are foreseen."""

RATIOS = np.array([round(256 * (4 / 3 * 2 ** (j / 2) - 1 / 3)) for j in range(-3, 9)], np.int64)
"""Steps of half an octave of (activity + expected / 3) / (4/3 expected), solved for activity / expected, times 256."""

BELOW = 4
"""So many classes an index lies below its band's when nothing around it is above zero: 1/4 of the expected size."""


@kernel
def median_predict(plane: NDArray[np.int32], out: NDArray[np.int32]) -> None:
    """Write each mean value's (nz, ny, nx) difference from the median of left, upper and their plane through both."""
    for z in range(plane.shape[0]):
        for y in range(plane.shape[1]):
            for x in range(plane.shape[2]):
                out[z, y, x] = plane[z, y, x] - _median(plane, z, y, x)


@kernel
def median_restore(plane: NDArray[np.int32]) -> None:
    """Undo `median_predict` in place."""
    for z in range(plane.shape[0]):
        for y in range(plane.shape[1]):
            for x in range(plane.shape[2]):
                plane[z, y, x] += _median(plane, z, y, x)


@inlined
def _median(plane: NDArray[np.int32], z: int, y: int, x: int) -> int:
    if y == 0 and x == 0:
        return np.int64(plane[z - 1, 0, 0]) if z > 0 else 0
    if y == 0:
        return np.int64(plane[z, 0, x - 1])
    if x == 0:
        return np.int64(plane[z, y - 1, 0])
    left, upper = np.int64(plane[z, y, x - 1]), np.int64(plane[z, y - 1, x])
    slope = left + upper - np.int64(plane[z, y - 1, x - 1])
    return min(max(slope, min(left, upper)), max(left, upper))


@kernel
def band_means(
    indices: NDArray[np.int32],
    order: NDArray[np.int64],
    bands: NDArray[np.int64],
    blocks: int,
    classes: NDArray[np.int64],
) -> None:
    """Write the class of each band's mean magnitude over the first `blocks` blocks."""
    place = 0
    while place < order.size:
        band, total, number = bands[place], 0, 0
        while place < order.size and bands[place] == band:
            row = indices[order[place]]
            for block in range(blocks):
                total += abs(np.int64(row[block]))
            number += blocks
            place += 1
        # The mean in units of 2**-12; a total below 2**43 does not overflow.
        classes[band] = max(class_of((min(total, 1 << 46) << 12) // number), 1 if total else 0)


@inlined
def thresholds(expected: int, out: NDArray[np.int64]) -> None:
    """Write from which activity on an index belongs to the next class; `expected` in units of 2**-12."""
    for j in range(RATIOS.size):
        out[j] = (expected * RATIOS[j]) >> 20


@inlined
def expected_activity(
    place: int, neighbours: NDArray[np.int64], weights: NDArray[np.int64], means: NDArray[np.int64]
) -> int:
    """Return the activity that the bands' means let expect, in units of 2**-12."""
    total = 0
    for n in range(neighbours.shape[1]):
        total += weights[place, n] * min(means[neighbours[place, n]], MAGNITUDE_LIMIT << 12)
    return 8 * total


@inlined
def activity(
    place: int,
    neighbours: NDArray[np.int64],
    weights: NDArray[np.int64],
    magnitudes: NDArray[np.uint16],
    down: int,
    across: int,
    blocks: int,
    own: NDArray[np.int32],
    out: NDArray[np.int32],
) -> None:
    """Write the weighted magnitudes of lower frequencies: four times the block's own and those of its four neighbours."""
    for block in range(blocks):
        own[block] = 0
    for n in range(neighbours.shape[1]):
        weight = np.int32(weights[place, n])
        if weight > 0:
            row = magnitudes[neighbours[place, n]]
            for block in range(blocks):
                own[block] += weight * np.int32(row[block])
    for start in range(0, blocks, across):
        y = (start // across) % down
        upper = start - across if y > 0 else start
        lower = start + across if y < down - 1 else start
        for x in range(across):
            out[start + x] = 4 * own[start + x] + own[upper + x] + own[lower + x]
        out[start] += own[start]
        for x in range(1, across):
            out[start + x] += own[start + x - 1]
            out[start + x - 1] += own[start + x]
        out[start + across - 1] += own[start + across - 1]


@kernel
def classify(
    place: int,
    neighbours: NDArray[np.int64],
    weights: NDArray[np.int64],
    means: NDArray[np.int64],
    magnitudes: NDArray[np.uint16],
    base: int,
    down: int,
    across: int,
    blocks: int,
    own: NDArray[np.int32],
    around: NDArray[np.int32],
    classes: NDArray[np.uint8],
) -> None:
    """Write the class of each index of one frequency."""
    expected = expected_activity(place, neighbours, weights, means)
    if expected == 0:
        for block in range(blocks):
            classes[block] = max(base, 1)
        return
    steps = np.empty(RATIOS.size, np.int64)
    thresholds(expected, steps)
    activity(place, neighbours, weights, magnitudes, down, across, blocks, own, around)
    for block in range(blocks):
        spread = base - BELOW
        for j in range(steps.size):
            spread += 1 if around[block] > steps[j] else 0
        classes[block] = max(spread, 1)


@kernel
def split_indices(
    indices: NDArray[np.int32],
    order: NDArray[np.int64],
    neighbours: NDArray[np.int64],
    weights: NDArray[np.int64],
    bands: NDArray[np.int64],
    band_classes: NDArray[np.int64],
    means: NDArray[np.int64],
    down: int,
    across: int,
    blocks: int,
    symbols: NDArray[np.uint8],
    tables: NDArray[np.uint8],
    histogram: NDArray[np.uint32],
    low_bits: NDArray[np.uint8],
    listed: NDArray[np.int64],
) -> tuple[int, int, int]:
    """Write symbols and tables in coding order, low bits and listed numbers; return how many of each of the three."""
    magnitudes = np.zeros((order.size, blocks), np.uint16)
    own, around = np.empty(blocks, np.int32), np.empty(blocks, np.int32)
    classes = np.empty(blocks, np.uint8)
    padded = (blocks + 7) // 8 * 8
    at = bits = position = 0
    for place in range(order.size):
        base = band_classes[bands[place]]
        if base == 0:
            continue
        row = indices[order[place]]
        classify(place, neighbours, weights, means, magnitudes, base, down, across, blocks, own, around, classes)
        for block in range(blocks):
            shift, table = shift_of(classes[block]), table_of(classes[block])
            value = row[block]
            magnitudes[order[place], block] = min(abs(value), MAGNITUDE_LIMIT)
            for bit in range(shift):
                low_bits[bits >> 3] |= ((value >> bit) & 1) << (bits & 7)
                bits += 1
            symbol = (value >> shift) + 128
            if symbol <= 0 or symbol > 255:
                listed[position] = value >> shift
                position += 1
                symbol = 0
            symbols[at + block] = symbol
            tables[at + block] = table
            histogram[table, symbol] += 1
        for block in range(blocks, padded):
            tables[at + block] = 255
        at += padded
    return at, bits, position


@kernel
def join_indices(
    order: NDArray[np.int64],
    neighbours: NDArray[np.int64],
    weights: NDArray[np.int64],
    bands: NDArray[np.int64],
    band_classes: NDArray[np.int64],
    means: NDArray[np.int64],
    down: int,
    across: int,
    blocks: int,
    group: NDArray[np.uint8],
    table_slots: NDArray[np.uint32],
    words: NDArray[np.uint16],
    states: NDArray[np.uint32],
    low_bits: NDArray[np.uint8],
    listed: NDArray[np.int64],
    indices: NDArray[np.int32],
) -> int:
    """Decode all indices into `indices` (frequencies, blocks); return 0, or 1 where bytes run out or are left over."""
    magnitudes = np.zeros((order.size, blocks), np.uint16)
    own, around = np.empty(blocks, np.int32), np.empty(blocks, np.int32)
    classes = np.empty(blocks, np.uint8)
    limit = words.size - 8
    word = bits = position = 0
    for place in range(order.size):
        base = band_classes[bands[place]]
        row = indices[order[place]]
        if base == 0:
            for block in range(blocks):
                row[block] = 0
            continue
        classify(place, neighbours, weights, means, magnitudes, base, down, across, blocks, own, around, classes)
        for start in range(0, blocks, 8):
            if word > limit:
                return 1
            for lane in range(min(8, blocks - start)):
                x = states[lane]
                entry = table_slots[group[table_of(classes[start + lane])], x & np.uint32(4095)]
                x = ((entry >> np.uint32(20)) + np.uint32(1)) * (x >> np.uint32(12)) + (
                    (entry >> np.uint32(8)) & np.uint32(4095)
                )
                if x < np.uint32(65536):
                    x = (x << np.uint32(16)) | np.uint32(words[word])
                    word += 1
                states[lane] = x
                row[start + lane] = np.int32(entry & np.uint32(255)) - 128
        for block in range(blocks):
            shift, value = shift_of(classes[block]), np.int64(row[block])
            if value == -128:
                if position >= listed.size:
                    return 1
                value = listed[position]
                position += 1
            if shift > 0:
                if bits + shift > low_bits.size * 8:
                    return 1
                value <<= shift
                for bit in range(shift):
                    value |= np.int64((low_bits[bits >> 3] >> (bits & 7)) & 1) << bit
                    bits += 1
            row[block] = np.int32(value)
            magnitudes[order[place], block] = min(abs(np.int64(row[block])), MAGNITUDE_LIMIT)
    return 0 if word == limit and position == listed.size and (bits + 7) >> 3 == low_bits.size else 1
