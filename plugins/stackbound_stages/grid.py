"""Choose tile and region shapes from the stack's shape and dtype alone."""

from __future__ import annotations

from math import ceil, isqrt, prod

from pydantic import Field, PositiveInt
from stackbound import hookimpl
from stackbound.errors import UsageError
from stackbound.stages import Grid, Index, OpenSource, Options, StackInfo, Stage, Tile

TILE_PIXELS = 2**20
"""Pixels of a full tile: tables and lanes cost below 0.5 % of its bytes, and one thread decodes it in milliseconds."""

SMALL_TILE_PIXELS = 2**17
"""Tiny planes are gathered until a tile has this many pixels, or its tables would weigh more than its pixels."""

DEPTH = 8
"""Planes of a tile: neighbouring planes are worth up to 10 %, but a reader of one plane decodes them all."""

WHOLE_DEPTH = 16
"""Up to so many planes stay together: a rest of one or two planes would be coded badly."""

REGION_BYTES = 2**26
"""Largest region: what one worker reads, encodes, writes and reads back at a time."""

ALIGNMENT = 32
"""Tile sides are multiples of the longest block, so only the last tile of a row is padded."""


class GridOptions(Options):
    """Shapes that the user chooses."""

    tile: list[PositiveInt] | None = Field(default=None, min_length=2, max_length=5)
    """Shape of a tile, one length per axis of the stack, at most three of them longer than 1."""

    region: list[PositiveInt] | None = Field(default=None, min_length=2, max_length=5)
    """Shape of a region (one shard), each length a whole multiple of the tile's."""


class TileGrid(Tile):
    """Tiles of about a million pixels, some planes deep; regions of whole planes where they fit."""

    name = "grid"
    Options = GridOptions
    options: GridOptions

    def grid(self, info: StackInfo, source: OpenSource | None = None) -> Grid:
        """Return the shapes for a stack.

        Raises
        ------
        stackbound.errors.UsageError
            The shapes of the options do not fit the stack or each other.
        """
        tile = self._given("tile", self.options.tile, info) or choose_tile(info)
        if sum(length > 1 for length in tile) > 3:
            raise UsageError(
                f"tile {list(tile)} is longer than 1 along more than three axes",
                where="tile.tile",
                remedy="Set all but three lengths to 1.",
            )
        region = self._given("region", self.options.region, info) or choose_region(info, tile)
        if any(whole % part for whole, part in zip(region, tile, strict=True)):
            raise UsageError(
                f"region {list(region)} is not a whole multiple of tile {list(tile)}",
                where="tile.region",
                remedy="Make each length of the region a multiple of the tile's.",
            )
        return Grid(tile, region)

    @staticmethod
    def _given(what: str, shape: list[int] | None, info: StackInfo) -> Index | None:
        if shape is None:
            return None
        if len(shape) != len(info.shape):
            raise UsageError(
                f"{what} has {len(shape)} lengths, but the stack has {len(info.shape)} axes ({info.axes})",
                where=f"tile.{what}",
                remedy=f"Give one length for each of {', '.join(info.axes)}.",
            )
        return tuple(shape)


def choose_tile(info: StackInfo) -> Index:
    """Return a tile shape: a piece of a plane, and some planes along the one axis that promises likeness."""
    size = dict(zip(info.axes, info.shape, strict=True))
    rows, columns = size["y"], size["x"]
    deep = _depth_axis(size)
    depth = 1
    if deep:
        most = max(DEPTH, SMALL_TILE_PIXELS // (rows * columns))
        depth = size[deep] if size[deep] <= max(most, WHOLE_DEPTH) else most
    area = max(1, TILE_PIXELS // depth)
    height, width = _piece(rows, columns, area)
    chosen = {"y": height, "x": width}
    if deep:
        chosen[deep] = depth
    return tuple(chosen.get(axis, 1) for axis in info.axes)


def choose_region(info: StackInfo, tile: Index) -> Index:
    """Return a region shape: grown from one tile along x, then y, then the leading axes, while it fits.

    Reading whole planes is what loaders do best, so x and y come first.
    """
    region = list(tile)
    budget = REGION_BYTES // info.dtype.itemsize
    order = [len(tile) - 1, len(tile) - 2]
    order += sorted(range(len(tile) - 2), key=lambda axis: (tile[axis] == 1, -axis))
    for axis in order:
        whole = ceil(info.shape[axis] / tile[axis])
        # What hangs over the stack's edge is never read, so it does not count.
        others = prod(min(pair) for pair in zip(region, info.shape, strict=True)) // min(region[axis], info.shape[axis])
        most = whole if others * info.shape[axis] <= budget else max(1, budget // (others * tile[axis]))
        if whole > most:
            # Even pieces: five tiles where four fit become 3 + 2, not 4 + 1.
            region[axis] = tile[axis] * ceil(whole / ceil(whole / most))
            if axis != len(tile) - 1:
                break
        else:
            region[axis] = tile[axis] * whole
    return tuple(region)


def _depth_axis(size: dict[str, int]) -> str | None:
    """Return the axis besides y and x along which a tile is more than one plane deep."""
    if size.get("c", 1) in (3, 4) and size.get("z", 1) == 1:
        return "c"
    return next((axis for axis in "zt" if size.get(axis, 1) > 1), None)


def _piece(rows: int, columns: int, area: int) -> tuple[int, int]:
    """Return height and width of near-equal pieces of a plane, each about `area` pixels, square where it can be."""
    side = isqrt(area)
    if rows * columns <= area + area // 2:
        return rows, columns
    if rows <= side:
        return rows, _even(columns, area // rows)
    if columns <= side:
        return _even(rows, area // columns), columns
    return _even(rows, side), _even(columns, side)


def _even(length: int, target: int) -> int:
    """Return the aligned length of near-equal pieces of about `target` pixels."""
    pieces = max(1, round(length / target))
    return min(length, ceil(ceil(length / pieces) / ALIGNMENT) * ALIGNMENT)


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [TileGrid]
