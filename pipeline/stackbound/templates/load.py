"""Read a small format of our own: one line of JSON (shape and dtype), then the pixels, little-endian.

A loader answers three questions: is this file mine, what is in it, and what are the pixels of this box?
"""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound import hookimpl
from stackbound.errors import SourceError
from stackbound.stages import Index, Load, OpenSource, Options, SourceFile, StackInfo, Stage

MAGIC = b'{"my-stage": 1, '


class MyStageOptions(Options):
    """No options."""


class MyStage(Load):
    """Read files of the format my-stage."""

    name = "my-stage"
    Options = MyStageOptions

    def recognises(self, source: object) -> bool:
        """Return whether `source` is a file that begins as ours do; never raise."""
        if not isinstance(source, str | Path) or not Path(source).is_file():
            return False
        with Path(source).open("rb") as file:
            return file.read(len(MAGIC)) == MAGIC

    def open(self, source: object, *, axes: str | None = None) -> OpenSource:
        """Open a file; everything that can be wrong with it is found here, before any pixel is needed."""
        return _Opened(Path(str(source)), axes)


class _Opened(OpenSource):
    def __init__(self, path: Path, axes: str | None) -> None:
        status = path.stat()
        self.files = (SourceFile(path, status.st_size, status.st_mtime_ns),)
        with path.open("rb") as file:
            line = file.readline(4096)
        try:
            header = json.loads(line)
            shape = tuple(int(length) for length in header["shape"])
            dtype = np.dtype(header["dtype"]).newbyteorder("<")
        except (ValueError, KeyError, TypeError) as error:
            raise SourceError("The header of the file cannot be read.", where=path.name) from error
        if status.st_size != len(line) + math.prod(shape) * dtype.itemsize:
            raise SourceError("The file is not as long as its header says.", where=path.name)
        names = axes or "tczyx"[-len(shape) :]
        self._pixels = np.memmap(path, dtype, "r", offset=len(line), shape=shape)
        self.info = StackInfo("my-stage", names, shape, dtype.newbyteorder("="))

    def read(self, start: Index, stop: Index) -> NDArray[Any]:
        """Return the pixels of one box as an array of its own."""
        box = self._pixels[tuple(map(slice, start, stop))]
        return np.array(box, self.info.dtype)


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stages of this plugin."""
    return [MyStage]
