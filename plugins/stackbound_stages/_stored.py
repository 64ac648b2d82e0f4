"""An open source made of stored pixels, their layout and what is known of them."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from typing import Any, Protocol

from numpy.typing import NDArray
from stackbound.axes import Layout
from stackbound.errors import SourceError
from stackbound.stages import Index, OpenSource, SourceFile, StackInfo


class Pixels(Protocol):
    """Pixels in stored order."""

    @property
    def overhead(self) -> int:
        """Bytes that `fill` may hold beside `out`."""

    def fill(self, start: Index, stop: Index, out: NDArray[Any]) -> None:
        """Read a box of the stored array into `out`."""

    def close(self) -> None:
        """Release files."""


class StoredSource(OpenSource):
    """Pixels behind a layout."""

    def __init__(self, info: StackInfo, layout: Layout, pixels: Pixels, files: Iterable[SourceFile] = ()) -> None:
        self.info, self.layout, self.pixels, self.files = info, layout, pixels, tuple(files)

    def read(self, start: Index, stop: Index) -> NDArray[Any]:
        """Return the pixels of one box."""
        inside = all(0 <= low < high <= end for low, high, end in zip(start, stop, self.info.shape, strict=True))
        if not inside:
            raise IndexError(f"box {start} to {stop} is empty or leaves the stack {self.info.shape}")
        return self.layout.read(tuple(start), tuple(stop), self.info.dtype, self.pixels.fill)

    def close(self) -> None:
        """Release files."""
        self.pixels.close()


def look_at(path: Path) -> SourceFile:
    """Return size and time of a file.

    Raises
    ------
    stackbound.errors.SourceError
        It is missing, a folder, or may not be read.
    """
    try:
        status = path.stat()
        with path.open("rb"):
            pass
    except IsADirectoryError as error:
        raise SourceError("this is a folder, not a file", where=str(path)) from error
    except OSError as error:
        raise SourceError(f"cannot be read: {error.strerror or error}", where=str(path)) from error
    return SourceFile(path, status.st_size, status.st_mtime_ns)


def as_path(source: object) -> Path | None:
    """Return a source as a path where it is one."""
    return Path(source) if isinstance(source, str | Path) else None
