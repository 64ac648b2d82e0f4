"""The integer inverse transform of a prediction, batch by batch."""

from __future__ import annotations

from collections.abc import Callable
from math import prod
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.kernels.basis import COEFFICIENT_LIMIT, SCALE_BITS, fraction_bits
from stackbound.kernels.blocks import LANES, counts, scatter
from stackbound.kernels.jit import kernel
from stackbound.kernels.quantize import dequantize

BATCH_PIXELS = 2**15
"""A batch of blocks in float64 stays within the second-level cache."""


def batch_lanes(block: tuple[int, ...]) -> int:
    """Return how many blocks go through the passes together: an odd multiple of 16.

    An even one would lay the rows of a batch a power of two apart, which the caches of common processors map onto few
    lines.
    """
    return (BATCH_PIXELS // prod(block) // LANES | 1) * LANES


def inverse_pass(length: int) -> Callable[[Any], None]:
    """Return the flat inverse kernel of one length."""
    from stackbound.kernels import inverse_flat

    return getattr(inverse_flat, f"inverse_{length}")


@kernel
def matrix_pass(data: NDArray[np.float64], matrix: NDArray[np.float64]) -> None:
    """Multiply the middle axis of `data` (outer, n, inner) by the transpose of a basis, round, in place."""
    n = data.shape[1]
    row = np.empty((n, LANES), np.float64)
    for o in range(data.shape[0]):
        for j in range(0, data.shape[2], LANES):
            for x in range(n):
                for k in range(LANES):
                    row[x, k] = 0.0
                for u in range(n):
                    factor = matrix[u, x] * 6.103515625e-05
                    for k in range(LANES):
                        row[x, k] += factor * data[o, u, j + k]
            for x in range(n):
                for k in range(LANES):
                    data[o, x, j + k] = (row[x, k] + 6755399441055744.0) - 6755399441055744.0


def predict(
    indices: NDArray[Any],
    steps: NDArray[np.int64],
    block: tuple[int, int, int],
    bases: tuple[str | NDArray[np.int64], ...],
    span: int,
    shape: tuple[int, int, int],
) -> NDArray[np.int32]:
    """Return the integer prediction of a tile.

    Parameters
    ----------
    indices : ndarray of whole numbers, shape (bz*by*bx, blocks)
    steps : ndarray of int64, shape (bz*by*bx,)
    block : tuple of int
    bases : tuple
        Per axis "dct" or a matrix in units of 2**-14.
    span : int
    shape : tuple of int
        The tile's (nz, ny, nx).

    Returns
    -------
    ndarray of int32, shape (nz, ny, nx)
        Whole numbers from 0 to `span`.
    """
    assert SCALE_BITS == 14  # the flat kernels and matrix_pass have it built in
    blocks = prod(counts(shape, block))
    lanes = min(batch_lanes(block), -(-blocks // LANES) * LANES)
    data = np.empty((prod(block), lanes), np.float64)
    out = np.empty(shape, np.int32)
    scale = 2.0 ** -fraction_bits(span)
    for first in range(0, blocks, lanes):
        count = min(lanes, blocks - first)
        dequantize(indices, steps, COEFFICIENT_LIMIT, first, count, data)
        _inverse(data.reshape(*block, lanes), bases)
        scatter(data, *block, first, count, scale, (span + 1) // 2, span, out)
    return out


def _inverse(data: NDArray[np.float64], bases: tuple[str | NDArray[np.int64], ...]) -> None:
    """Run the inverse passes, z first, so that x comes last as it came first in the forward transform."""
    for axis in range(3):
        length = data.shape[axis]
        if length == 1:
            continue
        outer, inner = prod(data.shape[:axis]), prod(data.shape[axis + 1 :])
        view = data.reshape(outer, length, inner)
        base = bases[axis]
        if isinstance(base, str):
            inverse_pass(length)(view)
        else:
            matrix_pass(view, base.astype(np.float64))
