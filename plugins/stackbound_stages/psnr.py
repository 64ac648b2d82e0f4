"""The peak signal-to-noise ratio."""

from __future__ import annotations

from fractions import Fraction
from typing import Any

from numpy.typing import NDArray
from stackbound import hookimpl
from stackbound.compare import Errors, errors
from stackbound.numbers import decibel
from stackbound.stages import StackInfo, Stage, Verify


class PSNR(Verify):
    """20 log10(peak / RMSE) in decibel, the peak being the original's own maximum minus its minimum.

    Not the range of the pixel type: a 12-bit picture in 16-bit pixels would gain 24 dB by it. "inf" without any error.
    """

    name = "psnr"

    def measure(self, original: NDArray[Any], decoded: NDArray[Any], info: StackInfo) -> Errors:
        """Return squared errors, number of pixels and range of a region."""
        return errors(original, decoded)

    def combine(self, parts: list[Errors], info: StackInfo) -> str:
        """Return the ratio over all regions."""
        total = sum(parts, Errors())
        if total.squares == 0:
            return "inf"
        peak = Fraction(total.highest or 0) - Fraction(total.lowest or 0)
        return decibel(peak * peak * total.pixels / total.squares)


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [PSNR]
