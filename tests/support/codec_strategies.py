"""Pixels, tolerances and predictions that try to break the bound."""

from __future__ import annotations

from math import prod
from typing import Any

import numpy as np
from hypothesis import strategies as st
from numpy.typing import NDArray
from stackbound.kernels.blocks import counts
from stackbound.prediction import BlockPrediction, NeighbourPrediction, NoPrediction
from stackbound.stages import Encode, Predict, Quantize, Transform
from stackbound.tilecodec import TileCoder
from stackbound_stages.dct import Dct
from stackbound_stages.neighbours import NeighbourOptions, PredictNeighbours
from stackbound_stages.none import PredictNone
from stackbound_stages.rans import Rans
from stackbound_stages.transform import PredictTransform, TransformOptions
from stackbound_stages.uniform import Uniform

INTEGERS = ("int8", "uint8", "int16", "uint16", "int32", "uint32", "int64", "uint64")


@st.composite
def shapes(draw: st.DrawFn) -> tuple[int, ...]:
    """One to five axes, few pixels, one pixel and long rows among them."""
    return draw(
        st.sampled_from(
            [
                (1,),
                (1, 1),
                (1, 300),
                (257, 1),
                (17, 33),
                (3, 20, 31),
                (5, 1, 40),
                (2, 1, 3, 9, 17),
                (3, 35, 8),
                (2, 2, 1, 16, 9),
            ]
        )
        | st.tuples(st.integers(1, 40), st.integers(1, 40))
        | st.tuples(st.integers(1, 9), st.integers(1, 18), st.integers(1, 18))
    )


@st.composite
def integer_pixels(draw: st.DrawFn) -> NDArray[Any]:
    """Noise, extremes, steps, ramps, narrow values far from zero, and single odd pixels."""
    dtype = np.dtype(draw(st.sampled_from(INTEGERS)))
    shape = draw(shapes())
    info = np.iinfo(dtype)
    rng = np.random.default_rng(draw(st.integers(0, 2**32)))
    kind = draw(st.sampled_from(["noise", "extremes", "bell", "constant", "ramp", "odd", "far"]))
    if kind == "noise":
        return rng.integers(info.min, info.max, shape, dtype, endpoint=True)
    if kind == "extremes":
        return np.where(rng.random(shape) < 0.5, info.min, info.max).astype(dtype)
    if kind == "bell":
        return np.clip(np.rint(rng.normal(60, draw(st.sampled_from([0.3, 3, 30])), shape)), 0, 127).astype(dtype)
    if kind == "ramp":
        return (np.arange(prod(shape)).reshape(shape) % 120).astype(dtype)
    pixels = np.full(shape, info.max if kind == "far" else 7, dtype)
    if kind == "far":
        pixels -= rng.integers(0, 100, shape).astype(dtype)
    if kind == "odd":
        pixels.flat[rng.integers(prod(shape))] = info.min
    return pixels


def tolerances() -> st.SearchStrategy[int | float]:
    """From nothing to far beyond every span."""
    return st.sampled_from([0, 1, 2, 0.5, 3.99, 7, 100, 2**15, 2**31, 2**63, 2.0**70, float("inf")]) | st.integers(
        0, 300
    )


class Liar(Predict):
    """Predicts with random numbers of the vocabulary, far off and at the limits of what decoders accept."""

    name = "liar"

    def __init__(self, seed: int) -> None:
        super().__init__()
        self.seed = seed

    def predict(self, tile: Any, plan: Any, size: Any) -> Any:
        """Return anything that has the right shapes."""
        rng = np.random.default_rng(self.seed)
        if rng.random() < 0.2:
            return NoPrediction() if rng.random() < 0.5 else _lying_neighbours(rng, NoPrediction())
        sides = [rng.choice([s for s in (1, 2, 4, 8, 16, 32) if s < 2 * n]) for n in tile.values.shape]
        block = (min(int(sides[0]), 16), int(sides[1]), int(sides[2]))
        blocks = prod(counts(tile.values.shape, block))
        size_of = 2 ** int(rng.integers(0, 32))
        indices = rng.integers(-size_of, size_of, (*block, blocks))
        steps = rng.integers(1, 2 ** int(rng.integers(1, 26)) + 1, block)
        bases = tuple(
            "dct" if rng.random() < 0.5 else rng.integers(-(2**13), 2**13, (side, side), endpoint=True)
            for side in block
        )
        base = BlockPrediction(block, bases, steps, indices)
        return base if rng.random() < 0.6 else _lying_neighbours(rng, base if rng.random() < 0.5 else NoPrediction())


def _lying_neighbours(rng: np.random.Generator, base: NoPrediction | BlockPrediction) -> NeighbourPrediction:
    """Return neighbours that foresee nothing: random places and weights."""
    count = 8 * int(rng.integers(0, 5))
    taps = np.stack([-rng.integers(0, 2, count), rng.integers(-3, 4, count), rng.integers(-3, 4, count)], 1)
    taps[taps[:, 0] == 0, 1] = -1 - np.abs(taps[taps[:, 0] == 0, 1]) % 3
    most = 2 ** int(rng.integers(1, 9))
    weights = rng.integers(-most, most, (4, count)).astype(np.int32)
    left = rng.integers(-most, most, (4, 3)).astype(np.int32)
    alone, clamped = rng.random(2) < 0.5
    return NeighbourPrediction(base, taps.astype(np.int64), weights, left, alone=bool(alone), clamped=bool(clamped))


def plain_coder(transform: Transform | None = None, quantize: Quantize | None = None, **options: Any) -> TileCoder:
    """Return a coder with the built-in stages, or with another transform or quantizer."""
    encode: Encode = Rans()
    stage = PredictTransform(
        TransformOptions(**options) if options else None, transform=transform or Dct(), quantize=quantize or Uniform()
    )
    return TileCoder(stage, encode)


def neighbour_coder(**options: Any) -> TileCoder:
    """Return a coder with decoded neighbours."""
    stage = PredictNeighbours(NeighbourOptions(**options), transform=Dct(), quantize=Uniform())
    return TileCoder(stage, Rans())


def coders() -> st.SearchStrategy[TileCoder]:
    """Draw the built-in predictors, blocks at both ends of what is allowed, and a predictor that lies."""
    fixed = [
        TileCoder(PredictNone(), Rans()),
        plain_coder(block=[4, 8, 8], step=0),
        plain_coder(block=[1, 16, 16], step=6),
        plain_coder(block=[16, 32, 32], step=-2),
        plain_coder(block=[2, 1, 4], step=12),
        neighbour_coder(),
        neighbour_coder(base=True, clamped=True, stack=True),
    ]
    return st.sampled_from(fixed) | st.integers(0, 2**32).map(lambda seed: TileCoder(Liar(seed), Rans()))


def largest_error(original: NDArray[Any], decoded: NDArray[Any]) -> int:
    """Return the largest difference, exactly, for any integer type."""
    return max(abs(int(a) - int(b)) for a, b in zip(original.ravel(), decoded.ravel(), strict=True))
