"""The range of each channel of a stack, for tolerances that are fractions of it; and what such a tolerance means."""

from __future__ import annotations

import math
import sys
from collections.abc import Sequence
from decimal import ROUND_DOWN, Context, Decimal
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.errors import UsageError
from stackbound.geometry import box_at, positions
from stackbound.numbers import decimal
from stackbound.regions import read_source
from stackbound.reports import Progress, Quiet
from stackbound.stages import Grid, OpenSource, StackInfo
from stackbound.tolerance import exact_decimal

_EXACT = Context(prec=2000, rounding=ROUND_DOWN)
"""More digits than a tolerance has; should one have more, the product is rounded down."""


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


def tolerances(value: Decimal, ranges: Sequence[Fraction], floats: bool) -> tuple[str, ...]:
    """Return what a fraction of each channel's range is in stored pixel values.

    Parameters
    ----------
    value : decimal.Decimal
        The fraction, between 0 and 1.
    ranges : sequence of fractions.Fraction
        From `channel_ranges`.
    floats : bool
        Whether the pixels are floating-point numbers; then each tolerance is the float64 at or below the product.

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
        return tuple(decimal(_float_at_or_below(Fraction(value) * span)) for span in ranges)
    # The range of integers is whole, so its product with a decimal is a decimal, exactly.
    return tuple(str(exact_decimal(_EXACT.multiply(value, Decimal(int(span))))) for span in ranges)


def _float_at_or_below(exact: Fraction) -> float:
    try:
        number = float(exact)
    except OverflowError:
        return sys.float_info.max
    return number if Fraction(number) <= exact else math.nextafter(number, 0.0)
