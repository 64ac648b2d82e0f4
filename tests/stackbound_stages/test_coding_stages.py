"""The coding stages beyond the plain ones."""

from __future__ import annotations

import numpy as np
import pytest
from codec_strategies import largest_error, plain_coder
from pydantic import ValidationError
from stackbound import decode as alone
from stackbound.stages import Encode
from stackbound.tilecodec import TileCoder, decode, describe
from stackbound_stages.best import BestOptions, PredictBest
from stackbound_stages.dct import Dct
from stackbound_stages.frequency_weighted import FrequencyWeighted, FrequencyWeightedOptions
from stackbound_stages.none import PredictNone
from stackbound_stages.rans import Rans
from stackbound_stages.transform import TransformOptions
from stackbound_stages.uniform import Uniform
from stackbound_stages.zstd import Zstd, ZstdOptions

RNG = np.random.default_rng(8)
WAVE = np.rint(500 + 200 * np.sin(np.arange(96) / 7) + RNG.normal(0, 4, (2, 96, 96))).astype(np.uint16)
NOISE = RNG.integers(0, 4000, (2, 96, 96)).astype(np.uint16)


def test_best_is_no_larger_than_each() -> None:
    """Per tile, best takes the predictor with the fewest bytes: blocks for waves, nothing for noise."""
    for pixels, mode in ((WAVE, "transform"), (NOISE, "none")):
        stage = PredictBest(BestOptions(among=["transform", "none"]), transform=Dct(), quantize=Uniform())
        payload = TileCoder(stage, Rans()).planned([WAVE], [2]).encode(pixels, 2)

        assert describe(payload, pixels.shape, pixels.dtype)["mode"] == mode
        assert largest_error(pixels, decode(payload, pixels.shape, pixels.dtype)) <= 2


@pytest.mark.parametrize("among", [[], ["best"], ["none", "none"]])
def test_best_refuses_senseless_lists(among: list[str]) -> None:
    """No predictor, itself, or one twice makes no sense."""
    with pytest.raises(ValidationError):
        BestOptions(among=among)


@pytest.mark.parametrize("tolerance", [0, 3])
def test_zstd_decodes_everywhere(tolerance: int) -> None:
    """The zstd coder keeps the bound, says its name, and both decoders read it."""
    for pixels in (WAVE, NOISE, WAVE.astype(np.int64) << 33):
        stage: Encode = Zstd(ZstdOptions(level=3))
        payload = TileCoder(plain_coder(block=[1, 8, 8], step=4).predict, stage).encode(pixels, tolerance)
        decoded = decode(payload, pixels.shape, pixels.dtype)

        assert describe(payload, pixels.shape, pixels.dtype)["coder"] == "zstd"
        assert largest_error(pixels, decoded) <= tolerance
        assert np.array_equal(decoded, alone.decode(payload, pixels.shape, pixels.dtype))


def test_weights_grow_with_frequency() -> None:
    """The slope makes the step of the highest frequency 1 + slope times that of the mean, and more on the way."""
    weights = FrequencyWeighted(FrequencyWeightedOptions(slope=3)).weights((4, 8, 8))

    assert weights.shape == (4, 8, 8)
    assert weights[0, 0, 0] == 1
    assert weights[-1, -1, -1] == pytest.approx(4)
    assert (np.diff(weights, axis=1) > 0).all()
    assert FrequencyWeighted().weights((1, 1, 1)).tolist() == [[[1.0]]]


def test_matrix_is_brought_to_the_block() -> None:
    """A matrix keeps its corners and is filled in between."""
    weights = FrequencyWeighted(FrequencyWeightedOptions(matrix=[[1.0, 3.0], [5.0, 7.0]])).weights((2, 4, 8))

    assert weights.shape == (2, 4, 8)
    assert [weights[0, 0, 0], weights[1, 0, 7], weights[0, 3, 0], weights[1, 3, 7]] == [1, 3, 5, 7]


@pytest.mark.parametrize("matrix", [[], [[]], [[1.0], [1.0, 2.0]], [[0.0]], [[-1.0]]])
def test_senseless_matrices_are_refused(matrix: list[list[float]]) -> None:
    """A matrix needs rows of one length with positive numbers."""
    with pytest.raises(ValidationError):
        FrequencyWeightedOptions(matrix=matrix)


def test_weighted_steps_keep_the_bound() -> None:
    """Coarser steps for fine structure change the size, never the bound; the steps lie in the tile."""
    coder = plain_coder(quantize=FrequencyWeighted(), block=[1, 16, 16], step=4)
    payload = coder.encode(WAVE, 3)
    decoded = decode(payload, WAVE.shape, WAVE.dtype)

    assert largest_error(WAVE, decoded) <= 3
    assert np.array_equal(decoded, alone.decode(payload, WAVE.shape, WAVE.dtype))
    assert len(payload) < len(TileCoder(PredictNone(), Rans()).encode(WAVE, 3))


@pytest.mark.parametrize("block", [[1, 8], [3, 8, 8], [32, 8, 8], [1, 64, 8], [0, 8, 8]])
def test_impossible_blocks_are_refused(block: list[int]) -> None:
    """A block has three sides from 1, 2, 4, 8, 16, 32, the first at most 16."""
    with pytest.raises(ValidationError):
        TransformOptions(block=block)


def test_plan_is_found_by_size() -> None:
    """Planning picks blocks and a step that beat a poor choice, and gives the same plan again."""
    planned = plain_coder().planned([WAVE], [3])

    assert planned.plan == plain_coder().planned([WAVE.copy()], [3]).plan
    assert len(planned.encode(WAVE, 3)) < len(plain_coder(block=[1, 1, 8], step=-2).encode(WAVE, 3))
