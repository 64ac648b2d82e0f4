"""Bands, the weights of neighbours, and what is refused."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from stackbound import neighbourplan, neighbours
from stackbound.errors import PluginError
from stackbound.kernels import bands
from stackbound.kernels.bandrows import LANES
from stackbound.lattice import LatticeTile
from stackbound.prediction import BlockPrediction, NeighbourPrediction, NoPrediction
from stackbound.tilecodec import TileCoder, decode
from stackbound_stages.dct import Dct
from stackbound_stages.neighbours import NeighbourOptions, PredictNeighbours
from stackbound_stages.none import PredictNone
from stackbound_stages.rans import Rans
from stackbound_stages.uniform import Uniform

RNG = np.random.default_rng(8)
WAVES = 500 + 200 * np.sin(np.arange(120)[:, None] / 17) * np.cos(np.arange(150) / 23)
STACK = np.rint(WAVES + RNG.normal(0, 5, (6, 120, 150))).astype(np.uint16)


def tile_of(values: np.ndarray, tolerance: int = 0) -> LatticeTile:
    """Return values as a tile on its lattice."""
    low = int(values.min())
    return LatticeTile(values.astype(np.int32) - low, int(values.max()) - low, tolerance)


def stage(**options: bool) -> PredictNeighbours:
    """Return the stage with the usual transform."""
    return PredictNeighbours(NeighbourOptions(**options), transform=Dct(), quantize=Uniform())


@settings(max_examples=60, deadline=None)
@given(st.integers(1, 70), st.integers(1, 9), st.integers(1, 3), st.booleans())
def test_bands_hold_each_row_once(height: int, width: int, depth: int, based: bool) -> None:
    """Into band layout and back is the identity for every height, with a base and without."""
    values = RNG.integers(0, 1000, (depth, height, width)).astype(np.int32)
    base = RNG.integers(0, 1000, values.shape).astype(np.int32) if based else neighbours.NOTHING
    offsets = np.zeros(depth, np.int64) if based else neighbours.plane_offsets(values)
    banded = np.empty((depth, -(-height // LANES), width, LANES), np.int32)
    back = np.empty_like(values)

    bands.to_bands(values, base, offsets, banded)
    bands.from_bands(banded, base, offsets, 1000, back)

    assert np.array_equal(values, back)


def test_weights_without_base_keep_levels() -> None:
    """Without a base the weights of every kind of row add up to exactly 1, so a constant area is foreseen exactly."""
    _, weights, left = neighbours.fit([tile_of(STACK, 2)], [neighbours.NOTHING], stack=True)

    assert (weights.sum(1) + left.sum(1) == 2**neighbours.SHIFT).all()


def test_first_row_uses_no_row_above() -> None:
    """Where nothing above is decoded, nothing above has a weight."""
    taps, weights, _ = neighbours.fit([tile_of(STACK)], [neighbours.NOTHING], stack=True)

    assert not weights[0].any()
    assert not weights[1][taps[:, 0] < 0].any()
    assert not weights[2][(taps[:, 0] == 0) & (taps[:, 1] < 0)].any()


def test_repeated_plane_costs_next_to_nothing() -> None:
    """The plane before foresees its repetition: a stack of equal planes takes little more than one plane."""
    plane = RNG.integers(0, 4000, (64, 64)).astype(np.uint16)
    one = TileCoder(stage(), Rans()).encode(plane[None], 0)
    stack = TileCoder(stage(), Rans()).encode(np.stack([plane] * 6), 0)

    assert len(stack) < 1.5 * len(one)


def test_quiet_pixels_decide_the_weights() -> None:
    """Weights come from where most bits are: adding a small, wildly textured spot changes the rest's size by little."""
    quiet = STACK[:1].astype(np.int64)
    loud = quiet.copy()
    loud[:, 40:60, 50:80] += RNG.integers(0, 20000, (1, 20, 30))
    of_quiet = neighbours.fit([tile_of(quiet)], [neighbours.NOTHING], stack=False)
    of_loud = neighbours.fit([tile_of(loud)], [neighbours.NOTHING], stack=False)
    tile = tile_of(quiet)

    sizes = [
        neighbours.estimate(tile.values, neighbours.NOTHING, NeighbourPrediction(NoPrediction(), *fit), 0, tile.span)
        for fit in (of_quiet, of_loud)
    ]

    assert sizes[1] < 1.02 * sizes[0]


