"""A figure of our own: how many pixels cross a threshold because of the compression."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound import hookimpl
from stackbound.stages import Options, StackInfo, Stage, Verify


class MyStageOptions(Options):
    """What a configuration may say for this figure beside the name."""

    threshold: float = 100.0
    """In stored pixel values."""


class MyStage(Verify):
    """Count the pixels that lie above the threshold in only one of original and decoded."""

    name = "my-stage"
    Options = MyStageOptions
    options: MyStageOptions

    def measure(self, original: NDArray[Any], decoded: NDArray[Any], info: StackInfo) -> int:
        """Return the number in one region; both arrays are read-only and of one shape and dtype."""
        above = self.options.threshold
        return int(np.count_nonzero((original > above) != (decoded > above)))

    def combine(self, parts: list[int], info: StackInfo) -> str:
        """Return the number in the whole stack, from those of its regions in order, as text."""
        return str(sum(parts))


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stages of this plugin."""
    return [MyStage]
