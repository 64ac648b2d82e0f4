"""One array of lattice values to bytes and back: prediction, residual, entropy coding."""

from __future__ import annotations

from dataclasses import dataclass
from math import prod

import numpy as np
from numpy.typing import NDArray

from stackbound import entropy, neighbours, zstdcoder
from stackbound.byteio import Reader, Writer, damaged
from stackbound.errors import PluginError
from stackbound.kernels import bound, inverse
from stackbound.kernels.basis import COEFFICIENT_LIMIT, LENGTHS, cosine, widest
from stackbound.kernels.blocks import counts
from stackbound.lattice import LatticeTile, Part
from stackbound.prediction import BlockPrediction, NeighbourPrediction, NoPrediction, Prediction
from stackbound.stages import Encode

CODERS = ("rans", "zstd")
NO_PREDICTION, BLOCKS, NEIGHBOURS, NEIGHBOURS_ON_BLOCKS = 0, 1, 2, 3
COSINE, MATRIX = 0, 1
INDEX_LIMIT = 2**28
"""Differences of three of them fit 32 bits."""
DEEPEST_BLOCK = 16
MATRIX_LIMIT = 2**15


@dataclass(frozen=True)
class Parts:
    """The bytes of one array by what they hold."""

    head: bytes
    indices: bytes
    residuals: bytes
    values: NDArray[np.int32]
    """The lattice values that the decoder will make of them."""

    def __len__(self) -> int:
        return len(self.head) + len(self.indices) + len(self.residuals)


def encode(tile: LatticeTile, prediction: Prediction, stage: Encode) -> Parts:
    """Return the bytes of a tile under a prediction; the error stays within the tolerance whatever that is.

    Raises
    ------
    stackbound.errors.PluginError
        The stage names a coder that decoders do not know.
    """
    if stage.coder not in CODERS:
        raise PluginError(f"coder {stage.coder!r} is not one of {CODERS}", where=f"encode {stage.name}")
    plain = stage.coder == "zstd"
    writer = Writer()
    writer.number(CODERS.index(stage.coder))
    indices = b""
    around: NeighbourPrediction | None = None
    if isinstance(prediction, NeighbourPrediction):
        if not plain and tile.tolerances is None and neighbours.possible(tile.span, tile.values.shape[1]):
            around = prediction
        prediction = prediction.base
    if isinstance(prediction, BlockPrediction):
        checked = check(prediction, tile)
        writer.number(BLOCKS if around is None else NEIGHBOURS_ON_BLOCKS)
        _write_prediction(writer, checked)
        grid = counts(tile.values.shape, checked.block)
        flat = checked.indices.reshape(prod(checked.block), -1)
        indices = zstdcoder.encode(flat, stage.effort) if plain else entropy.encode_indices(flat, checked.block, grid)
        predicted = form(checked, tile.values.shape, tile.span)
    else:
        writer.number(NO_PREDICTION if around is None else NEIGHBOURS)
        predicted = neighbours.NOTHING if around is not None else form(prediction, tile.values.shape, tile.span)
    if around is not None:
        coded, decoded = neighbours.encode(tile.values, predicted, around, tile.tolerance, tile.span)
        return Parts(bytes(writer.data), indices, coded, decoded)
    residuals = np.empty_like(predicted)
    if tile.tolerances is None:
        bound.residual(tile.values, predicted, 2 * tile.tolerance + 1, residuals)
    else:
        bound.residual_each(tile.values, predicted, 2 * tile.tolerances + 1, residuals)
    coded = zstdcoder.encode(residuals, stage.effort) if plain else entropy.encode_residuals(residuals)
    _pull(predicted, residuals, Part(tile.span, tile.tolerance, tile.tolerances))
    return Parts(bytes(writer.data), indices, coded, predicted)


def decode(reader: Reader, shape: tuple[int, int, int], part: Part) -> NDArray[np.int32]:
    """Return the lattice values of a tile (nz, ny, nx)."""
    plain = CODERS[reader.number(len(CODERS) - 1)] == "zstd"
    kind = reader.number(NEIGHBOURS_ON_BLOCKS)
    if kind == NEIGHBOURS:
        predicted = neighbours.NOTHING
    elif kind == NO_PREDICTION:
        predicted = form(NoPrediction(), shape, part.span)
    else:
        predicted = form(_read_prediction(reader, shape, plain), shape, part.span)
    if kind >= NEIGHBOURS:
        if plain or part.tolerances is not None:
            raise damaged("neighbours with a coder or tolerances that do not go with them")
        return neighbours.decode(reader, predicted, shape, part.tolerance, part.span)
    if plain:
        _pull(predicted, zstdcoder.decode(reader, prod(shape)).reshape(shape), part)
    else:
        _pull(predicted, entropy.decode_residuals(reader, shape), part)
    return predicted


def _pull(predicted: NDArray[np.int32], residuals: NDArray[np.int32], part: Part) -> None:
    """Turn a prediction into the decoded values, in place."""
    if part.tolerances is None:
        bound.reconstruct(predicted, residuals, 2 * part.tolerance + 1, part.span, predicted)
    else:
        bound.reconstruct_each(predicted, residuals, 2 * part.tolerances + 1, part.span, predicted)


