"""Pixels that lie in a file as one uncompressed array: boxes are read with few calls and no needless copy."""

from __future__ import annotations

from math import prod
from pathlib import Path
from typing import IO, Any

import numpy as np
from numpy.typing import NDArray
from stackbound.errors import SourceError
from stackbound.stages import Index

PIECE = 2**20
"""Bytes read at a time where pixels must still be moved or swapped: the piece stays in the processor's cache."""

CALL = 2**13
"""Bytes that may be read in vain to save one call: about what the call itself costs from a warm cache."""


class FlatPixels:
    """An array in C order somewhere in a file.

    Parameters
    ----------
    path : Path
        The file.
    offset : int
        Position of the first pixel in bytes.
    shape : tuple of int
        Lengths of the stored axes, slowest first.
    dtype : numpy.dtype
        Pixel type as stored, byte order included.
    name : str
        What messages call the file.
    """

    def __init__(self, path: Path, offset: int, shape: Index, dtype: np.dtype[Any], name: str) -> None:
        self.path, self.offset, self.shape, self.dtype, self.name = path, offset, shape, dtype, name
        self._file: IO[bytes] | None = None

    @property
    def overhead(self) -> int:
        """Bytes that `fill` may hold beside `out`."""
        return min(PIECE, prod(self.shape) * self.dtype.itemsize)

    def fill(self, start: Index, stop: Index, out: NDArray[Any]) -> None:
        """Read a box into `out`, an array of its shape, of any strides, in native byte order."""
        if self._file is None:
            self._file = self.path.open("rb", buffering=0)
        box = tuple(high - low for low, high in zip(start, stop, strict=True))
        axis = self._run_axis(box, out)
        step = prod(self.shape[axis + 1 :])
        whole = box[axis + 1 :] == self.shape[axis + 1 :]
        inner = tuple(slice(low, high) for low, high in zip(start[axis + 1 :], stop[axis + 1 :], strict=True))
        for index in np.ndindex(*box[:axis]):
            first = 0
            for place, low, length in zip(index, start[:axis], self.shape[:axis], strict=True):
                first = first * length + low + place
            first = (first * self.shape[axis] + start[axis]) * step
            part = out[index]
            if whole and part.flags.c_contiguous:
                self._read_into(first, part.reshape(-1))
            else:
                self._read_pieces(first, step, inner, part, self.shape[axis + 1 :])

    def _run_axis(self, box: Index, out: NDArray[Any]) -> int:
        """Return the axis along which one read runs: axes behind it are read whole, even where the box is narrower.

        What cannot be read straight into `out` passes through a piece, which must hold at least one step.
        """
        size = self.dtype.itemsize

        def possible(axis: int) -> bool:
            if prod(self.shape[axis + 1 :]) * size <= PIECE:
                return True
            return box[axis + 1 :] == self.shape[axis + 1 :] and out[(0,) * axis].flags.c_contiguous

        def cost(axis: int) -> int:
            calls = prod(box[:axis])
            return calls * (CALL + box[axis] * prod(self.shape[axis + 1 :]) * size)

        return min(filter(possible, range(len(box))), key=cost)

    def _read_pieces(self, first: int, step: int, inner: tuple[slice, ...], part: NDArray[Any], shape: Index) -> None:
        rows = max(1, PIECE // (step * self.dtype.itemsize))
        scratch = np.empty((min(rows, len(part)), *shape), self.dtype)
        for row in range(0, len(part), rows):
            piece = scratch[: min(rows, len(part) - row)]
            self._read_bytes(first + row * step, piece.reshape(-1))
            part[row : row + rows] = piece[(slice(None), *inner)]

    def _read_into(self, first: int, flat: NDArray[Any]) -> None:
        if self.dtype.isnative:
            self._read_bytes(first, flat)
            return
        count = PIECE // self.dtype.itemsize
        for place in range(0, flat.size, count):
            piece = flat[place : place + count]
            self._read_bytes(first + place, piece)
            piece.byteswap(inplace=True)

    def _read_bytes(self, first: int, flat: NDArray[Any]) -> None:
        assert self._file is not None
        rest = memoryview(flat.view(np.uint8))  # type: ignore[arg-type]  # numpy before 2.3 does not say so
        position = self.offset + first * self.dtype.itemsize
        try:
            self._file.seek(position)
            while rest:
                got = self._file.readinto(rest)  # type: ignore[attr-defined]
                if not got:
                    break
                rest = rest[got:]
        except OSError as error:
            raise SourceError(f"cannot be read: {error.strerror or error}", where=self.name) from error
        if rest:
            raise SourceError(
                f"the file ends {len(rest)} bytes too early",
                where=f"{self.name}, byte {position}",
                remedy="It was cut short after it was opened; copy it again.",
            )

    def close(self) -> None:
        """Close the file."""
        if self._file is not None:
            self._file.close()
            self._file = None
