"""Spread classes of cells, each foreseen from its left, upper and previous-plane neighbours."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stackbound.kernels.jit import inlined, kernel
from stackbound.kernels.spread import TOP

CONTEXTS = 3
"""Tables by how far the neighbours are apart: up to 1, up to 3, further."""


@inlined
def foresee(classes: NDArray[np.uint8], z: int, y: int, x: int) -> tuple[int, int]:
    """Return the class foreseen for a cell and the context."""
    before = np.int64(classes[z - 1, y, x]) if z > 0 else -1
    left = np.int64(classes[z, y, x - 1]) if x > 0 else -1
    upper = np.int64(classes[z, y - 1, x]) if y > 0 else -1
    if left < 0:
        left = upper if upper >= 0 else max(before, 0)
    if upper < 0:
        upper = left
    if before < 0:
        foreseen = (left + upper + 1) >> 1
        apart = abs(left - upper)
    else:
        foreseen = (left + upper + 2 * before + 2) >> 2
        apart = max(left, upper, before) - min(left, upper, before)
    return foreseen, 0 if apart <= 1 else (1 if apart <= 3 else 2)


@kernel
def split(classes: NDArray[np.uint8], symbols: NDArray[np.uint8], contexts: NDArray[np.uint8]) -> None:
    """Write ``class - foreseen + 128`` and the context of each cell in raster order."""
    at = 0
    for z in range(classes.shape[0]):
        for y in range(classes.shape[1]):
            for x in range(classes.shape[2]):
                foreseen, context = foresee(classes, z, y, x)
                symbols[at] = np.int64(classes[z, y, x]) - foreseen + 128
                contexts[at] = context
                at += 1


@kernel
def decode(
    group: NDArray[np.uint8],
    table_slots: NDArray[np.uint32],
    words: NDArray[np.uint16],
    states: NDArray[np.uint32],
    classes: NDArray[np.uint8],
) -> int:
    """Decode all classes with one state; return the words used, or -1 where they run out or a class is impossible."""
    position, limit, x32 = 0, words.size - 8, states[0]
    for z in range(classes.shape[0]):
        for y in range(classes.shape[1]):
            for x in range(classes.shape[2]):
                if position > limit:
                    return -1
                foreseen, context = foresee(classes, z, y, x)
                entry = table_slots[group[context], x32 & np.uint32(4095)]
                x32 = ((entry >> np.uint32(20)) + np.uint32(1)) * (x32 >> np.uint32(12)) + (
                    (entry >> np.uint32(8)) & np.uint32(4095)
                )
                if x32 < np.uint32(65536):
                    x32 = (x32 << np.uint32(16)) | np.uint32(words[position])
                    position += 1
                value = np.int64(entry & np.uint32(255)) - 128 + foreseen
                if value < 0 or value > TOP:
                    return -1
                classes[z, y, x] = value
    states[0] = x32
    return position
