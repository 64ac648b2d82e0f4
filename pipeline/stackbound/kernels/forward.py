"""The forward transform of all blocks of a tile."""

from __future__ import annotations

from collections.abc import Callable
from math import prod
from typing import Any

import numpy as np
from numpy.typing import NDArray


def dct(blocks: NDArray[np.float32]) -> NDArray[np.float32]:
    """Return the orthonormal cosine coefficients of type II of all blocks.

    Parameters
    ----------
    blocks : ndarray of float32, shape (n, bz, by, bx)
        First axis fastest in memory; n a multiple of 16.

    Returns
    -------
    ndarray of float32, shape (n, bz, by, bx)
        In the same memory order, made in a fixed order of operations without fused ones, so alike on every machine.
    """
    places = np.moveaxis(blocks, 0, -1)
    data = np.array(places, np.float32, order="C", copy=True)
    passes(data, forward_pass)
    return np.moveaxis(data, -1, 0)


def passes(data: NDArray[Any], one_pass: Callable[[int], Callable[[Any], None]]) -> None:
    """Run a flat kernel along each block axis of `data` (bz, by, bx, lanes), x first, in place."""
    for axis in (2, 1, 0):
        length = data.shape[axis]
        if length > 1:
            outer, inner = prod(data.shape[:axis]), prod(data.shape[axis + 1 :])
            one_pass(length)(data.reshape(outer, length, inner))


def forward_pass(length: int) -> Callable[[Any], None]:
    """Return the flat forward kernel of one length."""
    from stackbound.kernels import forward_flat

    return getattr(forward_flat, f"forward_{length}")
