"""Residuals of all bands to symbols and range-coded words, and back: sixteen states, one per lane.

The arithmetic is that of `stackbound.kernels.rans`. A symbol is the residual plus 128; residuals of the classes above
`DIRECT` leave their low bits aside, and what does not fit is symbol 0 and listed. Entries of lanes that are absent in
the last row of the bands are not coded.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.kernels.bandrows import LANES
from stackbound.kernels.jit import inlined, kernel

CLASSES = 52
"""The class of the largest energy, 65535 * 189, is below this."""

DIRECT = 24
"""Classes up to this one, a mean magnitude of 16 to 22, are coded without low bits."""

LOW = 65536

FARTHEST = 2**28
"""No residual is larger; damaged bytes could say so."""


@inlined
def shift_of(spread: int) -> int:
    """Return how many low bits the residuals of a class write as they are."""
    return (spread - DIRECT + 1) >> 1 if spread > DIRECT else 0


CHUNK = 4096
"""Entries that are looked at together for whether one of them needs care."""


@inlined
def _fits(residuals: Any, classes: Any) -> bool:
    """Return whether all residuals are symbols as they are."""
    far = np.int32(0)
    for i in range(residuals.size):
        # Above 254 as an unsigned number: below -127 or above 127.
        far |= np.int32(np.uint32(np.int32(residuals[i] + np.int32(127))) > np.uint32(254))
    highest = np.uint8(0)
    for i in range(classes.size):
        highest = max(highest, classes[i])
    return far == 0 and highest <= DIRECT


@kernel
def split(
    residuals: NDArray[np.int32], classes: NDArray[np.uint8], present: NDArray[np.uint8], row: int,
    symbols: NDArray[np.uint8], counts: NDArray[np.uint32],
) -> bool:  # fmt: skip
    """Write the symbol of each residual and count symbols per class into `counts` (2, CLASSES * 256).

    Parameters as those of `encode`.

    Returns
    -------
    bool
        Whether there are low bits or listed numbers.
    """
    wide = False
    # Two counters each, so that equal symbols side by side do not wait for each other.
    even, odd = counts[0], counts[1]
    for number in range(present.size):
        part = slice(number * row, (number + 1) * row)
        r, c, s = residuals[part], classes[part], symbols[part]
        if _fits(r, c):
            for i in range(r.size):
                s[i] = np.int32(r[i] + np.int32(128))
        else:
            wide = True
            for i in range(r.size):
                value = (r[i] >> shift_of(np.int64(c[i]))) + 128
                s[i] = value if 0 < value < 256 else 0
        if present[number] == LANES:
            for i in range(0, r.size, 2):
                even[(np.int64(c[i]) << 8) + np.int64(s[i])] += np.uint32(1)
                odd[(np.int64(c[i + 1]) << 8) + np.int64(s[i + 1])] += np.uint32(1)
        else:
            for i in range(r.size):
                if i % LANES < present[number]:
                    even[(np.int64(c[i]) << 8) + np.int64(s[i])] += np.uint32(1)
    return wide


@kernel
def split_rest(
    residuals: NDArray[np.int32], classes: NDArray[np.uint8], symbols: NDArray[np.uint8], bits: NDArray[np.uint8],
    listed: NDArray[np.int64],
) -> tuple[int, int]:  # fmt: skip
    """Write low bits (one an element, least significant first) and listed numbers; return how many of each."""
    at = far = 0
    for start in range(0, residuals.size, CHUNK):
        if _fits(residuals[start : start + CHUNK], classes[start : start + CHUNK]):
            continue
        for i in range(start, min(start + CHUNK, residuals.size)):
            shift = shift_of(np.int64(classes[i]))
            for bit in range(shift):
                bits[at] = (residuals[i] >> bit) & 1
                at += 1
            if symbols[i] == 0:
                listed[far] = residuals[i] >> shift
                far += 1
    return at, far


@kernel
def low_bits(classes: NDArray[np.uint8]) -> int:
    """Return how many low bits the residuals of these classes have together."""
    total = 0
    for i in range(classes.size):
        total += shift_of(np.int64(classes[i]))
    return total


@inlined
def join_rest(residuals: Any, classes: Any, bits: Any, listed: Any, places: Any) -> bool:
    """Put listed numbers and low bits of a row back; `places` are the next of each. False where they run out."""
    lowest, highest = np.int32(0), np.uint8(0)
    for i in range(residuals.size):
        lowest = min(lowest, residuals[i])
        highest = max(highest, classes[i])
    if lowest > -128 and highest <= DIRECT:
        return True
    for i in range(residuals.size):
        value = residuals[i]
        if value == -128:
            if places[1] >= listed.size:
                return False
            value = np.int32(min(max(listed[places[1]], -FARTHEST), FARTHEST))
            places[1] += 1
        shift = shift_of(np.int64(classes[i]))
        if shift > 0:
            if places[0] + shift > bits.size:
                return False
            low = 0
            for bit in range(shift):
                low |= np.int64(bits[places[0] + bit]) << bit
            places[0] += shift
            value = np.int32(min(max((np.int64(value) << shift) | low, -FARTHEST), FARTHEST))
        residuals[i] = value
    return True


@kernel
def encode(
    symbols: NDArray[np.uint8], classes: NDArray[np.uint8], present: NDArray[np.uint8], row: int,
    tables: NDArray[np.int64], intervals: NDArray[np.uint64], reciprocals: NDArray[np.uint64],
    words: NDArray[np.uint16], states: NDArray[np.uint64],
) -> int:  # fmt: skip
    """Code all symbols, last first, and return where the words begin (they end at the end of `words`).

    Parameters
    ----------
    symbols, classes : ndarray of uint8, shape (rows * row,)
    present : ndarray of uint8, shape (rows,)
        How many lanes each row codes.
    row : int
        Entries of a row.
    tables : ndarray of int64, shape (CLASSES,)
        256 times the table of each class.
    intervals : ndarray of uint64
        Per table and symbol ``frequency << 16 | start``.
    reciprocals : ndarray of uint64
        ``ceil(2**44 / frequency)``.
    words : ndarray of uint16
        Room for one word per symbol and one more.
    states : ndarray of uint64, shape (LANES,)
        Receives the final states.
    """
    position = words.size
    places = np.empty(LANES, np.int64)
    spans = np.empty(LANES, np.uint64)
    for lane in range(LANES):
        states[lane] = LOW
    for group in range(symbols.size - LANES, -1, -LANES):
        lanes = np.int64(present[group // row])
        c, s = classes[group : group + LANES], symbols[group : group + LANES]
        for lane in range(LANES):
            places[lane] = tables[c[lane]] + np.int64(s[lane])
            spans[lane] = intervals[places[lane]]
        for lane in range(lanes - 1, -1, -1):
            x = states[lane]
            words[position - 1] = np.uint16(x)
            over = np.uint64(x >= (spans[lane] >> np.uint64(16)) << np.uint64(20))
            position -= np.int64(over)
            states[lane] = x >> (over << np.uint64(4))
        for lane in range(lanes):
            x, span = states[lane], spans[lane]
            quotient = (x * reciprocals[places[lane]]) >> np.uint64(44)
            states[lane] = x + quotient * (np.uint64(4096) - (span >> np.uint64(16))) + (span & np.uint64(65535))
    return position


@inlined
def decode_row(
    classes: Any, lanes: int, tables: Any, slots: Any, words: Any, position: int, states: Any, entries: Any, out: Any
) -> int:
    """Decode the residuals of a row; return the words used so far, or -1 where they run out.

    `words` ends in LANES spare words, so one check per column keeps every read inside it. Absent lanes give 0.
    """
    limit = words.size - LANES
    for group in range(0, classes.size, LANES):
        if position > limit:
            return -1
        c, r = classes[group : group + LANES], out[group : group + LANES]
        for lane in range(LANES):
            entries[lane] = slots[tables[c[lane]] + np.int64(states[lane] & np.uint32(4095))]
        if lanes < LANES:
            for lane in range(lanes, LANES):
                # An interval of the whole table leaves the state as it is.
                entries[lane] = (
                    np.uint32(4095 << 20) | (states[lane] & np.uint32(4095)) << np.uint32(8) | np.uint32(128)
                )
        for lane in range(LANES):
            entry = entries[lane]
            states[lane] = ((entry >> np.uint32(20)) + np.uint32(1)) * (states[lane] >> np.uint32(12)) + (
                (entry >> np.uint32(8)) & np.uint32(4095)
            )
            r[lane] = np.int32(np.int32(entry & np.uint32(255)) - np.int32(128))
        for lane in range(LANES):
            x = states[lane]
            low = np.uint32(x < np.uint32(LOW))
            states[lane] = (x << (low << np.uint32(4))) | (np.uint32(words[position]) & (np.uint32(0) - low))
            position += np.int64(low)
    return position
