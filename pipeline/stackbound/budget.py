"""How many regions and tiles are worked on at once, from the memory that a run may use.

What is counted are pixels and encoded bytes; the interpreter and its libraries come on top. One region in flight needs
the source's pixels, its encoded tiles (at most about as large), and, while it is read back through zarr, the decoded
pixels twice (zarr puts a shard together before it hands out the part that was asked for). One tile being encoded or
decoded needs itself and at most 24 bytes per pixel of it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from stackbound.environment import format_size
from stackbound.errors import UsageError
from stackbound.stages import Grid, StackInfo

REGION_COPIES = 4
TILE_BYTES_PER_PIXEL = 24
# A loader that does not say what it holds besides its result may hold a few planes.
SOURCE_PLANES = 3
# Blocks of the comparison, hashes, records.
OVERHEAD = 8 << 20


@dataclass(frozen=True)
class Budget:
    """What a run may have in memory at once.

    Attributes
    ----------
    regions : int
        Regions in flight.
    workers : int
        Tiles being encoded at once.
    reads : int
        Tiles that zarr decodes at once per region.
    """

    regions: int
    workers: int
    reads: int


def budget(memory: int, workers: int, info: StackInfo, grid: Grid) -> Budget:
    """Return the most parallel way that stays within `memory` bytes.

    Raises
    ------
    stackbound.errors.UsageError
        Not even one region fits; says how much is needed.
    """
    count = math.prod(-(-length // step) for length, step in zip(info.shape, grid.region, strict=True))
    for regions in range(min(workers, count), 0, -1):
        if needed(regions, workers, info, grid) <= memory:
            return Budget(regions, workers, -(-workers // regions))
    for fewer in range(workers, 0, -1):
        if needed(1, fewer, info, grid) <= memory:
            return Budget(1, fewer, fewer)
    least = needed(1, 1, info, grid)
    raise UsageError(
        f"{format_size(memory)} of memory are too little for one region of {' x '.join(map(str, grid.region))} pixels; "
        f"{format_size(least)} are needed.",
        where="--memory",
        remedy=f"Allow at least {-(-least >> 20)}MiB, or choose a smaller region in the configuration.",
    )


def needed(regions: int, workers: int, info: StackInfo, grid: Grid) -> int:
    """Return the bytes that so many regions in flight and tiles at once need."""
    itemsize = info.dtype.itemsize
    # Regions are cut off at the end of the stack; tiles are filled up.
    lengths = [
        min(region, -(-length // tile) * tile)
        for region, length, tile in zip(grid.region, info.shape, grid.tile, strict=True)
    ]
    region = math.prod(lengths) * itemsize
    tile = math.prod(grid.tile) * (itemsize + TILE_BYTES_PER_PIXEL)
    plane = math.prod(info.shape[-2:]) * itemsize
    source = SOURCE_PLANES * plane if info.read_overhead is None else info.read_overhead
    return regions * (REGION_COPIES * region + OVERHEAD) + max(workers, regions) * tile + source
