"""The share of pixels that changed at all."""

from __future__ import annotations

from fractions import Fraction
from typing import Any

from numpy.typing import NDArray
from stackbound import hookimpl
from stackbound.compare import errors
from stackbound.numbers import decimal
from stackbound.stages import StackInfo, Stage, Verify


class ChangedShare(Verify):
    """Pixels whose bits differ, divided by all pixels."""

    name = "changed-share"

    def measure(self, original: NDArray[Any], decoded: NDArray[Any], info: StackInfo) -> tuple[int, int]:
        """Return how many pixels of a region changed and how many it has."""
        found = errors(original, decoded)
        return found.changed, found.pixels

    def combine(self, parts: list[tuple[int, int]], info: StackInfo) -> str:
        """Return the share over all regions."""
        return decimal(Fraction(sum(changed for changed, _ in parts), sum(pixels for _, pixels in parts)))


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [ChangedShare]
