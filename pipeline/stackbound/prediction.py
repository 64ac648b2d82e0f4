"""What a decoder may be asked to predict a tile with: a closed vocabulary of numbers, all of it in the core.

A predict stage, built-in or not, chooses among these. The machine checks and clips the numbers and forms the integer
prediction from them with the decoder's own code, so a store opens without the stage that chose them.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class NoPrediction:
    """Every lattice value is predicted as the middle of the tile's range."""


@dataclass(frozen=True)
class BlockPrediction:
    """Indices times steps, through an integer basis per axis.

    Attributes
    ----------
    block : tuple of int
        Shape (bz, by, bx), each from 1, 2, 4, 8, 16, 32.
    bases : tuple of (str or ndarray of int64)
        One per axis, "dct" or a matrix (length, length) of whole numbers in units of 2**-14.
    steps : ndarray of int64, shape (bz, by, bx)
        What one index is worth in the decoder's coefficient units (`stackbound.kernels.basis.unit`).
    indices : ndarray of int32, shape (bz, by, bx, blocks)
        Frequency by frequency, blocks in raster order.
    """

    block: tuple[int, int, int]
    bases: tuple[str | NDArray[np.int64], ...]
    steps: NDArray[np.int64]
    indices: NDArray[Any]


@dataclass(frozen=True)
class NeighbourPrediction:
    """What decoded neighbours say of each pixel, on top of a base: a weighted sum of (decoded - base) around it.

    Used where the tile has one tolerance, the coder is "rans" and `stackbound.neighbours.possible` holds; elsewhere the
    base predicts alone.

    Attributes
    ----------
    base : NoPrediction or BlockPrediction
        Without a transform the base is the mean of each plane.
    taps : ndarray of int64, shape (n, 3)
        (plane, row, column) of each neighbour relative to the pixel, in a row above or the plane before; n is a
        multiple of 8.
    weights : ndarray of int32, shape (4, n)
        Weights in units of 2**-12: for the first row and the other rows of the bands of the first plane, then the same
        for later planes.
    left : ndarray of int32, shape (4, 3)
        Weights of the three pixels to the left.
    alone : bool
        Whether the expected size of a residual is judged without the plane before.
    clamped : bool
        Whether a prediction stays between the smallest and largest of its four nearest neighbours.
    """

    base: NoPrediction | BlockPrediction
    taps: NDArray[np.int64]
    weights: NDArray[np.int32]
    left: NDArray[np.int32]
    alone: bool = False
    clamped: bool = False


Prediction = NoPrediction | BlockPrediction | NeighbourPrediction
