"""The shapes that the grid stage chooses."""

from __future__ import annotations

from math import ceil, prod

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from stackbound.errors import UsageError
from stackbound.stages import Grid, StackInfo
from stackbound_stages.grid import REGION_BYTES, GridOptions, TileGrid


def _grid(axes: str, shape: tuple[int, ...], dtype: str = "uint16", **options: list[int]) -> Grid:
    return TileGrid(GridOptions(**options)).grid(StackInfo("test", axes, shape, np.dtype(dtype)))  # type: ignore[arg-type]


STACKS = [
    ("yx", (1, 1)),
    ("yx", (1, 1_000_000)),
    ("yx", (1_000_000, 1)),
    ("yx", (60_000, 60_000)),
    ("zyx", (10_000, 16, 16)),
    ("zyx", (10_000, 40, 40)),
    ("zyx", (1009, 997, 1013)),
    ("tczyx", (20, 2, 11, 200, 200)),
    ("zyx", (3000, 2048, 2048)),
    ("tyx", (10_000, 512, 512)),
    ("cyx", (3, 512, 512)),
    ("zyx", (500, 5000, 7000)),
]


@pytest.mark.parametrize(("axes", "shape"), STACKS)
def test_shapes_are_sensible(axes: str, shape: tuple[int, ...]) -> None:
    """Tiles hold up to about two million pixels, regions at most 64 MiB, and index and tables weigh little."""
    grid = _grid(axes, shape)
    inside = [min(pair) for pair in zip(grid.region, shape, strict=True)]

    assert prod(grid.tile) <= 2 * 2**20
    assert prod(inside) * 2 <= 1.1 * REGION_BYTES
    if prod(shape) * 2 > 10 * 2**20:
        # Sixteen bytes of index and about half a thousand of tables a tile, against a fourth of the pixels' bytes.
        tiles = prod(ceil(whole / part) for whole, part in zip(shape, grid.tile, strict=True))
        assert tiles * 516 < 0.1 * prod(shape) * 2 / 4


@settings(max_examples=300, deadline=None)
@given(st.sampled_from(["yx", "zyx", "tyx", "cyx", "tzyx", "czyx", "tczyx"]), st.data())
def test_shapes_keep_the_contract(axes: str, data: st.DataObject) -> None:
    """Any stack: at most three long axes, a region is whole tiles, nothing reaches a whole tile beyond the stack."""
    shape = tuple(data.draw(st.integers(1, 5000) | st.sampled_from([1, 2, 3])) for _ in axes)
    grid = _grid(axes, shape, data.draw(st.sampled_from(["uint8", "uint16", "float64"])))

    assert len(grid.tile) == len(grid.region) == len(axes)
    assert sum(length > 1 for length in grid.tile) <= 3
    for whole, tile, region in zip(shape, grid.tile, grid.region, strict=True):
        assert region % tile == 0
        assert 1 <= tile <= whole
        assert region < whole + tile


def test_planes_are_whole_in_regions() -> None:
    """Loaders read whole planes: where a slab of them fits, a region cuts none."""
    grid = _grid("zyx", (3000, 2048, 2048))

    assert grid.region[1] >= 2048
    assert grid.region[2] >= 2048


def test_colour_samples_stay_together() -> None:
    """Three samples of colour are one tile's depth; channels of a volume are not."""
    assert _grid("cyx", (3, 512, 512), "uint8").tile[0] == 3
    assert _grid("czyx", (3, 40, 512, 512)).tile[0] == 1


def test_shapes_of_the_user_are_taken() -> None:
    """Given shapes are taken as they are."""
    assert _grid("zyx", (10, 100, 100), tile=[1, 50, 50], region=[2, 100, 100]) == Grid((1, 50, 50), (2, 100, 100))


@pytest.mark.parametrize(
    ("options", "word"),
    [
        ({"tile": [8, 8]}, "axes"),
        ({"tile": [1, 64, 64], "region": [1, 64, 100]}, "multiple"),
        ({"tile": [2, 2, 2, 2], "axes": "tzyx"}, "three axes"),
    ],
)
def test_unusable_shapes_are_refused(options: dict[str, list[int]], word: str) -> None:
    """Shapes that do not fit the stack or each other are a user's mistake, explained."""
    axes = str(options.pop("axes", "zyx"))
    with pytest.raises(UsageError, match=word):
        _grid(axes, (20,) * len(axes), **options)
