"""Pixels to blocks and back: frequency by frequency (or place by place), all blocks of a batch side by side.

In this order every pass of a transform is a loop over neighbours in memory, whatever the block's shape.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.kernels.jit import kernel

LANES = 16
"""A batch holds a multiple of so many blocks, so that the flat kernels need no remainder loop."""


def counts(shape: tuple[int, ...], block: tuple[int, ...]) -> tuple[int, int, int]:
    """Return the number of blocks along z, y and x that cover a tile."""
    nz, ny, nx = (-(-length // side) for length, side in zip(shape, block, strict=True))
    return nz, ny, nx


@kernel
def gather(values: NDArray[Any], bz: int, by: int, bx: int, first: int, count: int, middle: int, out: Any) -> None:
    """Put blocks ``first .. first + count`` of a tile (nz, ny, nx), less `middle`, into `out` (bz*by*bx, lanes).

    Blocks that stick out of the tile repeat its last plane, row or column; lanes beyond `count` hold zeros.
    """
    nz, ny, nx = values.shape
    across = (nx + bx - 1) // bx
    down = (ny + by - 1) // by
    for w in range(bz):
        for v in range(by):
            row = (w * by + v) * bx
            for lane in range(count):
                index = first + lane
                x0 = (index % across) * bx
                y = min((index // across) % down * by + v, ny - 1)
                z = min(index // (across * down) * bz + w, nz - 1)
                if x0 + bx <= nx:
                    for u in range(bx):
                        out[row + u, lane] = values[z, y, x0 + u] - middle
                else:
                    for u in range(bx):
                        out[row + u, lane] = values[z, y, min(x0 + u, nx - 1)] - middle
    for place in range(out.shape[0]):
        for lane in range(count, out.shape[1]):
            out[place, lane] = 0


@kernel
def scatter(
    blocks: NDArray[np.float64],
    bz: int,
    by: int,
    bx: int,
    first: int,
    count: int,
    scale: float,
    middle: int,
    span: int,
    out: NDArray[np.int32],
) -> None:
    """Write the prediction of blocks ``first .. first + count`` into the tile `out` (nz, ny, nx).

    A block value is scaled by a power of two, rounded half to even, moved up by `middle` and clipped to 0 .. `span`.
    Adding and subtracting 1.5 * 2**52 rounds a float64 exactly so.
    """
    nz, ny, nx = out.shape
    across = (nx + bx - 1) // bx
    down = (ny + by - 1) // by
    for w in range(bz):
        for v in range(by):
            row = (w * by + v) * bx
            for lane in range(count):
                index = first + lane
                x0 = (index % across) * bx
                y = (index // across) % down * by + v
                z = index // (across * down) * bz + w
                if y < ny and z < nz:
                    for u in range(min(bx, nx - x0)):
                        value = (blocks[row + u, lane] * scale + 6755399441055744.0) - 6755399441055744.0
                        value = min(max(value + middle, 0.0), np.float64(span))
                        out[z, y, x0 + u] = np.int32(value)
