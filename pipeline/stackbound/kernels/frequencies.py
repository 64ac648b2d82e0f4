"""The order in which the frequencies of a block are coded, and what is known of each before it is coded."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from math import prod

import numpy as np
from numpy.typing import NDArray

NEIGHBOURS = (
    ((0, 0, 1), 2),
    ((0, 1, 0), 2),
    ((1, 0, 0), 2),
    ((0, 1, 1), 1),
    ((0, 0, 2), 1),
    ((0, 2, 0), 1),
)
"""Lower frequencies whose magnitudes foretell one: how much lower along z, y, x, and their weight."""

ALONE = 16
"""So many first frequencies are bands of their own; later bands hold an eighth of what lies before them."""


@dataclass(frozen=True)
class Scan:
    """Order, neighbours and bands of the frequencies of one block shape.

    Attributes
    ----------
    order : ndarray of int64, shape (frequencies,)
        Raster index of the frequency at each place of the scan: by w/bz + v/by + u/bx, then w, v, u.
    neighbours : ndarray of int64, shape (frequencies, 6)
        Raster indices of the lower frequencies of each place; 0 with weight 0 where there is none.
    weights : ndarray of int64, shape (frequencies, 6)
    bands : ndarray of int64, shape (frequencies,)
        Band of each place.
    """

    order: NDArray[np.int64]
    neighbours: NDArray[np.int64]
    weights: NDArray[np.int64]
    bands: NDArray[np.int64]


@lru_cache(maxsize=64)
def scan(block: tuple[int, int, int]) -> Scan:
    """Return the scan of a block shape; all in whole numbers, for every block side divides 32."""
    bz, by, bx = block
    w, v, u = (axis.ravel() for axis in np.indices(block))
    height = w * (32 // bz) + v * (32 // by) + u * (32 // bx)
    order = np.lexsort((u, v, w, height))
    neighbours = np.zeros((prod(block), len(NEIGHBOURS)), np.int64)
    weights = np.zeros_like(neighbours)
    for column, ((dw, dv, du), weight) in enumerate(NEIGHBOURS):
        inside = (w >= dw) & (v >= dv) & (u >= du)
        index = ((w - dw) * by + (v - dv)) * bx + (u - du)
        neighbours[:, column] = np.where(inside, index, 0)[order]
        weights[:, column] = np.where(inside, weight, 0)[order]
    return Scan(order, neighbours, weights, _bands(prod(block)))


def _bands(frequencies: int) -> NDArray[np.int64]:
    bands = np.zeros(frequencies, np.int64)
    band, start = 0, 0
    while start < frequencies:
        stop = start + (1 if start < ALONE else max(1, start // 8))
        bands[start:stop] = band
        band, start = band + 1, stop
    return bands