def describe(reader: Reader, span: int) -> dict[str, object]:
    """Return in words what the first array of a tile is predicted with."""
    if span == 0:
        return {"mode": "constant"}
    coder = CODERS[reader.number(len(CODERS) - 1)]
    kind = reader.number(NEIGHBOURS_ON_BLOCKS)
    if kind in (NO_PREDICTION, NEIGHBOURS):
        return {"mode": "none" if kind == NO_PREDICTION else "neighbours", "coder": coder}
    block = [LENGTHS[reader.number(len(LENGTHS) - 1)] for _ in range(3)]
    mode = "transform" if kind == BLOCKS else "neighbours on transform"
    return {"mode": mode, "block": block, "coder": coder}


def form(prediction: NoPrediction | BlockPrediction, shape: tuple[int, int, int], span: int) -> NDArray[np.int32]:
    """Return the integer prediction that every decoder forms from the numbers of a prediction."""
    if isinstance(prediction, NoPrediction):
        return np.full(shape, (span + 1) // 2, np.int32)
    return inverse.predict(
        prediction.indices.reshape(prod(prediction.block), -1),
        prediction.steps.ravel(),
        prediction.block,
        prediction.bases,
        span,
        shape,
    )


def check(prediction: BlockPrediction, tile: LatticeTile) -> BlockPrediction:
    """Return a prediction with its numbers clipped to what decoders accept.

    Raises
    ------
    stackbound.errors.PluginError
        A shape, a dtype or a number that no decoder could use.
    """
    block = prediction.block
    if any(side not in LENGTHS for side in block) or block[0] > DEEPEST_BLOCK:
        raise PluginError(f"block {block} is not made of lengths {LENGTHS}, at most {DEEPEST_BLOCK} along z")
    blocks = prod(counts(tile.values.shape, block))
    indices, steps = prediction.indices, prediction.steps
    if indices.dtype.kind != "i" or indices.shape[:3] != block or indices.ndim != 4 or indices.shape[3] < blocks:
        raise PluginError(f"indices of type {indices.dtype} and shape {indices.shape} do not fit blocks {block}")
    if steps.shape != block or steps.dtype.kind != "i" or steps.min() < 1 or steps.max() > COEFFICIENT_LIMIT:
        raise PluginError(f"steps must be whole numbers from 1 to {COEFFICIENT_LIMIT}, one per frequency")
    for side, base in zip(block, prediction.bases, strict=True):
        if isinstance(base, np.ndarray):
            if base.shape != (side, side) or base.dtype.kind != "i" or np.abs(base).max() > MATRIX_LIMIT:
                raise PluginError(
                    f"the transform's basis must hold {side} by {side} whole numbers of magnitude up to {MATRIX_LIMIT}"
                )
        elif base != "dct":
            raise PluginError(f"the transform's basis {base!r} is not known to decoders")
    if not exact(block, prediction.bases):
        raise PluginError("the transform's basis functions are so large that the inverse would not be exact")
    if indices.dtype != np.int32 or indices.min() < -INDEX_LIMIT or indices.max() > INDEX_LIMIT:
        indices = np.clip(indices, -INDEX_LIMIT, INDEX_LIMIT).astype(np.int32)
    return BlockPrediction(block, prediction.bases, steps.astype(np.int64), indices[..., :blocks])


def exact(block: tuple[int, ...], bases: tuple[str | NDArray[np.int64], ...]) -> bool:
    """Return whether every partial sum of the inverse stays where float64 is exact, and its rounding too."""
    matrices = [cosine(side) if isinstance(base, str) else base for side, base in zip(block, bases, strict=True)]
    return widest(matrices) < 2**53


def _write_prediction(writer: Writer, prediction: BlockPrediction) -> None:
    for side in prediction.block:
        writer.number(side.bit_length() - 1)
    for base in prediction.bases:
        if isinstance(base, str):
            writer.number(COSINE)
        else:
            writer.number(MATRIX)
            for value in base.ravel().tolist():
                writer.signed(value)
    steps = prediction.steps.ravel()
    uniform = bool((steps == steps[0]).all())
    writer.number(0 if uniform else 1)
    for step in steps[:1].tolist() if uniform else steps.tolist():
        writer.number(step)


def _read_prediction(reader: Reader, shape: tuple[int, int, int], plain: bool) -> BlockPrediction:
    depth, height, width = (LENGTHS[reader.number(len(LENGTHS) - 1)] for _ in range(3))
    block = (depth, height, width)
    if depth > DEEPEST_BLOCK or any(side >= 2 * length for side, length in zip(block, shape, strict=True)):
        raise damaged(f"blocks {block} for a tile of {shape}")
    bases: list[str | NDArray[np.int64]] = []
    for side in block:
        if reader.number(MATRIX) == COSINE:
            bases.append("dct")
            continue
        values = np.array([reader.signed() for _ in range(side * side)], dtype=object)
        if max(abs(value) for value in values) > MATRIX_LIMIT:
            raise damaged("a basis function is too large")
        bases.append(values.astype(np.int64).reshape(side, side))
    if not exact(block, tuple(bases)):
        raise damaged("basis functions are too large together")
    frequencies = prod(block)
    given = frequencies if reader.number(1) else 1
    steps = np.array([reader.number(COEFFICIENT_LIMIT) for _ in range(given)], np.int64)
    if steps.min() < 1:
        raise damaged("a step is zero")
    grid = counts(shape, block)
    if plain:
        indices = zstdcoder.decode(reader, frequencies * prod(grid)).reshape(frequencies, -1)
        indices = np.clip(indices, -INDEX_LIMIT, INDEX_LIMIT)
    else:
        indices = entropy.decode_indices(reader, block, grid)
    return BlockPrediction(
        block, tuple(bases), np.broadcast_to(steps.reshape(-1), (frequencies,)).reshape(block).copy(),
        indices.reshape(*block, -1),
    )  # fmt: skip
