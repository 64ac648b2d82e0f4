"""Pixels kept bit for bit beside the rest: runs of equal bits, each by its distance from the run before."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.byteio import Reader, Writer, damaged
from stackbound.entropy import read_numbers, write_numbers

MOST = 100
"""One run in so many pixels at most: beyond that a tile is coded bit for bit as a whole."""


def too_many(pixels: NDArray[Any], mask: NDArray[np.bool_]) -> bool:
    """Return whether there are more runs than exceptions are for."""
    return len(_runs(pixels, mask)[0]) > max(4, pixels.size // MOST)


def write(writer: Writer, pixels: NDArray[Any], mask: NDArray[np.bool_] | None) -> None:
    """Write the bits of the pixels under `mask`."""
    if mask is None or not mask.any():
        writer.number(0)
        return
    starts, lengths, bits = _runs(pixels, mask)
    writer.number(len(starts))
    gaps = np.diff(starts, prepend=0) - np.concatenate([[0], lengths[:-1]])
    write_numbers(writer, np.stack([gaps, lengths - 1], 1).ravel())
    writer.data += bits.astype(bits.dtype.newbyteorder("<")).tobytes()


def read(reader: Reader, pixels: NDArray[Any]) -> None:
    """Put exceptions into decoded pixels (C order), in place."""
    count = reader.number(pixels.size)
    if count == 0:
        return
    numbers = read_numbers(reader, 2 * count).reshape(-1, 2)
    size = pixels.dtype.itemsize
    bits = np.frombuffer(reader.take(count * size), f"<u{size}")
    if len(numbers) != count or numbers.min() < 0 or (numbers.sum() + count) > pixels.size:
        raise damaged("exceptions lie outside the tile")
    lengths = numbers[:, 1] + 1
    starts = np.cumsum(numbers[:, 0] + np.concatenate([[0], lengths[:-1]]))
    places = np.repeat(starts - np.concatenate([[0], np.cumsum(lengths)[:-1]]), lengths) + np.arange(lengths.sum())
    pixels.reshape(-1).view(f"u{size}")[places] = np.repeat(bits, lengths)


def _runs(pixels: NDArray[Any], mask: NDArray[np.bool_]) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[Any]]:
    """Return start, length and bits of each run of equal bits under `mask`, in raster order."""
    places = np.flatnonzero(mask)
    bits = np.ascontiguousarray(pixels).view(f"u{pixels.dtype.itemsize}").reshape(-1)[places]
    new = np.ones(len(places), np.bool_)
    new[1:] = (np.diff(places) != 1) | (bits[1:] != bits[:-1])
    begins = np.flatnonzero(new)
    return places[begins], np.diff(np.append(begins, len(places))), bits[begins]
