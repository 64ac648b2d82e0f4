"""Which neighbours, which switches and which base suit a stack: by measured bits on a small sample."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from math import frexp, isqrt, prod
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound import blockplan, neighbours
from stackbound.blocksearch import Choice
from stackbound.lattice import LatticeTile
from stackbound.prediction import BlockPrediction, NeighbourPrediction, NoPrediction, Prediction
from stackbound.stages import Plan, Quantize, Transform

SHARE = 48
"""A trial codes about one pixel in so many of the sample: five trials take a tenth of the time of coding it."""

FEWEST, MOST = 12_000, 150_000
"""But at least and at most so many pixels."""

STEPS = (6.0, 9.0)
"""Steps of the base that are tried, in units of what the neighbours alone leave: only lasting structure pays."""

DIFFERENT = 0.998
"""A switch must save 0.2 % of a small sample, or it is chance."""

WORTH = 0.99
"""A base must save 1 %: it takes as long as all the rest."""


@dataclass(frozen=True)
class Fixed:
    """What the user has chosen."""

    stack: bool | None = None
    clamped: bool | None = None
    base: bool = False


@dataclass(frozen=True)
class _Setup:
    """One way to predict: weights and switches, and the base's block and step."""

    taps: NDArray[np.int64]
    weights: NDArray[np.int32]
    left: NDArray[np.int32]
    alone: bool = False
    clamped: bool = False
    choice: Choice | None = None


def possible(tile: LatticeTile) -> bool:
    """Return whether a tile can be coded in bands."""
    return tile.tolerances is None and neighbours.possible(tile.span, tile.values.shape[1])


def search(
    samples: Sequence[LatticeTile], fixed: Fixed, transform: Transform | None, quantize: Quantize | None
) -> Plan:
    """Return a plan: switch by switch, keeping what makes the sample smaller; empty where bands are impossible.

    Parameters
    ----------
    samples : sequence of LatticeTile
        Whole tiles.
    fixed : Fixed
    transform, quantize : stages, optional
        For the base.
    """
    usable = [tile for tile in samples if possible(tile)]
    if not usable:
        return {}
    pieces = _pieces(usable)

    def measure(setup: _Setup) -> float:
        return sum(_bits(piece, setup, transform, quantize) for piece in pieces)

    deep = all(len(tile.values) > 1 for tile in usable) and fixed.stack is not False
    setup = _fitted(usable, deep, None, transform, quantize)
    setup = replace(setup, clamped=bool(fixed.clamped))
    least = measure(setup)
    trials: list[Callable[[], _Setup]] = []
    if deep:
        trials.append(lambda: replace(setup, alone=True))
        if fixed.stack is None:
            trials.append(lambda: replace(_fitted(usable, False, None, transform, quantize), alone=True))
    if fixed.clamped is None:
        trials.append(lambda: replace(setup, clamped=True))
    for trial in trials:
        tried = trial()
        if (bits := measure(tried)) < DIFFERENT * least:
            setup, least = tried, bits
    if fixed.base and transform is not None and quantize is not None:
        setup = _with_base(setup, least, usable, pieces, deep, transform, quantize, measure)
    return _to_plan(setup)


def _with_base(
    setup: _Setup, least: float, tiles: Sequence[LatticeTile], pieces: Sequence[LatticeTile], deep: bool,
    transform: Transform, quantize: Quantize, measure: Callable[[_Setup], float],
) -> _Setup:  # fmt: skip
    """Return the setup with the best base, where one is worth it."""
    # What the neighbours leave, from the bits that it takes: a Gaussian of deviation s needs log2(4.13 s / w) bits.
    left = max(2.0 ** (least / sum(piece.values.size for piece in pieces)) / 4.13, 0.35)
    shape = tiles[0].values.shape
    block = blockplan.fitting((4, 16, 16) if deep and shape[0] >= 4 else (1, 32, 32), shape)
    found: list[tuple[float, _Setup]] = []
    for exponent in dict.fromkeys(_exponent(factor * left) for factor in STEPS):
        fitted = _fitted(pieces, deep, Choice(block, exponent), transform, quantize)
        tried = replace(fitted, alone=setup.alone)
        found.append((measure(tried), tried))
    smallest, best = min(found, key=lambda pair: pair[0])
    return best if smallest < WORTH * least else setup


def _exponent(ratio: float) -> int:
    """Return the whole number of half octaves nearest to a ratio."""
    mantissa, octave = frexp(ratio)
    return min(20, max(0, 2 * octave - (2 if mantissa < 2**-0.75 else 1 if mantissa < 2**-0.25 else 0)))


