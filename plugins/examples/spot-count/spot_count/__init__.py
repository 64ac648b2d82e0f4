"""A figure: spots found in the decoded stack less spots found in the original."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field
from scipy import ndimage
from stackbound import hookimpl
from stackbound.stages import Options, StackInfo, Stage, Verify


class SpotCountOptions(Options):
    """What a spot is."""

    threshold: float = 100.0
    """A spot is brighter than this, in stored pixel values."""

    radius: int = Field(default=2, ge=1, le=50)
    """A spot is the only largest pixel within so many pixels along y and x, in its own plane."""


class SpotCount(Verify):
    """Spots found after compression less spots found before."""

    name = "spot-count"
    Options = SpotCountOptions
    options: SpotCountOptions

    def measure(self, original: NDArray[Any], decoded: NDArray[Any], info: StackInfo) -> int:
        """Return the difference in one region."""
        return self.count(decoded) - self.count(original)

    def combine(self, parts: list[int], info: StackInfo) -> str:
        """Return the difference in the whole stack."""
        return str(sum(parts))

    def count(self, pixels: NDArray[Any]) -> int:
        """Return the number of spots in an array whose last two axes are y and x."""
        side = 2 * self.options.radius + 1
        shape = (1,) * (pixels.ndim - 2) + (side, side)
        around = np.ones(shape, bool)
        around[..., self.options.radius, self.options.radius] = False
        neighbours = ndimage.maximum_filter(pixels, footprint=around, mode="nearest")
        return int(np.count_nonzero((pixels > neighbours) & (pixels > self.options.threshold)))


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stages of this plugin."""
    return [SpotCount]
