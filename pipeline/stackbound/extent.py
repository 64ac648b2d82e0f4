"""The range of each channel of a stack, for tolerances that are fractions of it."""

from __future__ import annotations

import math
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.geometry import box_at, positions
from stackbound.regions import read_source
from stackbound.reports import Progress, Quiet
from stackbound.stages import Grid, OpenSource, StackInfo


def channel_ranges(
    source: OpenSource, info: StackInfo, grid: Grid, progress: Progress | None = None
) -> tuple[Fraction, ...]:
    """Return the largest minus the smallest finite pixel value of each channel, exactly.

    Parameters
    ----------
    source : OpenSource
        Read once, region by region.
    info : StackInfo
        The stack.
    grid : Grid
        Its regions.
    progress : Progress, optional
        Told how far it is, in pixels.

    Returns
    -------
    tuple of fractions.Fraction
        One for each channel; a single one for a stack without channels. 0 where a channel holds no finite value.
    """
    progress = progress or Quiet()
    axis = info.axes.find("c")
    channels = info.shape[axis] if axis >= 0 else 1
    lowest: list[Any] = [None] * channels
    highest: list[Any] = [None] * channels
    progress.start("measuring ranges", math.prod(info.shape))
    try:
        for position in positions(info.shape, grid.region):
            box = box_at(info.shape, grid.region, position)
            pixels = read_source(source, info, box)
            first = box.start[axis] if axis >= 0 else 0
            for number, plane in enumerate(np.moveaxis(pixels, axis, 0) if axis >= 0 else pixels[np.newaxis]):
                span = _finite_span(plane)
                if span is not None:
                    low, high = lowest[first + number], highest[first + number]
                    lowest[first + number] = span[0] if low is None else min(low, span[0])
                    highest[first + number] = span[1] if high is None else max(high, span[1])
            progress.advance(pixels.size)
    finally:
        progress.end()
    return tuple(
        Fraction(0) if low is None else Fraction(high) - Fraction(low)
        for low, high in zip(lowest, highest, strict=True)
    )


def _finite_span(pixels: NDArray[Any]) -> tuple[Any, Any] | None:
    """Return the smallest and largest finite value as Python numbers, or None where there is none."""
    if pixels.dtype.kind != "f":
        return pixels.min().item(), pixels.max().item()
    # fmin and fmax pass over NaN; infinities are the exception that costs a copy.
    low, high = np.fmin.reduce(pixels, axis=None), np.fmax.reduce(pixels, axis=None)
    if not (np.isfinite(low) and np.isfinite(high)):
        finite = pixels[np.isfinite(pixels)]
        if not finite.size:
            return None
        low, high = finite.min(), finite.max()
    return low.item(), high.item()
