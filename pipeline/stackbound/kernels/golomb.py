"""Signed whole numbers as Golomb-Rice codes whose parameter follows the numbers (after ISO/IEC 14495-1, clause A.5)."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.kernels.jit import kernel

LONGEST = 32
"""After so many ones the number follows as it is, in 40 bits: no code is longer than 72 bits."""


@kernel
def write(values: NDArray[np.int64], bits: NDArray[np.uint8]) -> int:
    """Write numbers below 2**38 in magnitude as bits, one an element (least significant first); return how many."""
    at, spread, seen = 0, 4, 1
    for value in values:
        folded = 2 * value if value >= 0 else -2 * value - 1
        low = 0
        while seen << low < spread:
            low += 1
        ones = min(folded >> low, LONGEST)
        for _ in range(ones):
            bits[at] = 1
            at += 1
        if ones == LONGEST:
            low = 40
        else:
            bits[at] = 0
            at += 1
        for bit in range(low):
            bits[at] = (folded >> bit) & 1
            at += 1
        spread += folded
        seen += 1
        if seen == 16:
            spread >>= 1
            seen >>= 1
    return at


@kernel
def read(bits: NDArray[np.uint8], values: NDArray[Any]) -> int:
    """Fill `values` from bits; return the bits used, or -1 where they end too soon."""
    at, spread, seen = 0, 4, 1
    for i in range(values.size):
        low = 0
        while seen << low < spread and low < 40:
            low += 1
        ones = 0
        while ones < LONGEST and at < bits.size and bits[at] == 1:
            ones += 1
            at += 1
        if ones == LONGEST:
            low, ones = 40, 0
        else:
            at += 1
        if at + low > bits.size:
            return -1
        folded = np.int64(ones) << low
        for bit in range(low):
            folded |= np.int64(bits[at]) << bit
            at += 1
        values[i] = folded >> 1 if folded & 1 == 0 else -((folded + 1) >> 1)
        spread += folded
        seen += 1
        if seen == 16:
            spread >>= 1
            seen >>= 1
    return at
