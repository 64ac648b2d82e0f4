"""Block shape and step by measured bytes on a sample."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass

import numpy as np

from stackbound.blockplan import coefficients, fitting, predicted
from stackbound.lattice import LatticeTile
from stackbound.prediction import Prediction
from stackbound.stages import Plan, Quantize, Transform

Block = tuple[int, int, int]

BLOCKS: tuple[Block, ...] = ((1, 16, 16), (1, 8, 8), (1, 32, 32), (4, 8, 8), (4, 16, 16), (1, 1, 32), (1, 1, 8))
"""Shapes that are tried: planes with camera noise like 32 by 32, edges 8 by 8, neighbouring planes 4 deep."""

FIRST_STEP = 6
"""Exponent of the step tried first, in half octaves of 2E+1: coarse, since the residual carries the noise anyway."""

FEWEST, MOST = -2, 12
"""Range of the exponents: finer steps leave nothing to the residual, coarser ones nothing to the transform."""

SAMPLE_SIDE = 128
SAMPLE_DEPTH = 8


@dataclass(frozen=True)
class Choice:
    """A block shape and the exponent of its step, ``(2E+1) * 2**(exponent/2)``."""

    block: Block
    exponent: int

    def step(self, tolerance: int) -> float:
        """Return the step in lattice units."""
        # Products of exact powers of two and one constant: the same number on every machine.
        root = 1.0 if self.exponent % 2 == 0 else 1.4142135623730951
        return (2 * tolerance + 1) * root * 2.0 ** (self.exponent // 2)


def sample(tile: LatticeTile) -> LatticeTile:
    """Return the middle of a tile, at most 8 x 128 x 128."""
    shape = tile.values.shape
    sides = [min(length, side) for length, side in zip(shape, (SAMPLE_DEPTH, SAMPLE_SIDE, SAMPLE_SIDE), strict=True)]
    # A row of pixels gives its share along the row.
    if shape[0] == shape[1] == 1:
        sides[2] = min(shape[2], SAMPLE_DEPTH * SAMPLE_SIDE * SAMPLE_SIDE)
    start = [(length - side) // 2 for length, side in zip(shape, sides, strict=True)]
    cut = tuple(slice(first, first + side) for first, side in zip(start, sides, strict=True))
    each = tile.tolerances
    if each is not None:
        each = each[tuple(part if own > 1 else slice(None) for own, part in zip(each.shape, cut, strict=True))]
    return LatticeTile(np.ascontiguousarray(tile.values[cut]), tile.span, tile.tolerance, each)


def search(
    tiles: Iterable[LatticeTile],
    blocks: Iterable[Block],
    exponents: Iterable[int] | None,
    transform: Transform,
    quantize: Quantize,
    fitted: Callable[[Block], Plan],
    size: Callable[[LatticeTile, Prediction], int],
) -> Choice:
    """Return the block and step that take the fewest bytes for these tiles.

    Every block is tried with the same step, the best two with steps an octave apart until they grow, and the best step
    half an octave to both sides.
    """
    samples = list(tiles)
    shapes = list(dict.fromkeys(fitting(block, tile.values.shape) for tile in samples for block in blocks))
    fixed = None if exponents is None else list(exponents)
    transformed: dict[Block, list[np.ndarray[tuple[int, ...], np.dtype[np.float32]]]] = {}
    known: dict[Choice, int] = {}

    def measure(choice: Choice) -> int:
        if choice not in known:
            if choice.block not in transformed:
                plan = fitted(choice.block)
                transformed[choice.block] = [coefficients(tile, choice.block, transform, plan) for tile in samples]
            total = 0
            for tile, values in zip(samples, transformed[choice.block], strict=True):
                step = choice.step(tile.tolerance)
                plan = fitted(choice.block)
                total += size(tile, predicted(tile, choice.block, step, transform, quantize, plan, values))
            known[choice] = total
        return known[choice]

    if fixed is not None:
        return min((Choice(block, exponent) for block in shapes for exponent in fixed), key=measure)
    ranked = sorted((Choice(block, FIRST_STEP) for block in shapes), key=measure)
    best = min((_descend(choice, 2, measure) for choice in ranked[:2]), key=measure)
    return _descend(best, 1, measure)


def _descend(choice: Choice, stride: int, measure: Callable[[Choice], int]) -> Choice:
    """Return the best step reached from a choice by going on in one direction while it gets better."""
    for direction in (-stride, stride):
        moved = Choice(choice.block, choice.exponent + direction)
        while FEWEST <= moved.exponent <= MOST and measure(moved) < measure(choice):
            choice, moved = moved, Choice(choice.block, moved.exponent + direction)
    return choice
