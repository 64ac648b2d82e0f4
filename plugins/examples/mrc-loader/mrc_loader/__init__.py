"""Read MRC2014 files (A. Cheng et al., Journal of Structural Biology 192, 2015, 146-150).

A header of 1024 bytes in 4-byte words, an extended header, then the sections; numbers of words below count from 1 as in
the paper.
"""

from __future__ import annotations

import math
import struct
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from stackbound import hookimpl
from stackbound.errors import SourceError
from stackbound.stages import Index, Load, OpenSource, Options, SourceFile, StackInfo, Stage

HEADER = 1024
MODES = {0: "i1", 1: "i2", 2: "f4", 6: "u2", 12: "f2"}
"""Pixel type by mode (word 4); 3 and 4 are complex, 101 is packed."""


class MrcOptions(Options):
    """No options."""


class Mrc(Load):
    """Read MRC2014 volumes and image stacks."""

    name = "mrc"
    Options = MrcOptions

    def recognises(self, source: object) -> bool:
        """Return whether `source` is a file that says "MAP " in word 53."""
        if not isinstance(source, str | Path) or not Path(source).is_file():
            return False
        with Path(source).open("rb") as file:
            return file.read(212)[208:212] in (b"MAP ", b"MAP\0")

    def open(self, source: object, *, axes: str | None = None) -> OpenSource:
        """Open a file and check its header against its size."""
        return MrcSource(Path(str(source)), axes)


class MrcSource(OpenSource):
    """One MRC file, its pixels mapped into memory."""

    def __init__(self, path: Path, axes: str | None = None) -> None:
        status = path.stat()
        self.files = (SourceFile(path, status.st_size, status.st_mtime_ns),)
        with path.open("rb") as file:
            header = file.read(HEADER)
        if len(header) < HEADER:
            raise SourceError("The file ends inside its header.", where=path.name)
        order = byte_order(header, path.name)
        columns, rows, sections, mode = struct.unpack(f"{order}4i", header[:16])
        extended = struct.unpack(f"{order}i", header[92:96])[0]
        if mode not in MODES:
            raise SourceError(
                f"Pixels of mode {mode} are not read.", where=path.name, remedy=f"Modes {sorted(MODES)} are."
            )
        if struct.unpack(f"{order}3i", header[64:76]) not in ((1, 2, 3), (0, 0, 0)):
            raise SourceError("Columns, rows and sections are not x, y and z.", where=path.name)
        dtype = np.dtype(MODES[mode]).newbyteorder(order)
        shape = (sections, rows, columns)
        if min(shape) < 1 or extended < 0:
            raise SourceError(f"The header says {columns} x {rows} x {sections} pixels.", where=path.name)
        expected = HEADER + extended + math.prod(shape) * dtype.itemsize
        if status.st_size < expected:
            raise SourceError(f"The file has {status.st_size} bytes, its header says {expected}.", where=path.name)
        self._pixels = np.memmap(path, dtype, "r", offset=HEADER + extended, shape=shape)
        scale = pixel_size(header, order)
        names = axes or "zyx"
        keep = slice(1, None) if sections == 1 and len(names) == 2 else slice(None)
        self._flat = keep.start == 1
        self.info = StackInfo(
            "MRC2014",
            names,
            shape[keep],
            dtype.newbyteorder("="),
            scale=scale[keep],
            units=tuple("angstrom" if size else None for size in scale)[keep],
            headers={"mrc-header.bin": header},
        )

    def read(self, start: Index, stop: Index) -> NDArray[Any]:
        """Return the pixels of one box."""
        pixels = self._pixels[0] if self._flat else self._pixels
        return np.array(pixels[tuple(map(slice, start, stop))], self.info.dtype)


def byte_order(header: bytes, name: str) -> str:
    """Return the byte order by the machine stamp (word 54), or by which one gives a mode and axes that exist."""
    stamps = {b"\x44\x44": "<", b"\x44\x41": "<", b"\x11\x11": ">"}
    if header[212:214] in stamps:
        return stamps[header[212:214]]
    for order in "<>":
        mode, axes = struct.unpack(f"{order}i", header[12:16])[0], struct.unpack(f"{order}3i", header[64:76])
        if mode in {*MODES, 3, 4, 101} and {*axes} <= {0, 1, 2, 3}:
            return order
    raise SourceError("The byte order cannot be told from the header.", where=name)


def pixel_size(header: bytes, order: str) -> tuple[float | None, ...]:
    """Return the distance between pixels along z, y and x in angstrom: cell (words 11-13) by sampling (words 8-10)."""
    sampling = struct.unpack(f"{order}3i", header[28:40])
    cell = struct.unpack(f"{order}3f", header[40:52])
    sizes = (length / count if count > 0 else 0.0 for length, count in zip(cell, sampling, strict=True))
    return tuple(size if math.isfinite(size) and size > 0 else None for size in sizes)[::-1]


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stages of this plugin."""
    return [Mrc]
