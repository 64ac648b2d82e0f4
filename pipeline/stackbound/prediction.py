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


Prediction = NoPrediction | BlockPrediction
