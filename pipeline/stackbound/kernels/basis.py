"""The integer cosine basis, the unit of coefficients, and the widths that keep every sum exact.

The inverse transform multiplies whole numbers held in float64. As long as every partial sum stays below 2**53 each
product and sum is exact, so neither the order of additions nor a fused multiply-add can change a bit. Each pass ends in
an exact shift and round.
"""

from __future__ import annotations

from functools import lru_cache
from math import prod

import numpy as np
from numpy.typing import NDArray

SCALE_BITS = 14
"""Basis functions are whole numbers in units of 2**-14: the accuracy procedure of ISO/IEC 23002-1 passes with room."""

FRACTION_BITS = 8
"""Most fraction bits of a coefficient; tiles of a wide span have fewer, so that the widths below hold."""

COEFFICIENT_LIMIT = 2**26
"""Largest magnitude of a dequantized coefficient. Wide enough for every honest one: a lattice span of 2**24 without
fraction bits, or 2**16 with eight, times the largest gain of the forward transform (sqrt(8) in these units)."""

LENGTHS = (1, 2, 4, 8, 16, 32)


@lru_cache
def cosine(length: int) -> NDArray[np.int64]:
    """Return the integer cosine basis of type II.

    Row u is ``round(2**14 * c(u) * cos((2x+1) u pi / (2 length)))`` with c(0) = 1/sqrt(2) and c(u) = 1 (ITU-T T.81
    A.3.3 without its factors 1/4 and 1/2, which the steps absorb). Only integers reach the decoder, so the rounding of
    the cosines themselves is settled here; no entry is nearer than 1e-4 to a tie.
    """
    if length == 1:
        return np.full((1, 1), 2**SCALE_BITS, np.int64)
    x, u = np.arange(length), np.arange(length)[:, None]
    exact = np.cos((2 * x + 1) * u * np.pi / (2 * length))
    exact[0] = np.sqrt(0.5)
    return np.rint(exact * 2**SCALE_BITS).astype(np.int64)


def fraction_bits(span: int) -> int:
    """Return the fraction bits of the coefficients of a tile with this lattice span."""
    return max(0, min(FRACTION_BITS, 24 - span.bit_length()))


def unit(block: tuple[int, ...], span: int) -> float:
    """Return the decoder's coefficient units in one unit of an orthonormal transform.

    An orthonormal basis function of length N > 1 is sqrt(2/N) times the one of `cosine`.
    """
    scale = prod((2.0 / length) ** 0.5 for length in block if length > 1)
    return float(2 ** fraction_bits(span)) * scale


def growth(matrix: NDArray[np.int64]) -> int:
    """Return the largest sum of magnitudes over one output of a pass: what a pass can multiply a coefficient by."""
    return int(np.abs(matrix).sum(axis=0).max())


def widest(matrices: list[NDArray[np.int64]]) -> int:
    """Return the largest partial sum that any coefficients within the limit can cause, pass by pass.

    It must stay below 2**53 for the inverse to be exact.
    """
    magnitude, most = COEFFICIENT_LIMIT, 0
    for matrix in matrices:
        if matrix.shape == (1, 1):
            continue
        total = magnitude * growth(matrix) + 2 ** (SCALE_BITS - 1)
        most = max(most, total)
        magnitude = (total >> SCALE_BITS) + 1
    return most
