"""Write a synthetic stack as a real OME-TIFF, one plane in memory at a time."""

from __future__ import annotations

import uuid
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import tifffile
from numpy.typing import NDArray

from stackbound_synthetic.stack import SyntheticStack

CLASSIC_LIMIT = 2**32 - 2**25
"""Bytes of pixels from which a file is written as BigTIFF, whose offsets have 64 bits."""


def write_ome_tiff(path: Path, stack: SyntheticStack, advance: Callable[[int], None] = lambda planes: None) -> None:
    """Write `stack` to a new file `path`.

    Axes are CZYX, or ZYX for one channel. The file names pixel sizes and channels. The same stack gives the same bytes
    with the same version of tifffile.

    Parameters
    ----------
    path : Path
        Must not exist.
    stack : SyntheticStack
        What to write.
    advance : callable
        Called with 1 after each plane.

    Raises
    ------
    FileExistsError
        `path` exists.
    """
    channels, depth, rows, columns = stack.shape
    shape = stack.shape if channels > 1 else (depth, rows, columns)
    size_z, size_y, size_x = stack.scene.pixel
    metadata: dict[str, Any] = {
        "axes": "CZYX" if channels > 1 else "ZYX",
        "Name": stack.name,
        "Channel": {"Name": list(stack.scene.channel_names)},
        "UUID": str(uuid.uuid5(uuid.NAMESPACE_OID, f"{stack.name} {stack.shape} {stack.seed}")),
    }
    for axis, size in zip("ZYX", (size_z, size_y, size_x), strict=True):
        metadata |= {f"PhysicalSize{axis}": size, f"PhysicalSize{axis}Unit": "µm"}
    total = channels * depth * rows * columns * stack.dtype.itemsize

    def planes() -> Iterator[NDArray[Any]]:
        for plane in stack.planes():
            yield plane
            advance(1)

    with path.open("xb") as file, tifffile.TiffWriter(file, ome=True, bigtiff=total > CLASSIC_LIMIT) as writer:
        writer.write(planes(), shape=shape, dtype=stack.dtype, photometric="minisblack", metadata=metadata)
