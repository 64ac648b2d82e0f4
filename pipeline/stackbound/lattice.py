"""From pixels and a tolerance to whole numbers on a lattice, and back.

Integer pixels of a tile are counted from the tile's smallest value, so narrow data of a wide type costs no more than
narrow data of a narrow one. Where the tile's range is too wide for the transform, values are first rounded to multiples
of ``2 E + 1``, which uses up the tolerance E, and what is still too wide is cut into halves of 16 bits, each an array of
its own, coded without loss.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import isnan
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.byteio import Reader, Writer, damaged
from stackbound.errors import UsageError
from stackbound.kernels import pixels as kernels

Tolerance = int | float | NDArray[Any]
"""A tolerance in stored pixel values: one number, or an array that broadcasts over the tile."""

SPAN_LIMIT = 2**24 - 1
"""Largest lattice span that prediction and residual handle exactly (`stackbound.kernels.basis`)."""

PART_BITS = 16


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
        Largest error allowed, in lattice steps, at most `span`.
    """

    values: NDArray[np.int32]
    span: int
    tolerance: int


@dataclass(frozen=True)
class IntegerLattice:
    """How integer pixels lie on the lattice: ``pixel = min(low + unit * value, low + width)``.

    Attributes
    ----------
    low : int
        The smallest pixel.
    width : int
        The largest pixel less the smallest.
    unit : int
        1, or 2E+1 where values were rounded to its multiples because the range is wide.
    tolerance : int
        E in stored pixel values.
    """

    low: int
    width: int
    unit: int
    tolerance: int

    @property
    def span(self) -> int:
        """The largest lattice value."""
        return (self.width + self.unit // 2) // self.unit

    def parts(self) -> list[tuple[int, int]]:
        """Return span and tolerance of each array that is coded, most significant first."""
        tolerance = min(self.tolerance, self.span) if self.unit == 1 else 0
        if self.span <= SPAN_LIMIT:
            return [(self.span, tolerance)]
        count = -(-self.span.bit_length() // PART_BITS)
        return [(self.span >> PART_BITS * (count - 1), 0)] + [(2**PART_BITS - 1, 0)] * (count - 1)

    def describe(self) -> dict[str, int]:
        """Return the numbers of the lattice by name."""
        return {"minimum": self.low, "maximum": self.low + self.width, "tolerance": self.tolerance}

    def write(self, writer: Writer) -> None:
        """Write what `read` reads."""
        writer.signed(self.low)
        writer.number(self.width)
        writer.number(self.tolerance)
        writer.number(0 if self.unit == 1 else 1)

    def split(self, cropped: NDArray[Any]) -> list[LatticeTile]:
        """Return the arrays that are coded for pixels (nz, ny, nx)."""
        parts = self.parts()
        if self.width == 0:
            return [LatticeTile(np.zeros(cropped.shape, np.int32), 0, 0)]
        if self.unit == 1 and len(parts) == 1 and cropped.dtype.itemsize < 8:
            values = np.empty(cropped.shape, np.int32)
            kernels.lower(np.ascontiguousarray(cropped).reshape(-1), self.low, values.reshape(-1))
            return [LatticeTile(values, *parts[0])]
        # Modulo 2**64, so that every integer type fits.
        index = cropped.astype(np.uint64) - np.uint64(self.low % 2**64)
        if self.unit > 1:
            half, unit = np.uint64(self.unit // 2), np.uint64(self.unit)
            index = index // unit + (index % unit > half)
        tiles = []
        for place, (span, tolerance) in enumerate(reversed(parts)):
            piece = index >> np.uint64(PART_BITS * place)
            if place < len(parts) - 1:
                piece = piece & np.uint64(2**PART_BITS - 1)
            tiles.append(LatticeTile(piece.astype(np.int32), span, tolerance))
        return tiles[::-1]

    def pixels(self, values: list[NDArray[np.int32]], dtype: np.dtype[Any]) -> NDArray[Any]:
        """Return the pixels (nz, ny, nx) of decoded arrays."""
        if self.unit == 1 and len(values) == 1 and dtype.itemsize < 8:
            out = np.empty(values[0].shape, dtype)
            kernels.raise_(values[0].reshape(-1), self.low, out.reshape(-1))
            return out
        index = np.zeros(values[0].shape, np.uint64)
        for part in values:
            index = (index << np.uint64(PART_BITS)) | part.astype(np.uint64)
        # A hostile index may lie beyond the span. The last multiple may lie above the largest pixel, even above 2**64:
        # only those below it are multiplied.
        below = np.minimum(index, np.uint64(self.width // self.unit))
        offset = np.where(index > below, np.uint64(self.width), below * np.uint64(self.unit))
        return (offset + np.uint64(self.low % 2**64)).astype(dtype)


def whole_tolerance(tolerance: Tolerance) -> int:
    """Return the tolerance of integer pixels: the largest whole number not above it.

    Raises
    ------
    stackbound.errors.UsageError
        It is below zero or not a number.
    """
    value = float(tolerance)  # type: ignore[arg-type]
    if isnan(value) or value < 0:
        raise UsageError(f"a tolerance of {tolerance} makes no sense", remedy="Give a number from 0 on.")
    return 2**64 - 1 if value >= 2.0**64 else int(tolerance)  # type: ignore[arg-type]


def to_lattice(cropped: NDArray[Any], tolerance: Tolerance) -> IntegerLattice:
    """Return the lattice of a tile's pixels under a tolerance.

    Raises
    ------
    stackbound.errors.UsageError
        The pixel type cannot be coded or the tolerance makes no sense.
    """
    if cropped.dtype.kind not in "iu" or not cropped.dtype.isnative:
        raise UsageError(f"pixels of type {cropped.dtype} cannot be coded", remedy="Convert them to integers.")
    low, high = (int(value) for value in kernels.extremes(np.ascontiguousarray(cropped).reshape(-1)))
    width, bound = high - low, whole_tolerance(tolerance)
    if width <= 2 * bound:
        # One value serves all.
        return IntegerLattice(low + width // 2, 0, 1, bound)
    return IntegerLattice(low, width, 1 if width <= SPAN_LIMIT or bound == 0 else 2 * bound + 1, bound)


def read(reader: Reader, dtype: np.dtype[Any]) -> IntegerLattice:
    """Return the lattice that a payload names for pixels of a type."""
    if dtype.kind not in "iu":
        raise damaged(f"it holds integers, not {dtype}")
    info = np.iinfo(dtype)
    found = read_any(reader)
    if found.low < info.min or found.low + found.width > info.max:
        raise damaged(f"its values do not fit {dtype}")
    return found


def read_any(reader: Reader) -> IntegerLattice:
    """Return the lattice that a payload names, whatever the pixels' type."""
    low, width, bound = reader.signed(), reader.number(), reader.number()
    wide = reader.number(1)
    if wide and not 0 < 2 * bound < width:
        raise damaged("its lattice is not one that an encoder chooses")
    return IntegerLattice(low, width, 2 * bound + 1 if wide else 1, bound)


def three_axes_shape(shape: tuple[int, ...]) -> tuple[int, int, int]:
    """Return the shape (nz, ny, nx) in which a tile is coded: without axes of length 1, leading ones merged."""
    long = [length for length in shape if length != 1]
    long = [1] * (3 - len(long)) + long
    depth = 1
    for length in long[:-2]:
        depth *= length
    return depth, long[-2], long[-1]


def three_axes(pixels: NDArray[Any]) -> NDArray[Any]:
    """Return the pixels in the shape in which they are coded."""
    return np.ascontiguousarray(pixels).reshape(three_axes_shape(pixels.shape))


def crop(whole: NDArray[Any]) -> tuple[NDArray[Any], Any]:
    """Return pixels (nz, ny, nx) without the trailing planes, rows and columns that hold nothing but the last pixel.

    Chunks at the border of a Zarr array are padded with its fill value; so that costs nothing.
    """
    last = whole[-1, -1, -1]
    kept = whole
    for axis in range(3):
        while kept.shape[axis] > 1:
            if not (kept.take(-1, axis) == last).all():
                break
            kept = kept[tuple(slice(None, -1) if axis == along else slice(None) for along in range(3))]
    return kept, last
