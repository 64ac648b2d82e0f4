"""Pixels of an object that gives boxes by numpy's indexing: arrays of numpy, dask, zarr, xarray and their like."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from stackbound.errors import SourceError
from stackbound.stages import Index


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

    def fill(self, start: Index, stop: Index, out: NDArray[Any]) -> None:
        """Read a box into `out`."""
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
        out[...] = found

    def close(self) -> None:
        """Leave the object to its owner."""
