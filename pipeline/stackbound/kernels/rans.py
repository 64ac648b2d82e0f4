"""Range coding with asymmetric numeral systems (Duda, arXiv:1311.2540), eight interleaved states.

State x of 32 bits, kept in [2**16, 2**32); words of 16 bits; frequencies sum to 2**12. Coding symbol s of frequency f
and cumulative frequency c: while x >= f * 2**20, give out the low 16 bits; then x = (x div f) * 2**12 + x mod f + c.
Decoding runs backwards, so the encoder walks from the last symbol to the first. Symbol i of a group of eight belongs to
state i, so that eight chains of dependent operations run side by side.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.kernels.jit import kernel

STATES = 8
LOW = 65536
SKIP = 255
"""Table number of a symbol that is not coded: it is known to be zero."""


@kernel
def prepare(frequencies: NDArray[np.uint32], starts: NDArray[np.uint32], reciprocals: NDArray[np.uint64]) -> None:
    """Fill cumulative frequencies and exact reciprocals ``ceil(2**44 / f)`` for tables (tables, symbols).

    With x < f * 2**20 the product stays below 2**64, and ``x * reciprocal >> 44`` is ``x div f``: the reciprocal is too
    large by less than f / 2**44 of itself, which moves the quotient by less than 1/f.
    """
    for table in range(frequencies.shape[0]):
        total = 0
        for symbol in range(frequencies.shape[1]):
            f = np.uint64(frequencies[table, symbol])
            starts[table, symbol] = total
            total += frequencies[table, symbol]
            if f > 0:
                reciprocals[table, symbol] = (np.uint64(2**44) + f - np.uint64(1)) // f


@kernel
def slots(frequencies: NDArray[np.uint32], out: NDArray[np.uint32]) -> None:
    """Fill the decoding table of each row: slot -> symbol (8 bits), slot - start (12 bits), frequency - 1 (12 bits)."""
    for table in range(frequencies.shape[0]):
        slot = 0
        for symbol in range(frequencies.shape[1]):
            f = frequencies[table, symbol]
            for offset in range(f):
                out[table, slot] = np.uint32(symbol) | np.uint32(offset << 8) | np.uint32((f - 1) << 20)
                slot += 1


@kernel
def encode(
    symbols: NDArray[np.uint8],
    tables: NDArray[np.uint8],
    lanes: int,
    frequencies: NDArray[np.uint32],
    starts: NDArray[np.uint32],
    reciprocals: NDArray[np.uint64],
    words: NDArray[np.uint16],
    states: NDArray[np.uint32],
) -> int:
    """Code flat `symbols` in groups of `lanes` and return where in `words` the words begin (they end at its end).

    `words` needs room for one word per symbol; `states` receives the final states.
    """
    position = words.size
    for i in range(STATES):
        states[i] = LOW
    for group in range(symbols.size // lanes - 1, -1, -1):
        for lane in range(lanes - 1, -1, -1):
            i = group * lanes + lane
            table = tables[i]
            if table == SKIP:
                continue
            symbol = symbols[i]
            f = np.uint64(frequencies[table, symbol])
            x = np.uint64(states[lane])
            if x >= f << np.uint64(20):
                position -= 1
                words[position] = np.uint16(x & np.uint64(0xFFFF))
                x >>= np.uint64(16)
            quotient = (x * reciprocals[table, symbol]) >> np.uint64(44)
            states[lane] = np.uint32(
                (quotient << np.uint64(12)) + (x - quotient * f) + np.uint64(starts[table, symbol])
            )
    return position


@kernel
def encode_runs(
    symbols: NDArray[np.uint8],
    tables: NDArray[np.uint8],
    width: int,
    frequencies: NDArray[np.uint32],
    starts: NDArray[np.uint32],
    reciprocals: NDArray[np.uint64],
    words: NDArray[np.uint16],
    states: NDArray[np.uint32],
) -> int:
    """Code rows of runs: `symbols` (rows, runs * 8), one table per run in `tables` (rows, runs), `width` symbols a row.

    As `encode`, with one table per run of eight and a shorter last run where the width is no multiple of eight.
    """
    position = words.size
    for i in range(STATES):
        states[i] = LOW
    rows, runs = tables.shape
    for row in range(rows - 1, -1, -1):
        for run in range(runs - 1, -1, -1):
            table = tables[row, run]
            if table == SKIP:
                continue
            for lane in range(min(STATES, width - run * STATES) - 1, -1, -1):
                symbol = symbols[row, run * STATES + lane]
                f = np.uint64(frequencies[table, symbol])
                x = np.uint64(states[lane])
                if x >= f << np.uint64(20):
                    position -= 1
                    words[position] = np.uint16(x & np.uint64(0xFFFF))
                    x >>= np.uint64(16)
                quotient = (x * reciprocals[table, symbol]) >> np.uint64(44)
                states[lane] = np.uint32(
                    (quotient << np.uint64(12)) + (x - quotient * f) + np.uint64(starts[table, symbol])
                )
    return position


@kernel
def decode_runs(
    tables: NDArray[np.uint8],
    width: int,
    table_slots: NDArray[np.uint32],
    words: NDArray[np.uint16],
    states: NDArray[np.uint32],
    out: NDArray[Any],
) -> int:
    """Decode rows of runs into `out` (rows, width) as symbol - 128, and return the words used, or -1 if they run out.

    `words` ends in eight spare words, so that one check per run keeps every read inside it. Table numbers are known to
    be valid.
    """
    position, limit = 0, words.size - STATES
    rows, runs = tables.shape
    for row in range(rows):
        for run in range(runs):
            table = tables[row, run]
            count = min(STATES, width - run * STATES)
            if table == SKIP:
                for lane in range(count):
                    out[row, run * STATES + lane] = 0
                continue
            if position > limit:
                return -1
            for lane in range(count):
                x = states[lane]
                entry = table_slots[table, x & np.uint32(4095)]
                x = ((entry >> np.uint32(20)) + np.uint32(1)) * (x >> np.uint32(12)) + (
                    (entry >> np.uint32(8)) & np.uint32(4095)
                )
                if x < np.uint32(LOW):
                    x = (x << np.uint32(16)) | np.uint32(words[position])
                    position += 1
                states[lane] = x
                out[row, run * STATES + lane] = np.int32(entry & np.uint32(255)) - 128
    return position if position <= limit else -1
