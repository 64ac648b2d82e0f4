"""Static frequency tables: from counts to 12-bit frequencies, which tables to share, and how they are written.

A frequency is sent as a level, exact below 16 and with eight levels an octave above (0.0005 bit per symbol lost), as
the difference from the level before. The decoder scales the levels' values to a sum of 2**12.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.kernels.jit import inlined, kernel

TOTAL = 4096
SYMBOLS = 256
TOP_LEVEL = 80
"""The level of 4096."""


@inlined
def level_of(frequency: int) -> int:
    """Return the level at or just below a frequency from 0 to 4096."""
    octave, rest = 0, frequency
    while rest >= 16:
        rest >>= 1
        octave += 1
    return rest + 8 * octave if octave else frequency


@inlined
def value_of(level: int) -> int:
    """Return the smallest frequency of a level."""
    if level < 16:
        return level
    octave = (level - 8) // 8
    return (level - 8 * octave) << octave


@inlined
def log2_fixed(value: int, fractions: Any) -> int:
    """Return log2 of a positive whole number in units of 2**-12, from a table of 1024 mantissas."""
    octave, rest = 0, value
    while rest >= 2048:
        rest >>= 1
        octave += 1
    if rest < 1024:
        shifted = rest
        while shifted < 1024:
            shifted <<= 1
            octave -= 1
        rest = shifted
    return ((octave + 10) << 12) + fractions[rest - 1024]


FRACTIONS: NDArray[np.int64] = np.rint(np.log2(1 + np.arange(1024) / 1024) * 4096).astype(np.int64)


@inlined
def cost(counts: Any, fractions: Any) -> int:
    """Return about how many bits (in units of 2**-12) the counted symbols and their table take."""
    total, span, first, last = 0, 0, -1, -1
    for symbol in range(counts.size):
        total += counts[symbol]
        if counts[symbol] > 0:
            last = symbol
            if first < 0:
                first = symbol
    if total == 0:
        return 0
    whole = log2_fixed(total, fractions)
    bits = 0
    for symbol in range(first, last + 1):
        if counts[symbol] > 0:
            # No frequency is below 1/4096.
            bits += counts[symbol] * min(whole - log2_fixed(np.int64(counts[symbol]), fractions), 12 << 12)
    span = last - first + 1
    return bits + ((16 + span * 5 // 2) << 12)


@kernel
def costs(histogram: NDArray[np.uint32], fractions: NDArray[np.int64]) -> int:
    """Return about how many bits (in units of 2**-12) the symbols counted under several tables take."""
    total = 0
    for table in range(histogram.shape[0]):
        total += cost(histogram[table], fractions)
    return total


@kernel
def share(
    histogram: NDArray[np.uint32], group: NDArray[np.uint8], fractions: NDArray[np.int64], most: int = 256
) -> int:
    """Merge neighbouring tables while that saves bits; `histogram` becomes one row per group.

    Parameters
    ----------
    histogram : ndarray of uint32, shape (tables, 256)
    group : ndarray of uint8, shape (tables,)
        Receives the group of each table; tables without symbols join the group before them.
    most : int
        Tables are merged at a loss until there are no more than this: fewer stay in the processor's nearest cache.

    Returns
    -------
    int
        How many groups there are, at least 1.
    """
    tables = histogram.shape[0]
    costs, gains = np.zeros(tables, np.int64), np.zeros(tables, np.int64)
    both = np.empty(histogram.shape[1], np.uint32)
    members = 0
    for table in range(tables):
        used = False
        for symbol in range(histogram.shape[1]):
            used |= histogram[table, symbol] > 0
        if used:
            for symbol in range(histogram.shape[1]):
                histogram[members, symbol] = histogram[table, symbol]
            costs[members] = cost(histogram[members], fractions)
            members += 1
        group[table] = max(members - 1, 0)
    for left in range(members - 1):
        gains[left] = _gain(histogram, left, costs, fractions, both)
    while members > 1:
        left = 0
        for at in range(1, members - 1):
            left = at if gains[at] > gains[left] else left
        if gains[left] <= 0 and members <= most:
            break
        for symbol in range(histogram.shape[1]):
            histogram[left, symbol] += histogram[left + 1, symbol]
        costs[left] = cost(histogram[left], fractions)
        members -= 1
        for at in range(left + 1, members):
            costs[at], gains[at] = costs[at + 1], gains[at + 1]
            for symbol in range(histogram.shape[1]):
                histogram[at, symbol] = histogram[at + 1, symbol]
        for table in range(tables):
            group[table] -= 1 if group[table] > left else 0
        for at in range(max(0, left - 1), min(left + 1, members - 1)):
            gains[at] = _gain(histogram, at, costs, fractions, both)
    return max(1, members)


@inlined
def _gain(histogram: Any, left: int, costs: Any, fractions: Any, both: Any) -> int:
    """Return how many bits (in units of 2**-12) it saves to share one table between a group and the next."""
    for symbol in range(both.size):
        both[symbol] = histogram[left, symbol] + histogram[left + 1, symbol]
    return costs[left] + costs[left + 1] - cost(both, fractions)


@kernel
def rescale(frequencies: Any) -> None:
    """Scale one table of whole numbers, in place, to a sum of 4096 in which nothing above 0 becomes 0."""
    total, largest = 0, 0
    for symbol in range(frequencies.size):
        total += frequencies[symbol]
    if total == 0:
        frequencies[0] = TOTAL
        return
    rest = TOTAL
    for symbol in range(frequencies.size):
        if frequencies[symbol] > 0:
            frequencies[symbol] = max(1, np.int64(frequencies[symbol]) * TOTAL // total)
            rest -= frequencies[symbol]
            if frequencies[symbol] > frequencies[largest]:
                largest = symbol
    while rest < 0:
        # The ones that were raised to 1 are paid for by the largest, one by one.
        largest = 0
        for symbol in range(frequencies.size):
            if frequencies[symbol] > frequencies[largest]:
                largest = symbol
        frequencies[largest] -= 1
        rest += 1
    frequencies[largest] += rest


@kernel
def levels(frequencies: NDArray[np.int64], groups: int, out: NDArray[np.int64]) -> int:
    """Turn tables into the numbers that are written, and each table into what the decoder will make of them.

    Returns
    -------
    int
        How many numbers: per table the first symbol, the number of symbols, and the differences of their levels.
    """
    at = 0
    for group in range(groups):
        rescale(frequencies[group])
        first, last = 0, SYMBOLS - 1
        while frequencies[group, first] == 0:
            first += 1
        while frequencies[group, last] == 0:
            last -= 1
        out[at] = first - SYMBOLS // 2
        out[at + 1] = last - first
        at += 2
        before = 0
        for symbol in range(first, last + 1):
            level = level_of(frequencies[group, symbol])
            frequencies[group, symbol] = value_of(level)
            out[at] = level - before
            at += 1
            before = level
        rescale(frequencies[group])
    return at


@kernel
def from_levels(numbers: NDArray[np.int64], groups: int, frequencies: NDArray[np.int64]) -> int:
    """Make tables from the numbers of `levels`; return how many were used, or -1 where they make no sense."""
    at = 0
    for group in range(groups):
        if at + 2 > numbers.size:
            return -1
        first = numbers[at] + SYMBOLS // 2
        last = first + numbers[at + 1]
        at += 2
        if first < 0 or last < first or last >= SYMBOLS or at + last - first + 1 > numbers.size:
            return -1
        level = 0
        for symbol in range(first, last + 1):
            level += numbers[at]
            at += 1
            if level < 0 or level > TOP_LEVEL:
                return -1
            frequencies[group, symbol] = value_of(level)
        rescale(frequencies[group])
    return at
