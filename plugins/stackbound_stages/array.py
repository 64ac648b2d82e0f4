"""Load arrays from Python: numpy, dask, zarr, xarray, and whatever else has a shape, a dtype and slices."""

from __future__ import annotations

from typing import Any

import numpy as np
from stackbound.axes import Layout, apply_axes, guess_axes
from stackbound.errors import SourceError
from stackbound.plugins import hookimpl
from stackbound.stages import Load, OpenSource, StackInfo, Stage

from ._lazy import LazyPixels
from ._ome_zarr import axis_letters
from ._stored import StoredSource


class ArrayLoad(Load):
    """Array objects; lazy ones are read box by box."""

    name = "array"

    def recognises(self, source: object) -> bool:
        """Return whether this has a shape, a dtype and slices."""
        return all(hasattr(source, part) for part in ("shape", "dtype", "__getitem__"))

    def open(self, source: object, *, axes: str | None = None) -> OpenSource:
        """Open an array."""
        array: Any = source
        kind = type(array).__module__.partition(".")[0]
        name = f"{kind} array"
        shape = _shape(array, name)
        dtype = _dtype(array, name)
        notes: tuple[str, ...] = ()
        letters = _named(array)
        if axes is not None:
            letters = apply_axes(axes, shape, name)
        elif len(letters) != len(shape) or "?" in letters or not {"y", "x"} <= set(letters):
            letters, notes = guess_axes(shape, name)
        try:
            layout = Layout(letters, shape)
        except SourceError as error:
            raise error.at(name) from None
        pixels = LazyPixels(array, name)
        info = StackInfo(
            kind=name,
            axes=layout.axes,
            shape=layout.lengths,
            dtype=dtype,
            scale=(None,) * len(layout.axes),
            units=(None,) * len(layout.axes),
            attributes={"format": "array", "axes": letters},
            notes=notes,
            read_overhead=pixels.overhead,
        )
        return StoredSource(info, layout, pixels)


def _shape(array: Any, name: str) -> tuple[int, ...]:
    lengths = tuple(array.shape)
    if not all(isinstance(length, int | np.integer) for length in lengths):
        # dask writes NaN for lengths that it has not computed.
        raise SourceError(
            "the array has axes of unknown length", where=name, remedy="Call compute_chunk_sizes() on it first."
        )
    return tuple(int(length) for length in lengths)


def _dtype(array: Any, name: str) -> np.dtype[Any]:
    if isinstance(array, np.ma.MaskedArray):
        raise SourceError(
            "a masked array has pixels without a value",
            where=name,
            remedy="Give array.filled(value) or, with a mask that means nothing, array.data.",
        )
    try:
        dtype = np.dtype(array.dtype)
    except TypeError as error:
        raise SourceError(f"the pixel type {array.dtype!r} is none of numpy's", where=name) from error
    if dtype.kind not in "iuf" or dtype.itemsize > 8:
        what = {"b": "boolean", "c": "complex", "O": "object"}.get(dtype.kind, str(dtype))
        raise SourceError(
            f"{what} pixels cannot be compressed within a tolerance",
            where=name,
            remedy="Convert them to whole numbers of 8 to 64 bits or floats of 16, 32 or 64 bits first.",
        )
    native: np.dtype[Any] = dtype.newbyteorder("=")
    return native


def _named(array: Any) -> str:
    """Return the axes by the names that the array itself carries: xarray's dims, Zarr's dimension names."""
    names = getattr(array, "dims", None) or getattr(getattr(array, "metadata", None), "dimension_names", None)
    if not isinstance(names, list | tuple) or not names or any(not isinstance(one, str) for one in names):
        return ""
    return axis_letters(names)


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [ArrayLoad]
