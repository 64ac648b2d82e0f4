"""Tiles to block predictions under one block shape and step."""

from __future__ import annotations

from math import prod

import numpy as np
from numpy.typing import NDArray

from stackbound.errors import PluginError
from stackbound.kernels.basis import COEFFICIENT_LIMIT, unit
from stackbound.kernels.blocks import LANES, counts, gather
from stackbound.lattice import LatticeTile
from stackbound.prediction import BlockPrediction
from stackbound.stages import Plan, Quantize, Transform


def fitting(block: tuple[int, int, int], shape: tuple[int, ...]) -> tuple[int, int, int]:
    """Return a block without sides that a tile's shape does not fill more than half."""
    depth, height, width = (
        min(side, 1 << (length - 1).bit_length()) for side, length in zip(block, shape, strict=True)
    )
    return depth, height, width


def pixels(tile: LatticeTile, block: tuple[int, int, int]) -> NDArray[np.float32]:
    """Return a tile's blocks less the middle of its range, shape (n, bz, by, bx), n padded to a multiple of 16."""
    blocks = prod(counts(tile.values.shape, block))
    lanes = -(-blocks // LANES) * LANES
    data = np.empty((prod(block), lanes), np.float32)
    gather(tile.values, *block, 0, blocks, (tile.span + 1) // 2, data)
    return np.moveaxis(data.reshape(*block, lanes), -1, 0)


def coefficients(
    tile: LatticeTile, block: tuple[int, int, int], transform: Transform, fitted: Plan
) -> NDArray[np.float32]:
    """Return what the transform stage makes of a tile's blocks, shape (n, bz, by, bx).

    Raises
    ------
    stackbound.errors.PluginError
        The stage returned another shape or type, or values that are not finite.
    """
    given = pixels(tile, block)
    result = transform.forward(given, fitted)
    _require(transform, result, given.shape, np.dtype(np.float32))
    return result


def predicted(
    tile: LatticeTile,
    block: tuple[int, int, int],
    step: float,
    transform: Transform,
    quantize: Quantize,
    fitted: Plan,
    values: NDArray[np.float32] | None = None,
) -> BlockPrediction:
    """Return the prediction of a tile under a step in lattice units (of an orthonormal transform).

    `values` are the coefficients, where they are known already.
    """
    if values is None:
        values = coefficients(tile, block, transform, fitted)
    scale = unit(block, tile.span)
    weights = np.asarray(quantize.weights(block), np.float64)
    if weights.shape != block or not np.isfinite(weights).all() or weights.min() <= 0:
        raise PluginError("weights must be positive numbers, one per frequency", where=quantize.title)
    steps = np.clip(np.rint(step * scale * weights), 1, COEFFICIENT_LIMIT).astype(np.int64)
    indices = quantize.indices(values, steps / scale, tile.tolerance)
    _require(quantize, indices, values.shape, np.dtype(np.int32))
    bases = tuple(transform.basis(axis, side, fitted) for axis, side in enumerate(block))
    return BlockPrediction(block, bases, steps, np.moveaxis(indices, 0, -1))


def _require(stage: Transform | Quantize, result: object, shape: tuple[int, ...], dtype: np.dtype[np.generic]) -> None:
    """Refuse what a stage returned when its shape or type is wrong or a number is not finite."""
    where = stage.title
    if not isinstance(result, np.ndarray):
        raise PluginError(f"it returned {type(result).__name__}, not an array", where=where)
    if result.shape != shape or result.dtype != dtype:
        raise PluginError(
            f"it returned {result.dtype} of shape {result.shape}, not {dtype} of shape {shape}", where=where
        )
    if dtype.kind == "f" and not np.isfinite(result.sum()) and not np.isfinite(result).all():
        raise PluginError("it returned values that are not finite", where=where)
