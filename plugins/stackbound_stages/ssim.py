"""The structural similarity of original and decoded planes (Wang, Bovik, Sheikh and Simoncelli 2004)."""

from __future__ import annotations

import importlib.util
import math
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray
from stackbound import hookimpl
from stackbound.errors import ConfigError
from stackbound.numbers import decimal
from stackbound.stages import Options, StackInfo, Stage, Verify

# The window of the original paper's simple form and of the library: 7 x 7 pixels of equal weight.
WINDOW = 7

# Digits that a library's changing order of summation does not reach.
DIGITS = 9


class SSIM(Verify):
    """Mean structural similarity over all windows of 7 x 7 pixels in the y, x planes; 1 for equal planes.

    Needs scikit-image. The dynamic range of each piece of a plane is the original's own maximum minus its minimum.
    Windows do not reach over the borders of regions; planes narrower than a window do not count ("nan" if none does).
    """

    name = "ssim"

    def __init__(self, options: Options | None = None) -> None:
        super().__init__(options)
        if importlib.util.find_spec("skimage") is None:
            raise ConfigError(
                "The figure 'ssim' needs scikit-image, which is not installed.",
                where="verify.figures",
                remedy="Install stackbound with the extra 'ssim', or leave the figure out.",
            )

    def measure(self, original: NDArray[Any], decoded: NDArray[Any], info: StackInfo) -> tuple[Fraction, int]:
        """Return the sum over all windows of a region, and their number."""
        height, width = original.shape[-2:]
        if min(height, width) < WINDOW:
            return Fraction(0), 0
        windows = (height - WINDOW + 1) * (width - WINDOW + 1)
        planes = zip(original.reshape(-1, height, width), decoded.reshape(-1, height, width), strict=True)
        values = [_similarity(o, d) for o, d in planes]
        kept = [value for value in values if not math.isnan(value)]
        # Rounded so that the last bits, which depend on the library's version, stay out of the log.
        return sum((Fraction(f"{value:.{DIGITS}f}") for value in kept), Fraction(0)) * windows, windows * len(kept)

    def combine(self, parts: list[tuple[Fraction, int]], info: StackInfo) -> str:
        """Return the mean over all windows of all regions."""
        windows = sum(count for _, count in parts)
        if windows == 0:
            return "nan"
        return decimal(sum((total for total, _ in parts), Fraction(0)) / windows)


def _similarity(original: NDArray[Any], decoded: NDArray[Any]) -> float:
    """Return the mean similarity of two planes; NaN where a plane holds values that are not finite."""
    from skimage.metrics import structural_similarity

    if original.tobytes() == decoded.tobytes():
        return 1.0
    low, high = float(original.min()), float(original.max())
    if not (math.isfinite(low) and math.isfinite(high) and np.isfinite(decoded).all()):
        return math.nan
    o, d = original.astype(np.float64), decoded.astype(np.float64)
    # A constant original has no range of its own: its largest error takes the place.
    span = high - low or float(np.abs(d - o).max())
    similarity = structural_similarity(o, d, win_size=WINDOW, data_range=span)  # type: ignore[no-untyped-call]
    return float(similarity)


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [SSIM]
