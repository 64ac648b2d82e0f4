"""The mean error of all pixels: whether averages over the stack are shifted."""

from __future__ import annotations

from fractions import Fraction
from typing import Any

from numpy.typing import NDArray
from stackbound import hookimpl
from stackbound.compare import errors
from stackbound.numbers import decimal
from stackbound.stages import StackInfo, Stage, Verify


class MeanError(Verify):
    """mean(decoded - original), in stored pixel values; the sum is exact, the quotient is rounded once."""

    name = "mean-error"

    def measure(self, original: NDArray[Any], decoded: NDArray[Any], info: StackInfo) -> tuple[Fraction, int]:
        """Return the sum of the errors of a region and its number of pixels."""
        found = errors(original, decoded)
        return found.total, found.pixels

    def combine(self, parts: list[tuple[Fraction, int]], info: StackInfo) -> str:
        """Return the mean over all regions."""
        return decimal(sum((total for total, _ in parts), Fraction(0)) / sum(pixels for _, pixels in parts))


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [MeanError]
