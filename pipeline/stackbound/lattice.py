"""From pixels and a tolerance to whole numbers on a lattice, and back."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Tolerance = int | float | NDArray[Any]
"""A tolerance in stored pixel values: one number, or an array that broadcasts over the tile."""


@dataclass(frozen=True)
class LatticeTile:
    """One tile on its integer lattice.

    Attributes
    ----------
    values : ndarray of int32, shape (nz, ny, nx)
        Whole numbers from 0 to `span`.
    span : int
        The largest lattice value, below 2**24.
    tolerance : int
        Largest error allowed, in lattice steps.
    """

    values: NDArray[np.int32]
    span: int
    tolerance: int
