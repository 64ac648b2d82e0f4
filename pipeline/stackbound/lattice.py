"""What every lattice of a tile shares: the tile in three axes, its tolerance, and the arrays that are coded.

`stackbound.integerlattice` and `stackbound.floatlattice` hold the two kinds of lattice.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from math import prod
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.byteio import Reader, Writer, damaged
from stackbound.errors import UsageError

Tolerance = int | float | NDArray[Any]
"""A tolerance in stored pixel values: one number, or an array that broadcasts over the tile."""

SPAN_LIMIT = 2**24 - 1
"""Largest lattice span that prediction and residual handle exactly (`stackbound.kernels.basis`)."""

PART_BITS = 16
"""What spans further is cut into pieces of so many bits."""


@dataclass(frozen=True)
class LatticeTile:
    """One array of lattice values.

    Attributes
    ----------
    values : ndarray of int32, shape (nz, ny, nx)
        Whole numbers from 0 to `span`.
    span : int
        The largest lattice value, below 2**24.
    tolerance : int
        Largest error allowed, in lattice steps, at most `span`; the smallest where it differs from pixel to pixel.
    tolerances : ndarray of int32 or None
        Where it differs: one per pixel, of a shape that broadcasts to that of `values`.
    """

    values: NDArray[np.int32]
    span: int
    tolerance: int
    tolerances: NDArray[np.int32] | None = None


@dataclass(frozen=True)
class Part:
    """What a decoder knows of one array before decoding it."""

    span: int
    tolerance: int
    tolerances: NDArray[np.int32] | None = None


class Lattice(ABC):
    """How the pixels of one tile lie on whole numbers."""

    @abstractmethod
    def parts(self) -> list[Part]:
        """Return what is known of each array that is coded, most significant first."""

    @abstractmethod
    def split(self, pixels: NDArray[Any]) -> list[LatticeTile]:
        """Return the arrays that are coded for pixels (nz, ny, nx)."""

    @abstractmethod
    def pixels(self, values: list[NDArray[np.int32]], dtype: np.dtype[Any]) -> NDArray[Any]:
        """Return the pixels (nz, ny, nx) of decoded arrays."""

    @abstractmethod
    def exceptions(self, pixels: NDArray[Any], decoded: NDArray[Any]) -> NDArray[np.bool_] | None:
        """Return which pixels must be kept bit for bit, given what they would decode to; None where none can be."""

    @abstractmethod
    def write(self, writer: Writer) -> None:
        """Write the lattice's numbers."""

    @abstractmethod
    def describe(self) -> dict[str, Any]:
        """Return the lattice's numbers by name."""


# ------------------------------------------------------------------------------------------------------------ pieces


