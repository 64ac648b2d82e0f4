"""The promise of a run: the tolerance as the user wrote it, resolved to numbers in stored pixel values."""

from __future__ import annotations

import math
import sys
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from decimal import ROUND_DOWN, Context, Decimal
from fractions import Fraction
from typing import TYPE_CHECKING, Any

import numpy as np

from stackbound.errors import IntegrityError, UsageError
from stackbound.geometry import Box
from stackbound.numbers import decimal
from stackbound.tolerance import exact_decimal

if TYPE_CHECKING:
    from collections.abc import Iterator

    from stackbound.lattice import Tolerance as TileTolerance
    from stackbound.stages import StackInfo
    from stackbound.tolerance import Tolerance

Number = int | float

# More digits than a tolerance has; should one have more, a product with it is rounded down.
_EXACT = Context(prec=2000, rounding=ROUND_DOWN)


@dataclass(frozen=True)
class Promise:
    """For every pixel, abs(original - decoded) <= tolerance.

    Attributes
    ----------
    value, unit : str
        The tolerance as the user wrote it.
    stored : tuple of str
        In stored pixel values, as decimal strings: one for the whole stack, or one per channel.
    axes : str
        Axes of the stack.
    floats : bool
        Whether the pixels are floating-point numbers.
    """

    value: str
    unit: str
    stored: tuple[str, ...]
    axes: str
    floats: bool

    @property
    def uniform(self) -> bool:
        """Whether one number holds for the whole stack."""
        return len(self.stored) == 1

    @property
    def numbers(self) -> tuple[Number, ...]:
        """The tolerances as the coder takes them: whole numbers for integer pixels, never above the decimal."""
        return tuple(stored_number(text, self.floats) for text in self.stored)

    @property
    def words(self) -> str:
        """The promise in one sentence."""
        bound = self.stored[0] if self.uniform else "the tolerance of its channel (" + ", ".join(self.stored) + ")"
        sentence = f"For every pixel, abs(original - decoded) <= {bound} in stored pixel values"
        if self.unit != "stored":
            sentence += f" (asked for as {self.value} {self.unit})"
        if all(number == 0 for number in self.numbers):
            sentence += ": every pixel is kept bit for bit"
        return sentence + "."

    def pieces(self, box: Box) -> Iterator[tuple[Box, Number]]:
        """Yield the parts of a box that have one tolerance each, with it."""
        if self.uniform:
            yield box, self.numbers[0]
            return
        axis = self.axes.index("c")
        for channel in range(box.start[axis], box.stop[axis]):
            start = (*box.start[:axis], channel, *box.start[axis + 1 :])
            stop = (*box.stop[:axis], channel + 1, *box.stop[axis + 1 :])
            yield Box(start, stop), self.numbers[channel]

    def for_tile(self, start: Sequence[int], shape: Sequence[int]) -> TileTolerance:
        """Return the tolerance of the tile at `start`: a number, or an array with one entry per channel."""
        if self.uniform:
            return self.numbers[0]
        axis = self.axes.index("c")
        # A tile at the end of the stack is filled up beyond the last channel.
        channels = [min(start[axis] + i, len(self.stored) - 1) for i in range(shape[axis])]
        numbers = [self.numbers[channel] for channel in channels]
        if len(set(numbers)) == 1:
            return numbers[0]
        lengths = [1] * len(shape)
        lengths[axis] = len(numbers)
        return np.array(numbers, dtype=np.float64 if self.floats else np.int64).reshape(lengths)

    def record(self) -> dict[str, Any]:
        """Return the promise as JSON of strings."""
        return {"words": self.words, "value": self.value, "unit": self.unit, "stored": list(self.stored)}

    @classmethod
    def from_record(cls, record: Mapping[str, Any], axes: str, dtype: np.dtype[Any]) -> Promise:
        """Return the promise that `record` was made of.

        Raises
        ------
        stackbound.errors.IntegrityError
            The record is none of a promise.
        """
        try:
            promise = cls(
                str(record["value"]), str(record["unit"]), tuple(map(str, record["stored"])), axes, dtype.kind == "f"
            )
            if not promise.stored or min(promise.numbers) < 0:
                raise ValueError("no tolerance")
        except (KeyError, TypeError, ValueError, ArithmeticError) as error:
            raise IntegrityError("the record of the promise cannot be read") from error
        return promise


def stored_number(text: str, floats: bool) -> Number:
    """Return a tolerance in stored pixel values as the number that is compared, never above the decimal.

    Integer pixels differ by whole numbers, so that the whole part says the same; floats take the float64 at or below.
    """
    exact = Fraction(Decimal(text))
    if not floats:
        return math.floor(exact)
    return float_at_or_below(exact)


def float_at_or_below(exact: Fraction) -> float:
    """Return the largest float64 that is not above a number that is not negative."""
    try:
        number = float(exact)
    except OverflowError:
        return sys.float_info.max
    return number if Fraction(number) <= exact else math.nextafter(number, 0.0)


def resolve(tolerance: Tolerance, info: StackInfo, ranges: Sequence[Fraction] | None = None) -> Promise:
    """Return the promise that a tolerance means for a stack.

    Parameters
    ----------
    tolerance : Tolerance
        As the user wrote it.
    info : StackInfo
        The stack.
    ranges : sequence of fractions.Fraction, optional
        Largest minus smallest finite value of each channel, for the unit "range".

    Raises
    ------
    stackbound.errors.UsageError
        The unit "range" with a value above 1.
    """
    floats = info.dtype.kind == "f"
    value = str(tolerance.value)
    if tolerance.unit == "stored":
        return Promise(value, "stored", (value,), info.axes, floats)
    if ranges is None:
        raise TypeError("a tolerance as a fraction of the range needs the ranges")
    return Promise(value, "range", shares(tolerance.value, ranges, floats), info.axes, floats)


def shares(value: Decimal, ranges: Sequence[Fraction], floats: bool) -> tuple[str, ...]:
    """Return what a fraction of each channel's range is in stored pixel values.

    Raises
    ------
    stackbound.errors.UsageError
        The fraction is above 1.
    """
    if value > 1:
        raise UsageError(
            f"A tolerance of {value} is more than the whole range of the pixels.",
            where="--tolerance",
            remedy="With the unit 'range', 0.01 is one per cent; for stored pixel values use the unit 'stored'.",
        )
    if floats:
        return tuple(decimal(float_at_or_below(Fraction(value) * span)) for span in ranges)
    # The range of integers is whole, so its product with a decimal is a decimal, exactly.
    return tuple(str(exact_decimal(_EXACT.multiply(value, Decimal(int(span))))) for span in ranges)
