"""Save Zarr: a plain OME-Zarr 0.5 image with codecs of the Zarr 3 core specification, readable without stackbound."""

from __future__ import annotations

from collections.abc import Iterator
from math import ceil, prod
from pathlib import Path
from typing import ClassVar

import numpy as np
from stackbound.errors import UsageError
from stackbound.plugins import hookimpl
from stackbound.stages import Index, OpenSource, Save, StackInfo, Stage

from ._ome_zarr import write_image

_SIDE = 1024
_SMALL = 2**18
"""Pixels below which planes share a chunk: a file per tiny plane would be slow to read and to copy."""

_DEPTH = 16
"""Planes read at a time: the tiles of a store are some planes deep, and all of a tile is decoded for any of it."""

_BOX = 2**26


class ZarrSave(Save):
    """OME-Zarr 0.5 of one level, compressed without loss by Blosc (Zstandard after byte shuffle)."""

    name = "zarr"
    suffixes: ClassVar[tuple[str, ...]] = (".ome.zarr", ".zarr")

    def check(self, info: StackInfo) -> None:
        """Refuse pixel types that the Zarr 3 core specification does not have."""
        if info.dtype.kind not in "iuf" or info.dtype.itemsize > 8:
            raise UsageError(f"Zarr is written for whole numbers and floats, not {info.dtype}")

    def write(self, target: Path, source: OpenSource) -> None:
        """Write all pixels and the metadata."""
        import zarr
        from zarr.codecs import BloscCodec

        info = source.info
        self.check(info)
        chunks = chunk_shape(info)
        group = zarr.create_group(str(target), zarr_format=3)
        group.attrs.update(write_image(info.axes, info.scale, info.units, info.channel_names, "0"))
        array = group.create_array(
            "0",
            shape=info.shape,
            dtype=info.dtype,
            chunks=chunks,
            dimension_names=list(info.axes),
            compressors=BloscCodec(cname="zstd", clevel=5, shuffle="shuffle", typesize=info.dtype.itemsize),
            fill_value=0,
            config={"write_empty_chunks": True},
        )
        for start, stop in _boxes(info, chunks):
            array[tuple(slice(low, high) for low, high in zip(start, stop, strict=True))] = source.read(start, stop)
        if info.ome_xml is not None:
            zarr.create_group(str(target / "OME"), zarr_format=3)
            (target / "OME" / "METADATA.ome.xml").write_bytes(info.ome_xml)


def chunk_shape(info: StackInfo) -> Index:
    """Return the shape of a chunk: a piece of one plane, or some tiny planes."""
    size = dict(zip(info.axes, info.shape, strict=True))
    chunk = dict.fromkeys(info.axes, 1)
    side = _SIDE if info.dtype.itemsize <= 4 else _SIDE // 2
    for axis in "yx":
        chunk[axis] = min(size[axis], side)
    for axis in "ztc":
        planes = max(1, _SMALL // prod(chunk.values()))
        if axis in size and planes > 1:
            chunk[axis] = min(size[axis], planes)
    return tuple(chunk[axis] for axis in info.axes)


def _boxes(info: StackInfo, chunks: Index) -> Iterator[tuple[Index, Index]]:
    """Yield boxes of whole chunks, some planes deep, then as wide as fits."""
    steps = dict(zip(info.axes, chunks, strict=True))
    size = dict(zip(info.axes, info.shape, strict=True))
    left = _BOX // info.dtype.itemsize
    deep = next((axis for axis in "zt" if size.get(axis, 1) > 1), None)
    for axis, limit in ([(deep, _DEPTH)] if deep else []) + [("x", size["x"]), ("y", size["y"])]:
        most = ceil(min(limit, size[axis]) / steps[axis])
        steps[axis] *= max(1, min(most, left // prod(steps.values())))
    order = tuple(steps[axis] for axis in info.axes)
    for place in np.ndindex(*(ceil(length / step) for length, step in zip(info.shape, order, strict=True))):
        start = tuple(number * step for number, step in zip(place, order, strict=True))
        yield start, tuple(min(low + step, end) for low, step, end in zip(start, order, info.shape, strict=True))


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [ZarrSave]
