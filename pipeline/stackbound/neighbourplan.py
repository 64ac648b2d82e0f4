"""Which neighbours, which switches and which base suit a stack: by measured bits on a small sample."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
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

LOW_RATE = 1.2
"""Bits a pixel. Above, a base saves 1 % at most and takes as long as all the rest; far below, it halves the bytes."""

WORTH = 0.94
"""A base must save 6 % of a tile: coding and decoding take twice as long with it."""

INDEX_COST = 0.67
"""Indices take so many bits for each bit of their entropy by frequency, since each is coded among its neighbours."""


@dataclass(frozen=True)
class Fixed:
    """What the user has chosen."""

    stack: bool | None = None
    clamped: bool | None = None
    base: bool | None = None


@dataclass(frozen=True)
class _Setup:
    """One way to predict: weights and switches, and the base's block and step."""

    taps: NDArray[np.int64]
    weights: NDArray[np.int32]
    left: NDArray[np.int32]
    alone: bool = False
    clamped: bool = False
    choice: Choice | None = None
    fitted: Plan = field(default_factory=dict)


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
    setup = _fitted(usable, deep)
    setup = replace(setup, clamped=bool(fixed.clamped))
    least = measure(setup)
    trials: list[Callable[[], _Setup]] = []
    if deep:
        trials.append(lambda: replace(setup, alone=True))
        if fixed.stack is None:
            trials.append(lambda: replace(_fitted(usable, False), alone=True))
    if fixed.clamped is None:
        trials.append(lambda: replace(setup, clamped=True))
    for trial in trials:
        tried = trial()
        if (bits := measure(tried)) < DIFFERENT * least:
            setup, least = tried, bits
    plan = dict(_to_plan(setup))
    rate = least / sum(piece.values.size for piece in pieces)
    if transform is not None and quantize is not None and (fixed.base or (fixed.base is None and rate < LOW_RATE)):
        based, bits = _with_base(setup, rate, usable, pieces, deep, transform, quantize, measure)
        if bits < WORTH * least:
            plan["base"] = _to_plan(based)
    return plan


def _with_base(
    setup: _Setup, rate: float, tiles: Sequence[LatticeTile], pieces: Sequence[LatticeTile], deep: bool,
    transform: Transform, quantize: Quantize, measure: Callable[[_Setup], float],
) -> tuple[_Setup, float]:  # fmt: skip
    """Return the best setup on a base and its bits. `rate` is what the neighbours alone take, in bits a pixel."""
    # What the neighbours leave, from the bits that it takes: a Gaussian of deviation s needs log2(4.13 s / w) bits.
    left = max(2.0**rate / 4.13, 0.35)
    shape = tiles[0].values.shape
    block = blockplan.fitting((4, 16, 16) if deep and shape[0] >= 4 else (1, 32, 32), shape)
    fitted = transform.fit(blockplan.pixels(pieces[0], block), block)
    found: list[tuple[float, _Setup]] = []
    for exponent in dict.fromkeys(_exponent(factor * left) for factor in STEPS):
        choice = Choice(block, exponent)
        bases = [_formed(piece, _base(piece, choice, fitted, transform, quantize)) for piece in pieces]
        tried = _Setup(*neighbours.fit(pieces, bases, stack=deep), alone=setup.alone, choice=choice, fitted=fitted)
        found.append((measure(tried), tried))
    bits, best = min(found, key=lambda pair: pair[0])
    return best, bits


def _exponent(ratio: float) -> int:
    """Return the whole number of half octaves nearest to a ratio."""
    mantissa, octave = frexp(ratio)
    return min(20, max(0, 2 * octave - (2 if mantissa < 2**-0.75 else 1 if mantissa < 2**-0.25 else 0)))


def _fitted(tiles: Sequence[LatticeTile], stack: bool) -> _Setup:
    return _Setup(*neighbours.fit(tiles, [neighbours.NOTHING] * len(tiles), stack=stack))


def _base(tile: LatticeTile, choice: Choice, fitted: Plan, transform: Transform, quantize: Quantize) -> BlockPrediction:
    block = blockplan.fitting(choice.block, tile.values.shape)
    # Another block needs another basis; the transform's own is the same for all.
    known = fitted if block == choice.block else transform.fit(blockplan.pixels(tile, block), block)
    return blockplan.predicted(tile, block, choice.step(tile.tolerance), transform, quantize, known)


