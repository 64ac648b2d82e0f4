"""A store opened for reading: a lazy array for people, a source for savers."""

from __future__ import annotations

import os
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from stackbound.errors import IntegrityError, StackboundError, TargetError, UsageError
from stackbound.geometry import Box, Index
from stackbound.regions import read_back
from stackbound.stages import OpenSource, StackInfo
from stackbound.store import ARRAY, LOG, Stored, read_root, read_store

if TYPE_CHECKING:
    from stackbound.promise import Promise


class StoredStack:
    """A stored stack; pixels are decoded when they are asked for, tile by tile.

    Each tile is checked against its own checksums while it is read; `stackbound.verify` checks everything.

    Attributes
    ----------
    path : Path
        The store.
    shape : tuple of int
        One length per axis.
    dtype : numpy.dtype
        Pixel type.
    axes : str
        Two to five of "tczyx".
    scale : tuple of float or None
        Distance between pixels per axis, where known.
    units : tuple of str or None
        Unit of `scale` per axis, where known.
    channel_names : tuple of str
        One name per channel, or empty.
    tile : tuple of int
        Shape of what is decoded at once.
    """

    def __init__(self, path: str | os.PathLike[str]) -> None:
        self.path = Path(path)
        self._stored = _read(self.path)
        info = self._stored.info
        self.shape: Index = info.shape
        self.dtype: np.dtype[Any] = info.dtype
        self.axes: str = info.axes
        self.scale = info.scale or (None,) * len(info.axes)
        self.units = info.units or (None,) * len(info.axes)
        self.channel_names = info.channel_names
        self.tile: Index = self._stored.grid.tile

    @property
    def info(self) -> StackInfo:
        """What the source told of itself."""
        return self._stored.info

    @property
    def promise(self) -> Promise:
        """The tolerance as asked for, in numbers and in words."""
        return self._stored.promise

    @property
    def tolerance(self) -> int | float | tuple[int | float, ...]:
        """The tolerance in stored pixel values: one number, or one per channel."""
        numbers = self.promise.numbers
        return numbers[0] if len(numbers) == 1 else numbers

    @cached_property
    def root(self) -> str:
        """The hash that stands for the whole store."""
        return read_root(self.path)

    @cached_property
    def zarr(self) -> Any:
        """The array as zarr opens it (`zarr.Array`), for reading."""
        import zarr

        array = zarr.open_array(self.path / ARRAY, mode="r")
        if array.shape != self.shape or array.dtype != self.dtype:
            raise IntegrityError("Array and image metadata disagree.", where=str(self.path))
        return array

    @property
    def ndim(self) -> int:
        """Number of axes."""
        return len(self.shape)

    @property
    def size(self) -> int:
        """Number of pixels."""
        return int(np.prod(self.shape, dtype=object))

    def __len__(self) -> int:
        return self.shape[0]

    def __getitem__(self, index: Any) -> NDArray[Any]:
        try:
            return np.asarray(self.zarr[index])
        except StackboundError as error:
            raise error.at(str(self.path)) from error.__cause__

    def __array__(self, dtype: Any = None, copy: bool | None = None) -> NDArray[Any]:
        if copy is False:
            raise ValueError("Decoding makes new pixels; they cannot be had without a copy.")
        return np.asarray(self[...], dtype=dtype)

    def to_dask(self, chunks: Any = None) -> Any:
        """Return a dask array of this stack.

        Parameters
        ----------
        chunks : optional
            As for `dask.array.from_zarr`; by default one chunk per tile.
        """
        try:
            import dask.array
        except ImportError:
            raise UsageError("dask is not installed.", remedy="pip install 'stackbound[dask]'") from None
        return dask.array.from_zarr(  # type: ignore[no-untyped-call]
            self.zarr, chunks=self.tile if chunks is None else chunks
        )

    def __repr__(self) -> str:
        lengths = ", ".join(f"{axis}={length}" for axis, length in zip(self.axes, self.shape, strict=True))
        return f"<StoredStack {lengths} {self.dtype}, tolerance {', '.join(self.promise.stored)}>"


def open_store(store: str | os.PathLike[str]) -> StoredStack:
    """Open a stored stack.

    Parameters
    ----------
    store : path
        The folder of the store.

    Raises
    ------
    stackbound.errors.TargetError
        There is no store.
    stackbound.errors.IntegrityError
        Its metadata are damaged.
    """
    return StoredStack(store)


class StoreSource(OpenSource):
    """A stored stack as a source, for savers.

    Parameters
    ----------
    stack : StoredStack
        The opened store.
    """

    def __init__(self, stack: StoredStack) -> None:
        self.stack = stack
        self.info = stack.info

    def read(self, start: Index, stop: Index) -> NDArray[Any]:
        """Return the decoded pixels of one box."""
        pixels = read_back(self.stack.zarr, Box(start, stop))
        pixels.flags.writeable = True
        return pixels


def require_store(path: Path) -> None:
    """Refuse a path that holds no part of a store.

    Raises
    ------
    stackbound.errors.TargetError
        Nothing is there, or something else.
    """
    if not path.exists():
        raise TargetError("There is no such store.", where=str(path))
    parts = ("zarr.json", f"{ARRAY}/zarr.json", LOG, "stackbound/README.txt")
    if not path.is_dir() or not any((path / part).exists() for part in parts):
        raise TargetError("This is not a store of stackbound.", where=str(path))


def _read(path: Path) -> Stored:
    require_store(path)
    return read_store(path)
