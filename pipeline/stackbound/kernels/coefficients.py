"""Coefficient indices, frequency by frequency over all blocks of a tile.

How large the indices of a frequency are is sent per band. Where in the tile they are large is foreseen from the lower
frequencies of the same block and of the blocks around it, all decoded before, so the class of every index of one
frequency is known before the first of them is decoded, and nothing waits.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stackbound.kernels.jit import Array, inlined, kernel
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
def last_bands(indices: Array, order: Array, bands: Array, blocks: int, last: Array) -> None:
    """Write how many bands of each block there are up to its last index that is not zero."""
    for block in range(blocks):
        last[block] = 0
    for place in range(order.size):
        row = indices[order[place]]
        for block in range(blocks):
            if row[block] != 0:
                last[block] = bands[place] + 1


@kernel
def band_means(indices: Array, order: Array, bands: Array, last: Array, classes: Array) -> None:
    """Write the class of each band's mean magnitude over the blocks that reach the band."""
    place = 0
    while place < order.size:
        band, total, number = bands[place], 0, 0
        while place < order.size and bands[place] == band:
            row = indices[order[place]]
            for block in range(last.size):
                if last[block] > band:
                    total += abs(np.int64(row[block]))
                    number += 1
            place += 1
        # The mean in units of 2**-12; a total below 2**46 does not overflow.
        classes[band] = max(class_of((min(total, 1 << 46) << 12) // max(number, 1)), 1 if total else 0)


@inlined
def expected_activity(place: int, neighbours: Array, weights: Array, means: Array) -> int:
    """Return the activity that the bands' means let expect, in units of 2**-12."""
    total = 0
    for n in range(neighbours.shape[1]):
        total += weights[place, n] * min(means[neighbours[place, n]], MAGNITUDE_LIMIT << 12)
    return 8 * total


@inlined
def select(last: Array, band: int, active: Array) -> int:
    """Write the blocks that reach a band to `active` and return how many they are."""
    count = 0
    for block in range(last.size):
        active[count] = block
        count += 1 if last[block] > band else 0
    return count


@inlined
def classify(
    place: int,
    neighbours: Array,
    weights: Array,
    means: Array,
    magnitudes: Array,
    base: int,
    grid: Array,
    active: Array,
    count: int,
    own: Array,
    around: Array,
    classes: Array,
) -> None:
    """Write the class of each index of one frequency, for the active blocks.

    The activity of a block is the weighted sum of the magnitudes of lower frequencies, four times its own and once
    those of its four neighbours in the plane; a block at the border counts as its own neighbour. Each step of half an
    octave that it lies above is one class more.
    """
    expected = expected_activity(place, neighbours, weights, means)
    if expected == 0:
        for i in range(count):
            classes[i] = max(base, 1)
        return
    down, across = grid[1], grid[2]
    blocks = own.size
    for block in range(blocks):
        own[block] = 0
    for n in range(neighbours.shape[1]):
        weight = np.int32(weights[place, n])
        if weight > 0:
            row = magnitudes[neighbours[place, n]]
            for block in range(blocks):
                own[block] += np.int32(weight * np.int32(row[block]))
    for i in range(count):
        block = active[i]
        x, y = block % across, (block // across) % down
        left = block - 1 if x > 0 else block
        right = block + 1 if x < across - 1 else block
        upper = block - across if y > 0 else block
        lower = block + across if y < down - 1 else block
        around[i] = np.int32(4 * own[block] + own[left] + own[right] + own[upper] + own[lower])
        classes[i] = max(base - BELOW, 0)
    # A base below the range starts at class 0, so its first steps count for nothing.
    missing = max(BELOW - base, 0)
    for j in range(missing, RATIOS.size):
        step = np.int32(min((expected * RATIOS[j]) >> 20, 2**31 - 1))
        for i in range(count):
            classes[i] += np.uint8(around[i] > step)
    for i in range(count):
        classes[i] = max(classes[i], np.uint8(1))


@kernel
def split_indices(
    indices: Array,
    order: Array,
    neighbours: Array,
    weights: Array,
    bands: Array,
    band_classes: Array,
    means: Array,
    grid: Array,
    last: Array,
    symbols: Array,
    tables: Array,
    histogram: Array,
    low_bits: Array,
    listed: Array,
) -> tuple[int, int, int]:
    """Write symbols and tables in coding order, low bits and listed numbers; return how many of each of the three."""
    blocks = last.size
    magnitudes = np.zeros((order.size, blocks), np.uint16)
    own, around = np.empty(blocks, np.int32), np.empty(blocks, np.int32)
    classes, active = np.empty(blocks, np.uint8), np.empty(blocks + 1, np.int64)
    at = bits = position = count = 0
    before = -1
    for place in range(order.size):
        band = bands[place]
        base = band_classes[band]
        if band != before:
            count = select(last, band, active)
            before = band
        if base == 0 or count == 0:
            continue
        row, kept = indices[order[place]], magnitudes[order[place]]
        classify(place, neighbours, weights, means, magnitudes, base, grid, active, count, own, around, classes)
        for i in range(count):
            shift, table = shift_of(classes[i]), table_of(classes[i])
            value = row[active[i]]
            kept[active[i]] = min(abs(np.int64(value)), MAGNITUDE_LIMIT)
            for bit in range(shift):
                low_bits[bits >> 3] |= ((value >> bit) & 1) << (bits & 7)
                bits += 1
            symbol = (value >> shift) + 128
            if symbol <= 0 or symbol > 255:
                listed[position] = value >> shift
                position += 1
                symbol = 0
            symbols[at + i] = symbol
            tables[at + i] = table
            histogram[table, symbol] += 1
        padded = (count + 7) // 8 * 8
        for i in range(count, padded):
            tables[at + i] = 255
        at += padded
    return at, bits, position


@kernel
def join_indices(
    order: Array,
    neighbours: Array,
    weights: Array,
    bands: Array,
    band_classes: Array,
    means: Array,
    grid: Array,
    last: Array,
    group: Array,
    table_slots: Array,
    words: Array,
    states: Array,
    low_bits: Array,
    listed: Array,
    indices: Array,
) -> int:
    """Decode indices into zeros (frequencies, blocks); return 0, or 1 where bytes run out or are left over."""
    blocks = last.size
    magnitudes = np.zeros((order.size, blocks), np.uint16)
    own, around = np.empty(blocks, np.int32), np.empty(blocks, np.int32)
    classes, active = np.empty(blocks, np.uint8), np.empty(blocks + 1, np.int64)
    limit = words.size - 8
    word = bits = position = count = 0
    before = -1
    for place in range(order.size):
        band = bands[place]
        base = band_classes[band]
        if band != before:
            count = select(last, band, active)
            before = band
        if base == 0 or count == 0:
            continue
        row, kept = indices[order[place]], magnitudes[order[place]]
        classify(place, neighbours, weights, means, magnitudes, base, grid, active, count, own, around, classes)
        for start in range(0, count, 8):
            if word > limit:
                return 1
            for lane in range(min(8, count - start)):
                spread = classes[start + lane]
                x = states[lane]
                entry = table_slots[group[table_of(spread)], x & np.uint32(4095)]
                x = ((entry >> np.uint32(20)) + np.uint32(1)) * (x >> np.uint32(12)) + (
                    (entry >> np.uint32(8)) & np.uint32(4095)
                )
                if x < np.uint32(65536):
                    x = (x << np.uint32(16)) | np.uint32(words[word])
                    word += 1
                states[lane] = x
                value = np.int64(entry & np.uint32(255)) - 128
                if value == -128:
                    if position >= listed.size:
                        return 1
                    value = listed[position]
                    position += 1
                shift = shift_of(spread)
                if shift > 0:
                    if bits + shift > low_bits.size * 8:
                        return 1
                    value <<= shift
                    for bit in range(shift):
                        value |= np.int64((low_bits[bits >> 3] >> (bits & 7)) & 1) << bit
                        bits += 1
                block = active[start + lane]
                row[block] = np.int32(value)
                kept[block] = min(abs(np.int64(row[block])), MAGNITUDE_LIMIT)
    return 0 if word == limit and position == listed.size and (bits + 7) >> 3 == low_bits.size else 1
