"""Original against decoded pixels, exactly.

The error of a pixel is decoded - original. Integers are compared in whole numbers; sums are exact Python integers.
Floats are compared as float64 with the rounding error of the difference taken into account, so that a rounding can only
refuse a pixel, never excuse one. Sums of float errors are made of whole multiples of a power of two per block of pixels
(at least 2**-31 of the largest error of the block) and are exact from there on: no order of summation, no instruction
set and no library version changes them.
"""

from __future__ import annotations

import math
import threading
import weakref
from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

Pixels = NDArray[Any]
Number = int | float

# Pixels handled at once: the intermediate arrays stay in a core's cache and cost no memory worth counting.
BLOCK = 1 << 16

# Rounding positions below the largest error of a block in the sums of float errors.
FLOAT_SUM_BITS = 31


@dataclass(frozen=True)
class Errors:
    """The errors of some pixels.

    Attributes
    ----------
    pixels : int
        Number of pixels.
    changed : int
        Pixels whose bits differ.
    largest : int or float
        Largest absolute error. Infinity where a NaN or an infinity was not kept bit for bit.
    total, squares : Fraction
        Sum of the errors and of their squares (of the pixels that are finite in both).
    lowest, highest : int or float or None
        Smallest and largest finite original value; None where there is none.
    """

    pixels: int = 0
    changed: int = 0
    largest: Number = 0
    total: Fraction = Fraction(0)
    squares: Fraction = Fraction(0)
    lowest: Number | None = None
    highest: Number | None = None

    def __add__(self, other: Errors) -> Errors:
        lows = [value for value in (self.lowest, other.lowest) if value is not None]
        highs = [value for value in (self.highest, other.highest) if value is not None]
        return Errors(
            self.pixels + other.pixels,
            self.changed + other.changed,
            max(self.largest, other.largest),
            self.total + other.total,
            self.squares + other.squares,
            min(lows, default=None),
            max(highs, default=None),
        )


def errors(original: Pixels, decoded: Pixels) -> Errors:
    """Return the errors of one array of pixels.

    Several figures of one region ask for the same errors: they are kept for the last pair of read-only arrays.

    Parameters
    ----------
    original, decoded : ndarray
        Same shape and dtype (integers or floats, native byte order).
    """
    if original.flags.writeable or decoded.flags.writeable:
        return _errors(original, decoded)
    kept = getattr(_last, "pair", None)
    if kept is not None and kept[0]() is original and kept[1]() is decoded:
        result: Errors = kept[2]
        return result
    result = _errors(original, decoded)
    _last.pair = (weakref.ref(original), weakref.ref(decoded), result)
    return result


_last = threading.local()


def over(original: Pixels, decoded: Pixels, tolerance: Number, found: Errors | None = None) -> int:
    """Return how many pixels are further from their original than the tolerance.

    Parameters
    ----------
    original, decoded : ndarray
        Same shape and dtype.
    tolerance : int or float
        In stored pixel values. Float pixels under tolerance 0 must be equal bit for bit.
    found : Errors, optional
        What `errors` returned for them; most often it settles the question.
    """
    integers = original.dtype.kind in "iu"
    # For floats too a rounded error below the tolerance belongs to an exact one that is not above it; an equal one may
    # belong to an exact one that is.
    if found is not None and (found.changed == 0 or found.largest < tolerance + integers):
        return 0
    count = _over_integers if integers else _over_floats
    return sum(count(o, d, tolerance) for o, d in _blocks(original, decoded))


def _errors(original: Pixels, decoded: Pixels) -> Errors:
    measure = _integer_errors if original.dtype.kind in "iu" else _float_errors
    result = Errors()
    for o, d in _blocks(original, decoded):
        result += measure(o, d)
    return result


