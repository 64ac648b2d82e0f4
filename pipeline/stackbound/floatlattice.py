"""The lattice of floating-point pixels.

With a tolerance t, finite pixels become multiples of a step s of their distance from the smallest: s is chosen so
that E whole steps and the rounding to the lattice (half a step) and to the pixel type (half its spacing) stay within
t together. The encoder forms the very pixel that the decoder will form and compares it with the original, exactly;
what fails, and what is not finite, is kept bit for bit as an exception.

With a tolerance of zero, or where the spacing of the type is above it, the pixels' bits are mapped to whole numbers in
the order of the pixels, and those are coded without loss.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass
from math import frexp, isfinite, ldexp
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.byteio import Reader, Writer, damaged
from stackbound.kernels import floats as kernels
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

BITS, STEPS = 0, 1
FINENESS = (8, 4, 2, 1, 0)
"""Steps E within the tolerance, finest first; a coarser lattice where the range would be too wide."""


@dataclass(frozen=True)
class BitLattice(Lattice):
    """Whole numbers in the order of the pixels: the bits, the sign bit flipped, negative numbers reversed.

    Attributes
    ----------
    low, width : int
        The smallest such number, and the largest less the smallest.
    tolerance : float
        What was asked for.
    """

    low: int
    width: int
    tolerance: float

    def parts(self) -> list[Part]:
        """Return what is known of each array that is coded."""
        return piece_parts(self.width)

    def split(self, pixels: NDArray[Any]) -> list[LatticeTile]:
        """Return the arrays that are coded."""
        return cut(ordered(pixels) - np.uint64(self.low), self.width)

    def pixels(self, values: list[NDArray[np.int32]], dtype: np.dtype[Any]) -> NDArray[Any]:
        """Return the pixels of decoded arrays."""
        return unordered(np.minimum(join(values), np.uint64(self.width)) + np.uint64(self.low), dtype)

    def exceptions(self, pixels: NDArray[Any], decoded: NDArray[Any]) -> None:
        """Return None: every bit is kept."""

    def write(self, writer: Writer) -> None:
        """Write what `read_float_lattice` reads."""
        writer.number(BITS)
        writer.data += struct.pack("<d", self.tolerance)
        writer.number(self.low)
        writer.number(self.width)

    def describe(self) -> dict[str, Any]:
        """Return the numbers of the lattice by name."""
        return {"tolerance": self.tolerance, "lattice": "bits"}


@dataclass(frozen=True)
class StepLattice(Lattice):
    """``pixel = dtype(low + step * value)``, product and sum in float64.

    Attributes
    ----------
    low, step : float
    span : int
        The largest lattice value.
    fineness : int
        E in lattice steps; the smallest where it differs.
    tolerance : float or ndarray
        In stored values; an array of three axes, each of length 1 or the tile's.
    tolerances : ndarray of int32 or None
        E per pixel where it differs.
    """

    low: float
    step: float
    span: int
    fineness: int
    tolerance: float | NDArray[np.float64]
    tolerances: NDArray[np.int32] | None = None

    def parts(self) -> list[Part]:
        """Return what is known of the array that is coded."""
        return [Part(self.span, min(self.fineness, self.span), self.tolerances)]

    def split(self, pixels: NDArray[Any]) -> list[LatticeTile]:
        """Return the array that is coded; what is not finite takes the value before it."""
        values = np.empty(pixels.shape, np.int32)
        kernels.to_steps(widened(pixels).reshape(-1), self.low, self.step, self.span, values.reshape(-1))
        return [LatticeTile(values, self.span, min(self.fineness, self.span), self.tolerances)]

    def pixels(self, values: list[NDArray[np.int32]], dtype: np.dtype[Any]) -> NDArray[Any]:
        """Return the pixels of a decoded array."""
        with np.errstate(over="ignore"):
            return (self.low + self.step * values[0].astype(np.float64)).astype(dtype)

    def exceptions(self, pixels: NDArray[Any], decoded: NDArray[Any]) -> NDArray[np.bool_]:
        """Return which pixels are not finite or further than the tolerance from what they decode to."""
        limit = np.broadcast_to(np.asarray(self.tolerance, np.float64), pixels.shape)
        out = np.empty(pixels.shape, np.bool_)
        original, back = widened(pixels).reshape(-1), widened(decoded).reshape(-1)
        if isinstance(self.tolerance, np.ndarray):
            kernels.outside(original, back, np.ascontiguousarray(limit).reshape(-1), out.reshape(-1))
        else:
            kernels.outside(original, back, np.array([self.tolerance]), out.reshape(-1))
        return out

    def write(self, writer: Writer) -> None:
        """Write what `read_float_lattice` reads."""
        writer.number(STEPS)
        least = float(np.min(self.tolerance))
        writer.data += struct.pack("<ddd", least, self.low, self.step)
        writer.number(self.span)
        writer.number(self.fineness)
        write_tolerances(writer, self.tolerances)

    def describe(self) -> dict[str, Any]:
        """Return the numbers of the lattice by name."""
        least = float(np.min(self.tolerance))
        return {"tolerance": least, "lattice": "steps", "minimum": self.low, "step": self.step}


def bit_lattice(pixels: NDArray[Any], tolerance: float) -> BitLattice:
    """Return the lattice that keeps every bit."""
    order = ordered(pixels)
    low = int(order.min())
    return BitLattice(low, int(order.max()) - low, tolerance)


def float_lattice(pixels: NDArray[Any], tolerance: float | NDArray[np.float64]) -> Lattice:
    """Return the lattice of floating-point pixels (nz, ny, nx) under a tolerance that was checked."""
    tolerance = tolerance if isinstance(tolerance, np.ndarray) else float(tolerance)
    least = float(np.min(tolerance))
    finite = pixels[np.isfinite(pixels)]
    if least <= 0 or finite.size == 0:
        return bit_lattice(pixels, least)
    low, high = float(finite.min()), float(finite.max())
    # The sum and the product that form a pixel round in float64, and the result rounds once more to the pixel type.
    largest = max(abs(low), abs(high))
    rounding = _spacing(largest, pixels.dtype) / 2 + 2 * _spacing(largest, np.dtype(np.float64))
    room = least - rounding
    if not room > 0 or not isfinite(high - low):
        return bit_lattice(pixels, least)
    if high - low <= 2 * room:
        return StepLattice(low + (high - low) / 2, 0.0, 0, 0, tolerance)
    for fineness in FINENESS:
        # A little less than the quotient, whichever way the division rounds.
        step = room / (fineness + 0.5) * (1 - 2.0**-50)
        if (high - low) / step < SPAN_LIMIT and step >= np.finfo(np.float64).tiny:
            span = int(np.rint((high - low) / step))
            return StepLattice(low, step, span, fineness, tolerance, _each(tolerance, rounding, step, span))
    return bit_lattice(pixels, least)


def _spacing(value: float, dtype: np.dtype[Any]) -> float:
    """Return the distance of a finite number from the next of a type, without overflow at the largest."""
    info = np.finfo(dtype)
    _, exponent = frexp(value)
    return max(ldexp(float(info.eps), exponent - 1), float(info.smallest_subnormal))


def _each(tolerance: float | NDArray[np.float64], rounding: float, step: float, span: int) -> NDArray[np.int32] | None:
    """Return the whole steps within each of several tolerances."""
    if not isinstance(tolerance, np.ndarray):
        return None
    with np.errstate(over="ignore"):
        return np.clip(np.floor((tolerance - rounding) / step * (1 - 2.0**-50) - 0.5), 0, span).astype(np.int32)


def read_float_lattice(reader: Reader, shape: tuple[int, int, int], dtype: np.dtype[Any]) -> Lattice:
    """Return the lattice that a payload names for a tile (nz, ny, nx)."""
    if reader.number(STEPS) == BITS:
        (tolerance,) = struct.unpack("<d", reader.take(8))
        low, width = reader.number(), reader.number()
        if low + width >= 2 ** (8 * dtype.itemsize):
            raise damaged(f"its bits do not fit {dtype}")
        return BitLattice(low, width, tolerance)
    tolerance, start, step = struct.unpack("<ddd", reader.take(24))
    span, fineness = reader.number(SPAN_LIMIT), reader.number(SPAN_LIMIT)
    if not (isfinite(start) and step >= 0 and isfinite(step)):
        raise damaged("its lattice is not one that an encoder chooses")
    return StepLattice(start, step, span, fineness, tolerance, read_tolerances(reader, shape, span))


def widened(pixels: NDArray[Any]) -> NDArray[np.float64]:
    """Return pixels as float64, which holds every value of the smaller types."""
    with np.errstate(invalid="ignore"):  # signalling NaN
        return np.ascontiguousarray(pixels, np.float64)


def ordered(pixels: NDArray[Any]) -> NDArray[np.uint64]:
    """Return whole numbers in the order of the pixels (IEEE 754-2019, 5.10: the total order of the bits)."""
    width = 8 * pixels.dtype.itemsize
    bits = np.ascontiguousarray(pixels).view(f"u{pixels.dtype.itemsize}").astype(np.uint64)
    top, all_ones = np.uint64(1 << (width - 1)), np.uint64(2**width - 1)
    return np.where(bits & top, bits ^ all_ones, bits | top)


def unordered(order: NDArray[np.uint64], dtype: np.dtype[Any]) -> NDArray[Any]:
    """Return the pixels of such whole numbers."""
    width = 8 * dtype.itemsize
    top, all_ones = np.uint64(1 << (width - 1)), np.uint64(2**width - 1)
    bits = np.where(order & top, order ^ top, order ^ all_ones)
    return bits.astype(f"u{dtype.itemsize}").view(dtype)
