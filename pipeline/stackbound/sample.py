"""Some whole tiles of a stack, from which the stack-level choices of the coder are made.

The tiles depend on the stack and its grid alone, never on memory or workers: they decide the bytes of the store.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

from numpy.typing import NDArray

from stackbound.geometry import Box, counts, position_of
from stackbound.regions import cut_tile, read_source

if TYPE_CHECKING:
    from stackbound.stages import Grid, OpenSource, StackInfo

# Few enough to stay below a region's memory and a small share of the encoding time, enough for every channel and depth.
TILES = 8
PIXELS = 1 << 23

# The golden ratio's steps modulo 1 are spread as evenly as can be for every number of them (Weyl, 1916), so that the
# tiles do not all come from one column of the grid.
_GOLDEN = (math.sqrt(5) - 1) / 2


def sample_tiles(source: OpenSource, info: StackInfo, grid: Grid) -> list[tuple[Box, NDArray[Any]]]:
    """Return some tiles with their boxes, spread over the stack; those not cut off by its end come first."""
    shape = counts(info.shape, grid.tile)
    total = math.prod(shape)
    wanted = min(total, TILES, max(1, PIXELS // math.prod(grid.tile)))
    chosen: list[int] = []
    for step in range(4 * TILES):
        number = int((0.5 + step * _GOLDEN) % 1 * total)
        if number not in chosen:
            chosen.append(number)
    boxes = [_whole_tile(number, info, grid) for number in chosen]
    whole = [box for box in boxes if all(b <= n for b, n in zip(box.stop, info.shape, strict=True))]
    rest = [box for box in boxes if box not in whole]
    return [(box, _read(source, info, box)) for box in sorted((whole + rest)[:wanted], key=lambda box: box.start)]


def _whole_tile(number: int, info: StackInfo, grid: Grid) -> Box:
    position = position_of(number, info.shape, grid.tile)
    start = tuple(p * n for p, n in zip(position, grid.tile, strict=True))
    return Box(start, tuple(a + n for a, n in zip(start, grid.tile, strict=True)))


def _read(source: OpenSource, info: StackInfo, tile: Box) -> NDArray[Any]:
    inside = Box(tile.start, tuple(min(a, b) for a, b in zip(tile.stop, info.shape, strict=True)))
    return cut_tile(read_source(source, info, inside), inside, tile)