def _blocks(a: Pixels, b: Pixels) -> Iterator[tuple[Pixels, Pixels]]:
    """Yield flat pieces of at most BLOCK pixels, cut at places that depend on the shape alone."""
    if a.size <= BLOCK:
        if a.size:
            yield a.reshape(-1), b.reshape(-1)
        return
    axis = next(i for i, length in enumerate(a.shape) if length > 1)
    step = max(1, BLOCK * a.shape[axis] // a.size)
    index: list[slice] = [slice(None)] * a.ndim
    for start in range(0, a.shape[axis], step):
        index[axis] = slice(start, start + step)
        yield from _blocks(a[tuple(index)], b[tuple(index)])


# ---------------------------------------------------------------------------------------------------------- integers


def _magnitudes(original: Pixels, decoded: Pixels) -> Pixels:
    """Return abs(decoded - original) as unsigned integers that hold every difference of the dtype."""
    # The unsigned difference modulo 2**bits of the larger minus the smaller is the difference itself.
    unsigned = np.dtype(f"u{original.dtype.itemsize}")
    low, high = np.minimum(original, decoded), np.maximum(original, decoded)
    magnitudes: Pixels = high.view(unsigned) - low.view(unsigned)
    return magnitudes


def _integer_errors(original: Pixels, decoded: Pixels) -> Errors:
    magnitudes = _magnitudes(original, decoded)
    largest = int(magnitudes.max())
    lowest, highest = int(original.min()), int(original.max())
    if largest == 0:
        return Errors(original.size, lowest=lowest, highest=highest)
    return Errors(
        original.size,
        int(np.count_nonzero(magnitudes)),
        largest,
        Fraction(_sum(decoded) - _sum(original)),
        Fraction(_sum_of_squares(magnitudes, largest)),
        lowest,
        highest,
    )


def _sum(values: Pixels) -> int:
    if values.dtype.itemsize < 8:
        return int(values.sum(dtype=np.int64))
    low = (values & 0xFFFFFFFF).astype(np.int64)
    high = (values >> 32).astype(np.int64)
    return (int(high.sum()) << 32) + int(low.sum())


def _sum_of_squares(magnitudes: Pixels, largest: int) -> int:
    # Limbs of 16 bits in float64: a block has at most 2**16 products below 2**32, so every partial sum is a whole
    # number below 2**53 and exact in any order.
    if magnitudes.dtype.itemsize <= 2:
        limbs = [magnitudes.astype(np.float64)]
    else:
        shifts = range(0, largest.bit_length(), 16)
        limbs = [((magnitudes >> shift) & 0xFFFF).astype(np.float64) for shift in shifts]
    # Not `dot`: a matrix library would start threads for it.
    return sum(
        int(np.einsum("i,i->", a, b)) << (16 * (i + j)) for i, a in enumerate(limbs) for j, b in enumerate(limbs)
    )


def _over_integers(original: Pixels, decoded: Pixels, tolerance: Number) -> int:
    allowed = int(tolerance)
    magnitudes = _magnitudes(original, decoded)
    if allowed > np.iinfo(magnitudes.dtype).max:
        return 0
    return int(np.count_nonzero(magnitudes > magnitudes.dtype.type(allowed)))


# ------------------------------------------------------------------------------------------------------------ floats


def _float_errors(original: Pixels, decoded: Pixels) -> Errors:
    same = _bits(original) == _bits(decoded)
    o, d = original.astype(np.float64), decoded.astype(np.float64)
    both = np.isfinite(o) & np.isfinite(d)
    lost = bool(np.any(~(both | same)))
    if not both.all():
        kept = o[np.isfinite(o)]
        o, d = o[both], d[both]
    else:
        kept = o
    lowest = float(kept.min()) if kept.size else None
    highest = float(kept.max()) if kept.size else None
    changed = original.size - int(np.count_nonzero(same))
    if changed == 0:
        return Errors(original.size, lowest=lowest, highest=highest)
    with np.errstate(over="ignore"):
        differences = d - o
    largest = float(np.abs(differences).max()) if differences.size else 0.0
    total, squares = _float_sums(differences, largest)
    return Errors(original.size, changed, float("inf") if lost else largest, total, squares, lowest, highest)


def _float_sums(differences: NDArray[np.float64], largest: float) -> tuple[Fraction, Fraction]:
    if largest == 0.0 or not np.isfinite(largest):
        return Fraction(0), Fraction(0)
    shift = FLOAT_SUM_BITS - math.frexp(largest)[1]
    # A product with a power of two is exact; beyond the exponents of float64 only ldexp forms it.
    scaled = differences * 2.0**shift if abs(shift) < 1000 else np.ldexp(differences, shift)
    whole = np.rint(scaled).astype(np.int64)
    magnitudes = np.abs(whole).astype(np.uint64)
    unit = Fraction(2) ** -shift
    return int(whole.sum()) * unit, _sum_of_squares(magnitudes, int(magnitudes.max())) * unit * unit


def _over_floats(original: Pixels, decoded: Pixels, tolerance: Number) -> int:
    differ = _bits(original) != _bits(decoded)
    if tolerance == 0:
        return int(np.count_nonzero(differ))
    o, d = original[differ].astype(np.float64), decoded[differ].astype(np.float64)
    with np.errstate(over="ignore", invalid="ignore"):
        difference = d - o
        # Rounding is monotonic: a rounded difference below the tolerance belongs to an exact one that is not above it.
        # At equality the exact rounding error decides (the sum of two floats and its error: Knuth, The Art of Computer
        # Programming 2, section 4.2.2).
        back = difference - d
        rest = (d - (difference - back)) + (-o - back)
        magnitude = np.abs(difference)
        inside = magnitude < tolerance
        inside |= (magnitude == tolerance) & (rest * np.sign(difference) <= 0)
    return int(o.size - np.count_nonzero(inside))


def _bits(values: Pixels) -> Pixels:
    return np.ascontiguousarray(values).view(np.dtype(f"u{values.dtype.itemsize}"))
