"""Which neighbours, which switches and which base suit a stack: by measured bytes on a small sample."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from math import frexp
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound import blockplan, neighbours
from stackbound.blocksearch import Choice
from stackbound.lattice import LatticeTile
from stackbound.prediction import BlockPrediction, NeighbourPrediction, NoPrediction, Prediction
from stackbound.stages import Plan, Quantize, Transform

Size = Callable[[LatticeTile, Prediction], int]

PIECE = (6, 192, 64)
"""Pieces on which sizes are measured: tall rather than wide, because bands are."""

PIECES = 2
STEPS = (6.0, 12.0)
"""Steps of the base that are tried, in units of what the neighbours alone leave: coarse, only lasting structure pays."""

WORTH = 0.99
"""A base must save 1 %: it takes a quarter of the time of decoding."""


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


def search(
    samples: Sequence[LatticeTile], fixed: Fixed, transform: Transform | None, quantize: Quantize | None, size: Size
) -> Plan:
    """Return a plan: switch by switch, keeping what makes the sample smaller.

    Parameters
    ----------
    samples : sequence of LatticeTile
        Whole tiles.
    fixed : Fixed
    transform, quantize : stages, optional
        For the base.
    size : callable
        Bytes of a tile under a prediction.
    """
    usable = [tile for tile in samples if neighbours.possible(tile.span, tile.values.shape[1])]
    if not usable:
        return {"none": True}
    pieces = [_piece(tile) for tile in usable[len(usable) // 4 :: max(1, len(usable) // PIECES)][:PIECES]]

    def measure(setup: _Setup) -> int:
        return sum(size(piece, _prediction(piece, setup, transform, quantize)) for piece in pieces)

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
        if (bytes_ := measure(tried)) < least:
            setup, least = tried, bytes_
    if fixed.base is not False and transform is not None and quantize is not None:
        setup = _with_base(setup, least, usable, pieces, deep, fixed.base is True, transform, quantize, measure)
    return _to_plan(setup)


def _with_base(
    setup: _Setup, least: int, tiles: Sequence[LatticeTile], pieces: Sequence[LatticeTile], deep: bool, forced: bool,
    transform: Transform, quantize: Quantize, measure: Callable[[_Setup], int],
) -> _Setup:  # fmt: skip
    """Return the setup with the best base, where one is worth it."""
    tile = tiles[0]
    # What the neighbours leave, from the bits that it takes: a Gaussian of deviation s needs log2(4.13 s / w) bits.
    bits = 8 * least / sum(piece.values.size for piece in pieces)
    wide = 2 * tile.tolerance + 1
    left = max(2.0**bits / 4.13, 0.35) * wide
    block = blockplan.fitting((4, 16, 16) if deep and len(tile.values) >= 4 else (1, 32, 32), tile.values.shape)
    found: list[tuple[int, _Setup]] = []
    for factor in STEPS:
        choice = Choice(block, _exponent(factor * left / wide))
        tried = replace(
            _fitted(tiles, (deep and not setup.alone) or deep, choice, transform, quantize), alone=setup.alone
        )
        found.append((measure(tried), tried))
    smallest, best = min(found, key=lambda pair: pair[0])
    return best if forced or smallest < WORTH * least else setup


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
    pieces = [_piece(tile) for tile in tiles[:PIECES]]
    bases = [_formed(piece, _base(piece, choice, transform, quantize)) for piece in pieces]
    return _Setup(*neighbours.fit(pieces, bases, stack=stack), choice=choice)


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


def _piece(tile: LatticeTile) -> LatticeTile:
    """Return the middle of a tile."""
    cut = tuple(
        slice((length - min(length, side)) // 2, (length + min(length, side)) // 2)
        for length, side in zip(tile.values.shape, PIECE, strict=True)
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
    if plan.get("none"):
        return NoPrediction()
    choice = None
    if "block" in plan:
        depth, height, width = plan["block"]
        choice = Choice((depth, height, width), int(plan["step"]))
    setup = _Setup(
        np.array(plan["taps"], np.int64).reshape(-1, 3), np.array(plan["weights"], np.int32),
        np.array(plan["left"], np.int32), bool(plan["alone"]), bool(plan["clamped"]), choice,
    )  # fmt: skip
    return _prediction(tile, setup, transform, quantize)
