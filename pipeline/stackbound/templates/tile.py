"""Tiles of one plane each, for people who look at single planes."""

from __future__ import annotations

from pydantic import Field

from stackbound import hookimpl
from stackbound.stages import Grid, OpenSource, Options, StackInfo, Stage, Tile


class MyStageOptions(Options):
    """What a configuration may say under [tile] beside the name."""

    side: int = Field(default=512, ge=32)
    """Largest height and width of a tile."""


class MyStage(Tile):
    """One tile for each piece of a plane, one region for each plane."""

    name = "my-stage"
    Options = MyStageOptions
    options: MyStageOptions

    def grid(self, info: StackInfo, source: OpenSource | None = None) -> Grid:
        """Return tile and region shapes, one length for each axis of `info.axes`.

        They may depend on stack and options alone, and a region is made of whole tiles.
        """
        tile = [1] * len(info.shape)
        region = [1] * len(info.shape)
        for axis, length in enumerate(info.shape):
            if info.axes[axis] in "yx":
                tile[axis] = min(length, self.options.side)
                region[axis] = -(-length // tile[axis]) * tile[axis]
        return Grid(tuple(tile), tuple(region))


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stages of this plugin."""
    return [MyStage]