def piece_parts(span: int) -> list[Part]:
    """Return the parts of an array of a span that is coded without loss: itself, or its pieces of 16 bits."""
    if span <= SPAN_LIMIT:
        return [Part(span, 0)]
    count = -(-span.bit_length() // PART_BITS)
    return [Part(span >> PART_BITS * (count - 1), 0)] + [Part(2**PART_BITS - 1, 0)] * (count - 1)


def cut(index: NDArray[np.uint64], span: int) -> list[LatticeTile]:
    """Return the pieces of whole numbers up to `span`."""
    parts = piece_parts(span)
    tiles = []
    for place, part in enumerate(reversed(parts)):
        piece = index >> np.uint64(PART_BITS * place)
        if place < len(parts) - 1:
            piece = piece & np.uint64(2**PART_BITS - 1)
        tiles.append(LatticeTile(piece.astype(np.int32), part.span, 0))
    return tiles[::-1]


def join(values: list[NDArray[np.int32]]) -> NDArray[np.uint64]:
    """Return the whole numbers of their pieces."""
    index = values[0].astype(np.uint64)
    for part in values[1:]:
        index = (index << np.uint64(PART_BITS)) | part.astype(np.uint64)
    return index


# --------------------------------------------------------------------------------------------------------- tolerance


def checked(tolerance: Tolerance, shape: tuple[int, ...]) -> int | float | NDArray[np.float64]:
    """Return a tolerance for pixels of a shape, an array in the three axes of coding, along which it may have length 1.

    Raises
    ------
    stackbound.errors.UsageError
        It is below zero, not a number, or does not broadcast.
    """
    values = np.asarray(tolerance)
    if values.dtype.kind not in "iuf" or not (values >= 0).all():
        raise UsageError(f"a tolerance of {tolerance} makes no sense", remedy="Give numbers from 0 on.")
    if values.size == 1:
        return values.item()  # type: ignore[no-any-return]
    try:
        np.broadcast_to(values, shape)
    except ValueError:
        raise UsageError(f"tolerances of shape {values.shape} do not fit a tile of shape {shape}") from None
    lengths = (1,) * (len(shape) - values.ndim) + values.shape
    whole = three_axes_shape(shape)
    # Axes that coding merges must be there in full; the others keep a length of 1.
    long = [axis for axis, length in enumerate(shape) if length != 1]
    kept = [lengths[axis] for axis in long]
    merged = long[:-2] if len(long) > 2 else []
    if any(lengths[axis] > 1 for axis in merged):
        full = tuple(shape[axis] if axis in merged else lengths[axis] for axis in range(len(shape)))
        values = np.broadcast_to(values.reshape(lengths), full)
        kept = [full[axis] for axis in long]
    kept = [1] * (3 - len(kept)) + kept
    return values.reshape(prod(kept[:-2]), kept[-2], kept[-1]).astype(np.float64)[tuple(slice(n) for n in whole)]


def cropped_tolerance(
    tolerance: int | float | NDArray[np.float64], shape: tuple[int, ...]
) -> int | float | NDArray[np.float64]:
    """Return the tolerance of what is left of a tile."""
    if not isinstance(tolerance, np.ndarray):
        return tolerance
    cut_off = tuple(
        slice(length) if own > 1 else slice(None) for own, length in zip(tolerance.shape, shape, strict=True)
    )
    return tolerance[cut_off]


def write_tolerances(writer: Writer, tolerances: NDArray[np.int32] | None) -> None:
    """Write tolerances that differ from pixel to pixel: along which axes, and their differences one by one."""
    if tolerances is None:
        writer.number(0)
        return
    from stackbound.entropy import write_numbers

    writer.number(sum(1 << axis for axis in range(3) if tolerances.shape[axis] > 1) or 8)
    write_numbers(writer, np.diff(tolerances.astype(np.int64).ravel(), prepend=0))


def read_tolerances(reader: Reader, shape: tuple[int, int, int], most: int) -> NDArray[np.int32] | None:
    """Return the tolerances of a tile (nz, ny, nx), or None where they are one."""
    along = reader.number(8)
    if along == 0:
        return None
    from stackbound.entropy import read_numbers

    lengths = tuple(shape[axis] if along >> axis & 1 else 1 for axis in range(3))
    numbers = read_numbers(reader, prod(lengths))
    if numbers.size != prod(lengths):
        raise damaged("there are too few tolerances")
    tolerances = np.cumsum(numbers)
    if tolerances.min() < 0 or tolerances.max() > most:
        raise damaged("a tolerance is impossible")
    return tolerances.astype(np.int32).reshape(lengths)


# ------------------------------------------------------------------------------------------------------------- shape


def three_axes_shape(shape: tuple[int, ...]) -> tuple[int, int, int]:
    """Return the shape (nz, ny, nx) in which a tile is coded: without axes of length 1, leading ones merged."""
    long = [1, 1, 1] + [length for length in shape if length != 1]
    return prod(long[:-2]), long[-2], long[-1]


def three_axes(pixels: NDArray[Any]) -> NDArray[Any]:
    """Return the pixels in the shape in which they are coded."""
    return np.ascontiguousarray(pixels).reshape(three_axes_shape(pixels.shape))


def crop(whole: NDArray[Any]) -> NDArray[Any]:
    """Return pixels (nz, ny, nx) without the trailing planes, rows and columns that hold nothing but the last pixel.

    Chunks at the border of a Zarr array are padded with its fill value; so that costs nothing. Pixels are alike when
    their bits are.
    """
    bits = whole.view(f"u{whole.dtype.itemsize}")
    last = bits[-1, -1, -1]
    kept = list(whole.shape)
    for axis in range(3):
        inside = bits[: kept[0], : kept[1], : kept[2]]
        while kept[axis] > 1 and (inside.take(kept[axis] - 1, axis) == last).all():
            kept[axis] -= 1
    return whole[: kept[0], : kept[1], : kept[2]]
