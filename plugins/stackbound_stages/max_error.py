"""The largest absolute error of any pixel."""

from __future__ import annotations

from typing import Any

from numpy.typing import NDArray
from stackbound import hookimpl
from stackbound.compare import errors
from stackbound.numbers import decimal
from stackbound.stages import StackInfo, Stage, Verify


class MaxError(Verify):
    """max(abs(decoded - original)), in stored pixel values."""

    name = "max-error"

    def measure(self, original: NDArray[Any], decoded: NDArray[Any], info: StackInfo) -> int | float:
        """Return the largest absolute error of a region."""
        return errors(original, decoded).largest

    def combine(self, parts: list[int | float], info: StackInfo) -> str:
        """Return the largest of all regions."""
        return decimal(max(parts))


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [MaxError]