def test_estimate_is_close_to_the_bytes() -> None:
    """The bits on which plans are made differ from the bytes by tables and weights alone."""
    tile = tile_of(STACK, 3)
    how = NeighbourPrediction(NoPrediction(), *neighbours.fit([tile], [neighbours.NOTHING], stack=True))
    coded, _ = neighbours.encode(tile.values, neighbours.NOTHING, how, tile.tolerance, tile.span)
    estimated = neighbours.estimate(tile.values, neighbours.NOTHING, how, tile.tolerance, tile.span) / 8

    assert estimated < len(coded) < estimated + 1200


def test_base_pays_at_large_tolerances() -> None:
    """Noise around waves under a tolerance far above the noise is smaller with a base, which is chosen by itself."""
    stack = np.tile(STACK, (1, 2, 1))
    plain, chosen = (len(TileCoder(predict, Rans()).encode(stack, 15)) for predict in (stage(base=False), stage()))

    assert chosen < 0.8 * plain


def test_neighbours_are_smaller_than_none() -> None:
    """Foreseeing from neighbours pays on a picture of waves and noise."""
    sizes = [len(TileCoder(predict, Rans()).encode(STACK, 2)) for predict in (stage(), PredictNone())]

    assert sizes[0] < 0.75 * sizes[1]


@pytest.mark.parametrize("values", [STACK[:, :10], STACK.astype(np.int64) * 10**6], ids=["few rows", "wide range"])
def test_impossible_tiles_are_predicted_by_the_transform(values: np.ndarray) -> None:
    """What cannot be coded in bands is predicted by the transform, planned or not."""
    coder = TileCoder(stage(), Rans())
    for used in (coder, coder.planned([values], [3]), coder.planned([STACK], [3])):
        assert np.abs(decode(used.encode(values, 3), values.shape, values.dtype) - values.astype(np.int64)).max() <= 3
    flat = tile_of(STACK[:, :10])
    assert isinstance(stage().predict(flat, {}, lambda tile, prediction: 1), BlockPrediction)


def test_weights_beyond_exact_sums_are_refused() -> None:
    """Weights whose sums could leave 32 bits are the stage's mistake."""
    taps = np.tile([0, -1, 0], (8, 1))
    how = NeighbourPrediction(NoPrediction(), taps, np.full((4, 8), 2**20, np.int32), np.zeros((4, 3), np.int32))

    with pytest.raises(PluginError, match="exact"):
        neighbours.check(how, -1000, 1000)


@pytest.mark.parametrize("tap", [(0, 0, 1), (0, 1, 0), (1, 0, 0), (0, -4, 0), (-2, 0, 0)])
def test_neighbours_not_decoded_yet_are_refused(tap: tuple[int, int, int]) -> None:
    """A neighbour after the pixel, or farther than the decoder keeps, is the stage's mistake."""
    taps = np.tile(tap, (8, 1))
    how = NeighbourPrediction(NoPrediction(), taps, np.zeros((4, 8), np.int32), np.zeros((4, 3), np.int32))

    with pytest.raises(PluginError, match="neighbour"):
        neighbours.check(how, -1000, 1000)


def test_plan_is_the_same_again() -> None:
    """The same tiles give the same plan."""
    plans = [TileCoder(stage(), Rans()).planned([STACK], [2]).plan for _ in range(2)]

    assert plans[0] == plans[1]


def test_channels_of_other_levels_are_judged_alone() -> None:
    """Where the plane before says nothing of a plane's noise, its residuals do not decide the classes."""
    other = np.stack([STACK[0], RNG.integers(0, 3000, STACK[0].shape), STACK[1], RNG.integers(0, 9, STACK[0].shape)])
    plan = neighbourplan.search([tile_of(other)], neighbourplan.Fixed(), None, None)

    assert plan["alone"]