def _fitted(
    tiles: Sequence[LatticeTile], stack: bool, choice: Choice | None, transform: Transform | None,
    quantize: Quantize | None,
) -> _Setup:  # fmt: skip
    if choice is None or transform is None or quantize is None:
        return _Setup(*neighbours.fit(tiles, [neighbours.NOTHING] * len(tiles), stack=stack))
    bases = [_formed(tile, _base(tile, choice, transform, quantize)) for tile in tiles]
    return _Setup(*neighbours.fit(tiles, bases, stack=stack), choice=choice)


def _base(tile: LatticeTile, choice: Choice, transform: Transform, quantize: Quantize) -> BlockPrediction:
    block = blockplan.fitting(choice.block, tile.values.shape)
    return blockplan.predicted(tile, block, choice.step(tile.tolerance), transform, quantize, {})


def _formed(tile: LatticeTile, base: BlockPrediction) -> NDArray[np.int32]:
    from stackbound.tilecore import check, form

    return form(check(base, tile), tile.values.shape, tile.span)


def _prediction(
    tile: LatticeTile, setup: _Setup, transform: Transform | None, quantize: Quantize | None
) -> NeighbourPrediction:
    base: NoPrediction | BlockPrediction = NoPrediction()
    if setup.choice is not None and transform is not None and quantize is not None:
        base = _base(tile, setup.choice, transform, quantize)
    return NeighbourPrediction(base, setup.taps, setup.weights, setup.left, setup.alone, setup.clamped)


def _bits(tile: LatticeTile, setup: _Setup, transform: Transform | None, quantize: Quantize | None) -> float:
    """Return about how many bits a tile takes."""
    prediction = _prediction(tile, setup, transform, quantize)
    formed, bits = neighbours.NOTHING, 0.0
    if isinstance(prediction.base, BlockPrediction):
        formed = _formed(tile, prediction.base)
        bits = _index_bits(prediction.base.indices.reshape(prod(prediction.base.block), -1))
    return bits + neighbours.estimate(tile.values, formed, prediction, tile.tolerance, tile.span)


def _index_bits(indices: NDArray[np.int32]) -> float:
    """Return about how many bits indices (frequencies, blocks) take.

    Those of a small piece would be judged wrongly by their bytes, most of which are tables: here it is the entropy of
    which are zero, by frequency, one bit for each sign and two for each octave of magnitude.
    """
    magnitudes = np.abs(indices)
    # The mean of a block is coded as its difference from the block before.
    magnitudes[0, 1:] = np.abs(np.diff(indices[0]))
    blocks = magnitudes.shape[1]
    used = np.count_nonzero(magnitudes, 1).astype(np.float64)
    used = used[(used > 0) & (used < blocks)]
    shares = used / blocks
    zeros = -blocks * float((shares * np.log2(shares) + (1 - shares) * np.log2(1 - shares)).sum())
    return float(zeros + (1 + 2 * np.log2(magnitudes[magnitudes > 0])).sum())


def _pieces(tiles: Sequence[LatticeTile]) -> list[LatticeTile]:
    """Return the middles of some tiles, on which bits are measured: tall rather than wide, because bands are."""
    pixels = sum(tile.values.size for tile in tiles)
    chosen = tiles[:: -(-len(tiles) // 4)]
    budget = min(MOST, max(FEWEST, pixels // SHARE)) // len(chosen)
    return [_piece(tile, budget) for tile in chosen]


def _piece(tile: LatticeTile, pixels: int) -> LatticeTile:
    nz, ny, nx = tile.values.shape
    depth = min(nz, 8)
    height = min(ny, max(128, isqrt(4 * pixels // depth)))
    width = min(nx, max(32, pixels // (depth * height)))
    cut = tuple(
        slice((whole - part) // 2, (whole - part) // 2 + part)
        for whole, part in zip((nz, ny, nx), (depth, height, width), strict=True)
    )
    return LatticeTile(np.ascontiguousarray(tile.values[cut]), tile.span, tile.tolerance)


def _to_plan(setup: _Setup) -> Plan:
    plan: dict[str, Any] = {
        "taps": setup.taps.tolist(), "weights": setup.weights.tolist(), "left": setup.left.tolist(),
        "alone": setup.alone, "clamped": setup.clamped,
    }  # fmt: skip
    if setup.choice is not None:
        plan |= {"block": list(setup.choice.block), "step": setup.choice.exponent}
    return plan


def predicted(tile: LatticeTile, plan: Plan, transform: Transform | None, quantize: Quantize | None) -> Prediction:
    """Return the prediction of one tile under a plan."""
    choice = None
    if "block" in plan:
        depth, height, width = plan["block"]
        choice = Choice((depth, height, width), int(plan["step"]))
    setup = _Setup(
        np.array(plan["taps"], np.int64).reshape(-1, 3), np.array(plan["weights"], np.int32),
        np.array(plan["left"], np.int32), bool(plan["alone"]), bool(plan["clamped"]), choice,
    )  # fmt: skip
    return _prediction(tile, setup, transform, quantize)
