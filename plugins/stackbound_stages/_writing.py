"""Pixels of a stack into a file that holds them as one uncompressed array, in boxes that cost each tile little."""

from __future__ import annotations

from collections.abc import Iterator
from math import prod
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from stackbound.axes import DROPPED, SAMPLES
from stackbound.stages import Index, OpenSource, StackInfo

BOX = 2**26
"""Bytes of a box: about a region of a store."""

_DEPTH = 16
"""Planes of a box before it grows along y: tiles are some planes deep, and all of a tile is decoded for any of it."""

_ROWS = 32


def stored_letters(info: StackInfo) -> str:
    """Return the axes of a stack in the order in which its source stored them; "s" for colour samples.

    The stack's own order where the source was no file, or where its axes are other ones now.
    """
    wanted = str(info.attributes.get("axes", "")).replace(DROPPED, "")
    size = dict(zip(info.axes, info.shape, strict=True))
    if wanted.endswith("yxc") and "s" not in wanted and size.get("c") in (3, 4):
        wanted = wanted[:-1] + SAMPLES  # an array whose last axis is colour
    samples = int(info.attributes.get("samples", size.get("c", 1)))
    if SAMPLES in wanted and "c" in wanted and size.get("c", 1) % samples:
        return info.axes
    if set(wanted.replace(SAMPLES, "c")) != set(info.axes):
        return info.axes
    if SAMPLES in wanted and "c" not in wanted and size["c"] != samples:
        return info.axes
    return wanted


def stored_shape(info: StackInfo, letters: str) -> Index:
    """Return the length of each stored axis."""
    size = dict(zip(info.axes, info.shape, strict=True))
    if SAMPLES in letters and "c" in letters:
        size[SAMPLES] = int(info.attributes["samples"])
        size["c"] //= size[SAMPLES]
    elif SAMPLES in letters:
        size[SAMPLES] = size["c"]
    return tuple(size[letter] for letter in letters)


def boxes(info: StackInfo, letters: str) -> Iterator[tuple[Index, Index]]:
    """Yield start and stop of the boxes that make up a stack.

    Colour samples that one pixel stores side by side are never parted.
    """
    size = dict(zip(info.axes, info.shape, strict=True))
    box = dict.fromkeys(info.axes, 1)
    left = BOX // info.dtype.itemsize
    limits = [("c", size["c"])] if SAMPLES in letters else []
    deep = next((axis for axis in "zt" if size.get(axis, 1) > 1), None)
    limits += [("x", size["x"])] + ([(deep, _DEPTH)] if deep else []) + [("y", size["y"])]
    limits += [(axis, size[axis]) for axis in "ztc" if axis in size]
    for axis, limit in limits:
        most = min(limit, size[axis])
        if axis == "c" and SAMPLES in letters:
            grown = most
        else:
            grown = max(box[axis], min(most, max(1, left * box[axis] // prod(box.values()))))
            if axis == "y" and grown < size["y"]:
                grown = max(1, grown - grown % _ROWS if grown >= _ROWS else grown)
        box[axis] = grown
    steps = tuple(box[axis] for axis in info.axes)
    for place in np.ndindex(*(-(-length // step) for length, step in zip(info.shape, steps, strict=True))):
        start = tuple(number * step for number, step in zip(place, steps, strict=True))
        stop = tuple(min(low + step, end) for low, step, end in zip(start, steps, info.shape, strict=True))
        yield start, stop


def write_pixels(target: Path, offset: int, letters: str, dtype: np.dtype[Any], source: OpenSource) -> None:
    """Write all pixels of a source into an existing file.

    Parameters
    ----------
    target : Path
        The file; bytes beyond its end are added.
    offset : int
        Where the array begins.
    letters : str
        The stored axes, slowest first, of "tczyxs".
    dtype : numpy.dtype
        Pixel type as stored, byte order included.
    source : OpenSource
        The stack.
    """
    info = source.info
    shape = stored_shape(info, letters)
    with target.open("r+b") as file:
        for start, stop in boxes(info, letters):
            low, block = _as_stored(source.read(start, stop), start, info, letters)
            axis = _run_axis(block.shape, shape)
            strides = [prod(shape[place + 1 :]) for place in range(len(shape))]
            for index in np.ndindex(*block.shape[:axis]):
                full = (*index, *(0 for _ in range(len(shape) - axis)))
                pixel = sum((first + step) * stride for first, step, stride in zip(low, full, strides, strict=True))
                file.seek(offset + pixel * dtype.itemsize)
                file.write(np.ascontiguousarray(block[index], dtype).reshape(-1).view(np.uint8).data)


def _as_stored(pixels: NDArray[Any], start: Index, info: StackInfo, letters: str) -> tuple[Index, NDArray[Any]]:
    """Return a box in stored order and its first corner."""
    low = dict(zip(info.axes, start, strict=True))
    axes = info.axes
    if SAMPLES in letters:
        place = axes.index("c")
        samples = int(info.attributes["samples"]) if "c" in letters else pixels.shape[place]
        pixels = pixels.reshape((*pixels.shape[:place], -1, samples, *pixels.shape[place + 1 :]))
        axes = axes.replace("c", "cs")
        low["c"] = low[SAMPLES] = 0  # boxes never part samples
        if "c" not in letters:
            pixels = pixels.reshape((*pixels.shape[:place], *pixels.shape[place + 1 :]))
            axes = axes.replace("cs", SAMPLES)
    return tuple(low[letter] for letter in letters), pixels.transpose([axes.index(letter) for letter in letters])


def _run_axis(block: Index, shape: Index) -> int:
    """Return the first axis from which on a block is one run of the stored array."""
    axis = len(shape) - 1
    while axis > 0 and block[axis] == shape[axis]:
        axis -= 1
    return axis
