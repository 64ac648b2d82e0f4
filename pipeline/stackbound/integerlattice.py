"""The lattice of integer pixels.

Pixels of a tile are counted from the tile's smallest value, so narrow data of a wide type costs no more than narrow
data of a narrow one. Where the tile's range is too wide for the transform, values are first rounded to multiples of
``2E+1``, which uses up the tolerance E, and what is still too wide is cut into pieces of 16 bits, each an array of
its own, coded without loss.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.byteio import Reader, Writer, damaged
from stackbound.kernels import pixels as kernels
from stackbound.lattice import (
    SPAN_LIMIT,
    Lattice,
    LatticeTile,
    Part,
    cut,
    join,
    piece_parts,
    read_tolerances,
    write_tolerances,
)

MOST = 2**64 - 1


@dataclass(frozen=True)
class IntegerLattice(Lattice):
    """``pixel = min(low + unit * value, low + width)``.

    Attributes
    ----------
    low : int
        The smallest pixel.
    width : int
        The largest pixel less the smallest.
    unit : int
        1, or 2E+1 where values were rounded to its multiples because the range is wide.
    tolerance : int
        E in stored pixel values; the smallest where it differs.
    tolerances : ndarray of int32 or None
        E per pixel where it differs, at most `width`.
    """

    low: int
    width: int
    unit: int
    tolerance: int
    tolerances: NDArray[np.int32] | None = None

    @property
    def span(self) -> int:
        """The largest lattice value."""
        return (self.width + self.unit // 2) // self.unit

    def parts(self) -> list[Part]:
        """Return what is known of each array that is coded."""
        if self.unit == 1 and self.span <= SPAN_LIMIT:
            return [Part(self.span, min(self.tolerance, self.span), self.tolerances)]
        return piece_parts(self.span)

    def split(self, pixels: NDArray[Any]) -> list[LatticeTile]:
        """Return the arrays that are coded."""
        if self.width == 0:
            return [LatticeTile(np.zeros(pixels.shape, np.int32), 0, 0)]
        if self.unit == 1 and self.span <= SPAN_LIMIT:
            values = np.empty(pixels.shape, np.int32)
            if pixels.dtype.itemsize < 8:
                kernels.lower(np.ascontiguousarray(pixels).reshape(-1), self.low, values.reshape(-1))
            else:
                values[...] = self._above(pixels)
            return [LatticeTile(values, self.span, min(self.tolerance, self.span), self.tolerances)]
        index = self._above(pixels)
        if self.unit > 1:
            half, unit = np.uint64(self.unit // 2), np.uint64(self.unit)
            index = index // unit + (index % unit > half)
        return cut(index, self.span)

    def _above(self, pixels: NDArray[Any]) -> NDArray[np.uint64]:
        """Return how far pixels lie above the smallest; modulo 2**64, so that every integer type fits."""
        return pixels.astype(np.uint64) - np.uint64(self.low % 2**64)

    def pixels(self, values: list[NDArray[np.int32]], dtype: np.dtype[Any]) -> NDArray[Any]:
        """Return the pixels of decoded arrays."""
        if self.unit == 1 and len(values) == 1 and dtype.itemsize < 8:
            out = np.empty(values[0].shape, dtype)
            kernels.raise_(values[0].reshape(-1), self.low, out.reshape(-1))
            return out
        # A hostile index may lie beyond the span. The last multiple may lie above the largest pixel, even above 2**64:
        # only those below it are multiplied.
        index = join(values)
        below = np.minimum(index, np.uint64(self.width // self.unit))
        offset = np.where(index > below, np.uint64(self.width), below * np.uint64(self.unit))
        return (offset + np.uint64(self.low % 2**64)).astype(dtype)

    def exceptions(self, pixels: NDArray[Any], decoded: NDArray[Any]) -> None:
        """Return None: the bound holds for every integer."""

    def write(self, writer: Writer) -> None:
        """Write what `read` reads."""
        writer.signed(self.low)
        writer.number(self.width)
        writer.number(self.tolerance)
        writer.number(0 if self.unit == 1 else 1)
        write_tolerances(writer, self.tolerances)

    def describe(self) -> dict[str, Any]:
        """Return the numbers of the lattice by name."""
        told = {"minimum": self.low, "maximum": self.low + self.width, "tolerance": self.tolerance}
        return told if self.tolerances is None else told | {"largest_tolerance": int(self.tolerances.max())}


def integer_lattice(pixels: NDArray[Any], tolerance: float | NDArray[np.float64]) -> IntegerLattice:
    """Return the lattice of integer pixels (nz, ny, nx) under a tolerance that was checked."""
    low, high = (int(value) for value in kernels.extremes(np.ascontiguousarray(pixels).reshape(-1)))
    width = high - low
    least = tolerance.min().item() if isinstance(tolerance, np.ndarray) else tolerance
    bound = MOST if least >= 2.0**64 else int(least)
    if width <= 2 * bound:
        # One value serves all.
        return IntegerLattice(low + width // 2, 0, 1, bound)
    if width > SPAN_LIMIT:
        return IntegerLattice(low, width, 2 * bound + 1, bound)
    each = None
    if isinstance(tolerance, np.ndarray):
        each = np.minimum(np.floor(tolerance), width).astype(np.int32)
    return IntegerLattice(low, width, 1, bound, each)


def read_integer_lattice(reader: Reader, shape: tuple[int, int, int]) -> IntegerLattice:
    """Return the lattice that a payload names for a tile (nz, ny, nx)."""
    low, width, bound = reader.signed(), reader.number(), reader.number()
    wide = reader.number(1)
    if wide and not 0 < 2 * bound < width:
        raise damaged("its lattice is not one that an encoder chooses")
    each = read_tolerances(reader, shape, min(width, SPAN_LIMIT))
    if each is not None and (wide or width > SPAN_LIMIT):
        raise damaged("its lattice is not one that an encoder chooses")
    return IntegerLattice(low, width, 2 * bound + 1 if wide else 1, bound, each)