def _formed(tile: LatticeTile, base: BlockPrediction) -> NDArray[np.int32]:
    from stackbound.tilecore import check, form

    return form(check(base, tile), tile.values.shape, tile.span)


def _prediction(
    tile: LatticeTile, setup: _Setup, transform: Transform | None, quantize: Quantize | None
) -> NeighbourPrediction:
    base: NoPrediction | BlockPrediction = NoPrediction()
    if setup.choice is not None and transform is not None and quantize is not None:
        base = _base(tile, setup.choice, setup.fitted, transform, quantize)
    return NeighbourPrediction(base, setup.taps, setup.weights, setup.left, setup.alone, setup.clamped)


def _bits(tile: LatticeTile, setup: _Setup, transform: Transform | None, quantize: Quantize | None) -> float:
    """Return about how many bits a tile takes."""
    indices, residuals = _both_bits(tile, setup, transform, quantize)
    return indices + residuals


def _both_bits(
    tile: LatticeTile, setup: _Setup, transform: Transform | None, quantize: Quantize | None
) -> tuple[float, float]:
    """Return about how many bits the indices and the residuals of a tile take."""
    prediction = _prediction(tile, setup, transform, quantize)
    formed = neighbours.NOTHING
    if isinstance(prediction.base, BlockPrediction):
        formed = _formed(tile, prediction.base)
    residuals = neighbours.estimate(tile.values, formed, prediction, tile.tolerance, tile.span)
    return _index_bits(prediction), residuals


def _index_bits(prediction: NeighbourPrediction) -> float:
    """Return about how many bits the indices of a prediction take.

    Those of a small piece would be judged wrongly by their bytes, most of which are tables: here it is the entropy of
    which are zero, by frequency, one bit for each sign and two for each octave of magnitude.
    """
    if not isinstance(prediction.base, BlockPrediction):
        return 0.0
    indices = prediction.base.indices.reshape(prod(prediction.base.block), -1)
    magnitudes = np.abs(indices)
    # The mean of a block is coded as its difference from the block before.
    magnitudes[0, 1:] = np.abs(np.diff(indices[0]))
    blocks = magnitudes.shape[1]
    used = np.count_nonzero(magnitudes, 1).astype(np.float64)
    used = used[(used > 0) & (used < blocks)]
    shares = used / blocks
    zeros = -blocks * float((shares * np.log2(shares) + (1 - shares) * np.log2(1 - shares)).sum())
    return INDEX_COST * float(zeros + (1 + 2 * np.log2(magnitudes[magnitudes > 0])).sum())


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
        plan |= {"block": list(setup.choice.block), "step": setup.choice.exponent, "fitted": dict(setup.fitted)}
    return plan


def predicted(tile: LatticeTile, plan: Plan, transform: Transform | None, quantize: Quantize | None) -> Prediction:
    """Return the prediction of one tile under a plan: with the base where one is planned and makes the tile smaller."""
    plain = _prediction(tile, _from_plan(plan), transform, quantize)
    if "base" not in plan:
        return plain
    based = _prediction(tile, _from_plan(plan["base"]), transform, quantize)
    piece = _piece(tile, max(FEWEST, tile.values.size // SHARE))
    whole = tile.values.size / piece.values.size
    # Residuals are much the same all over a tile, but structure may be anywhere: its indices are counted in the whole.
    alone = whole * _bits(piece, _from_plan(plan), transform, quantize)
    together = whole * _both_bits(piece, _from_plan(plan["base"]), transform, quantize)[1] + _index_bits(based)
    return based if together < WORTH * alone else plain


def _from_plan(plan: Plan) -> _Setup:
    choice = None
    if "block" in plan:
        depth, height, width = plan["block"]
        choice = Choice((depth, height, width), int(plan["step"]))
    return _Setup(
        np.array(plan["taps"], np.int64).reshape(-1, 3), np.array(plan["weights"], np.int32),
        np.array(plan["left"], np.int32), bool(plan["alone"]), bool(plan["clamped"]), choice, plan.get("fitted", {}),
    )  # fmt: skip
