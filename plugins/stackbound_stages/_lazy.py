"""Pixels of an object that gives boxes by numpy's indexing: arrays of numpy, dask, zarr, xarray and their like."""

from __future__ import annotations

from math import prod
from typing import Any

import numpy as np
from numpy.typing import NDArray
from stackbound.errors import SourceError
from stackbound.stages import Index

PIECE = 2**25
"""Bytes asked for at a time: what comes back is a copy that must fit into memory beside the box."""


class LazyPixels:
    """Boxes of an array-like object.

    Parameters
    ----------
    array : object
        Has `shape`, `dtype` and indexing by slices.
    name : str
        What messages call it.
    """

    def __init__(self, array: Any, name: str) -> None:
        self._array, self._name = array, name
        self._chunk = chunk_lengths(array)

    @property
    def overhead(self) -> int:
        """Bytes that `fill` may hold beside `out`: a piece, and the chunks that it is cut from."""
        size: int = np.dtype(self._array.dtype).itemsize
        if isinstance(self._array, np.ndarray):
            return 0
        return PIECE + 2 * prod(self._chunk) * size

    def fill(self, start: Index, stop: Index, out: NDArray[Any]) -> None:
        """Read a box into `out`."""
        axis = next((place for place, length in enumerate(out.shape) if length > 1), None)
        if axis is None or out.nbytes <= PIECE or isinstance(self._array, np.ndarray):
            out[...] = self._box(start, stop, out)
            return
        step = max(1, PIECE * out.shape[axis] // out.nbytes)
        chunk = self._chunk[axis]
        # Whole chunks, so that none is decoded twice; the first piece ends where a chunk does.
        step = step - step % chunk if step >= chunk else step
        low = start[axis]
        while low < stop[axis]:
            high = min(stop[axis], low - low % step + step)
            place = (slice(None),) * axis + (slice(low - start[axis], high - start[axis]),)
            first, last = (*start[:axis], low, *start[axis + 1 :]), (*stop[:axis], high, *stop[axis + 1 :])
            part = out[place]
            if high - low == 1:
                self.fill(first, last, part)
            else:
                part[...] = self._box(first, last, part)
            low = high

    def _box(self, start: Index, stop: Index, out: NDArray[Any]) -> NDArray[Any]:
        """Return one box as the object gives it, checked against what it said of itself."""
        box = tuple(slice(low, high) for low, high in zip(start, stop, strict=True))
        try:
            found = np.asarray(self._array[box])
        except Exception as error:  # what stands behind the object may raise anything
            bounds = ", ".join(f"{low}:{high}" for low, high in zip(start, stop, strict=True))
            raise SourceError(
                f"the pixels cannot be read ({type(error).__name__}: {error})",
                where=f"{self._name}[{bounds}]",
                remedy="The data are damaged or were taken away; check them where they come from.",
            ) from error
        if found.shape != out.shape:
            raise SourceError(f"a box of shape {out.shape} came back as {found.shape}", where=self._name)
        if found.dtype != out.dtype and found.dtype.newbyteorder("=") != out.dtype:
            raise SourceError(f"pixels of type {out.dtype} came back as {found.dtype}", where=self._name)
        return found

    def close(self) -> None:
        """Leave the object to its owner."""


def chunk_lengths(array: Any) -> Index:
    """Return the longest chunk along each axis; 1 where the object has no chunks."""
    chunks = getattr(array, "chunks", None)
    shape = tuple(array.shape)
    if not isinstance(chunks, tuple) or len(chunks) != len(shape):
        return (1,) * len(shape)
    return tuple(max(chunk) if isinstance(chunk, tuple) else int(chunk) for chunk in chunks)
