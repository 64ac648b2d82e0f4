"""The root of the mean squared error."""

from __future__ import annotations

from fractions import Fraction
from typing import Any

from numpy.typing import NDArray
from stackbound import hookimpl
from stackbound.compare import errors
from stackbound.numbers import decimal, root
from stackbound.stages import StackInfo, Stage, Verify


class RMSE(Verify):
    """sqrt(mean((decoded - original)**2)), in stored pixel values; the sum is exact, the root is rounded once."""

    name = "rmse"

    def measure(self, original: NDArray[Any], decoded: NDArray[Any], info: StackInfo) -> tuple[Fraction, int]:
        """Return the sum of the squared errors of a region and its number of pixels."""
        found = errors(original, decoded)
        return found.squares, found.pixels

    def combine(self, parts: list[tuple[Fraction, int]], info: StackInfo) -> str:
        """Return the root of the mean over all regions."""
        mean = sum((squares for squares, _ in parts), Fraction(0)) / sum(pixels for _, pixels in parts)
        return decimal(root(mean))


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [RMSE]
