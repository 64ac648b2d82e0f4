"""Pixels of TIFF pages: uncompressed planes straight from the file, all others strip by strip or tile by tile."""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Iterable, Sequence
from math import prod
from pathlib import Path
from typing import Any

import numpy as np
import tifffile
from numpy.typing import NDArray
from stackbound.errors import SourceError
from stackbound.stages import Index

from ._flat import FlatPixels
from ._tiff_ifd import CUT, Grid, Page

CACHE = 2**26
"""Decoded bytes kept, so that regions side by side do not decode the strips between them again and again."""

Box5 = tuple[tuple[int, int], ...]


def plane_offset(page: Page, grid: Grid, size: int, where: str) -> int | None:
    """Return where a plane starts if it lies in the file as one uncompressed run; check that its data are all there.

    Parameters
    ----------
    page : Page
        Entry of the page table.
    grid : Grid
        Its strips or tiles.
    size : int
        Length of the file in bytes.
    where : str
        What messages call file and plane.

    Raises
    ------
    stackbound.errors.SourceError
        A strip or tile is missing or lies outside the file.
    """
    if len(page.offsets) < grid.count:
        raise SourceError(f"{len(page.offsets)} of {grid.count} strips or tiles are listed", where=where, remedy=CUT)
    raw = page.field(259) == 1
    # Anything else is unpacked, turned, or put together by tifffile.
    plain = raw and page.field(266) == 1 and page.field(317) == 1 and page.fields[258][0] in (8, 16, 32, 64)
    plain = plain and grid.gapless and page.field(262) != 6
    if grid.count == 1:  # quickly: files of ten thousand tiny planes exist
        offset, length = int(page.offsets[0]), grid.last if raw else int(page.counts[0])
        if offset and length and offset + length <= size:
            return offset if plain else None
    offsets, counts = page.offsets[: grid.count], page.counts[: grid.count]
    lengths = grid.lengths() if raw else counts
    empty = (offsets == 0) | ((counts == 0) & (not raw))
    if empty.any() and not (page.tiled and not empty.all()):
        raise SourceError("strips or tiles of the plane hold no data", where=where, remedy=CUT)
    ends = np.where(empty, 0, offsets + lengths)
    if ends.max() > size:
        raise SourceError(
            f"pixel data should end at byte {ends.max()}, but the file has only {size}", where=where, remedy=CUT
        )
    if not plain or empty.any():
        return None
    return int(offsets[0]) if bool((offsets[:-1] + lengths[:-1] == offsets[1:]).all()) else None


def decoding_overhead(pages: Iterable[Page]) -> int:
    """Return the bytes held while strips or tiles are decoded: those kept, and one being unpacked and put in order."""
    return CACHE + 3 * max(page.grid().full for page in pages)


class SpacedPlanes:
    """Uncompressed planes anywhere in one file."""

    def __init__(
        self, path: Path, offsets: Sequence[int], shape: Index, inner: int, dtype: np.dtype[Any], name: str
    ) -> None:
        self._offsets, self._lead = offsets, shape[: len(shape) - inner]
        self._plane = FlatPixels(path, 0, shape[len(shape) - inner :], dtype, name)

    @property
    def overhead(self) -> int:
        """Bytes that `fill` may hold beside `out`."""
        return self._plane.overhead

    def fill(self, start: Index, stop: Index, out: NDArray[Any]) -> None:
        """Read a box into `out`."""
        lead = len(self._lead)
        for index in np.ndindex(*out.shape[:lead]):
            place = tuple(low + step for low, step in zip(start, index, strict=False))
            self._plane.offset = self._offsets[_ravel(place, self._lead)]
            self._plane.fill(start[lead:], stop[lead:], out[index])

    def close(self) -> None:
        """Close the file."""
        self._plane.close()


class CodedPlanes:
    """Planes whose strips or tiles must be decoded; only those that a box touches are.

    Parameters
    ----------
    tiff : tifffile.TiffFile
        The open file.
    pages : sequence of Page
        The planes in the order of the stored array.
    keyframe : tifffile.TiffPage
        A page that speaks for all.
    shape : tuple of int
        Lengths of the stored axes.
    inner : int
        How many of them, counted from the last, lie within a page.
    name : str
        What messages call the file.
    """

    def __init__(
        self,
        tiff: tifffile.TiffFile,
        pages: Sequence[Page],
        keyframe: tifffile.TiffPage,
        shape: Index,
        inner: int,
        name: str,
    ) -> None:
        self._tiff, self._pages, self._key, self._name = tiff, pages, keyframe, name
        self._lead = shape[: len(shape) - inner]
        self._five = _match(shape[len(shape) - inner :], keyframe.shaped, name)
        self._cache: OrderedDict[tuple[int, int], NDArray[Any]] = OrderedDict()
        self._cached = 0

    @property
    def overhead(self) -> int:
        """Bytes that `fill` may hold beside `out`."""
        return decoding_overhead(self._pages[:1])

    def fill(self, start: Index, stop: Index, out: NDArray[Any]) -> None:
        """Read a box into `out`."""
        lead = len(self._lead)
        bounds = tuple(zip(start[lead:], stop[lead:], strict=True))
        box = tuple((0, 1) if axis is None else bounds[axis] for axis in self._five)
        used = set(self._five)
        pick: tuple[slice | int, ...] = tuple(slice(None) if axis in used else 0 for axis in range(len(bounds)))
        spread = tuple(None if axis is None else slice(None) for axis in self._five)
        for index in np.ndindex(*out.shape[:lead]):
            place = tuple(low + step for low, step in zip(start, index, strict=False))
            self._fill_plane(_ravel(place, self._lead), box, out[index][pick][spread])

    def _fill_plane(self, plane: int, box: Box5, out: NDArray[Any]) -> None:
        _, depth, length, width, _ = self._key.shaped
        if self._key.is_tiled:
            sides = (1, self._key.tiledepth, self._key.tilelength, self._key.tilewidth)
        else:
            sides = (1, 1, self._key.rowsperstrip, width)
        grid = (-(-depth // sides[1]), -(-length // sides[2]), -(-width // sides[3]))
        spans = [range(low // side, -(-high // side)) for (low, high), side in zip(box, sides, strict=False)]
        low_s, high_s = box[4]
        for s in spans[0]:
            for d in spans[1]:
                for row in spans[2]:
                    for column in spans[3]:
                        segment = self._segment(plane, ((s * grid[0] + d) * grid[1] + row) * grid[2] + column)
                        corner = (d * sides[1], row * sides[2], column * sides[3])
                        take: list[slice] = []
                        put: list[slice] = []
                        for first, (low, high), size in zip(corner, box[1:4], segment.shape[:3], strict=True):
                            begin, end = max(first, low), min(first + size, high)
                            take.append(slice(begin - first, end - first))
                            put.append(slice(begin - low, end - low))
                        place: tuple[slice | int, ...] = (s - box[0][0], *put)
                        out[place] = segment[(*take, slice(low_s, high_s))]

    def _segment(self, plane: int, number: int) -> NDArray[Any]:
        """Return one decoded strip or tile, shape (depth, length, width, samples)."""
        known = self._cache.get((plane, number))
        if known is not None:
            self._cache.move_to_end((plane, number))
            return known
        segment = self._decode(self._pages[plane], number)
        while self._cache and self._cached + segment.nbytes > CACHE:
            self._cached -= self._cache.popitem(last=False)[1].nbytes
        self._cache[plane, number] = segment
        self._cached += segment.nbytes
        return segment

    def _decode(self, page: Page, number: int) -> NDArray[Any]:
        where = f"{self._name}, page {page.number + 1}, {'tile' if page.tiled else 'strip'} {number + 1}"
        offset, count = int(page.offsets[number]), int(page.counts[number])
        more: dict[str, Any] = {"_fullsize": False}
        try:
            if self._key.compression in (6, 7, 33007, 34892):  # JPEG: each page may bring its own tables
                own = self._tiff.pages[page.number]
                more |= {"jpegtables": own.jpegtables, "jpegheader": self._key.jpegheader}
            handle = self._tiff.filehandle
            handle.seek(offset)
            data = handle.read(count) if offset and count else None
            if data is not None and len(data) < count:
                raise SourceError(f"the file ends {count - len(data)} bytes too early", where=where, remedy=CUT)
            decoded, _, shape = self._key.decode(data, number, **more)
        except SourceError:
            raise
        except Exception as error:  # each of the many decoders has exceptions of its own
            raise SourceError(f"the pixels cannot be decoded: {error}", where=where, remedy=CUT) from error
        if decoded is None:
            return np.full(shape, self._key.nodata, self._key.dtype)
        return np.asarray(decoded)

    def close(self) -> None:
        """Close the file."""
        self._cache.clear()
        self._tiff.close()


def _match(inner: Index, shaped: Sequence[int], name: str) -> tuple[int | None, ...]:
    """Return for each of a page's five normal axes (sample, depth, length, width, sample) the stored axis it is."""
    longer = [axis for axis, length in enumerate(inner) if length > 1]
    if [inner[axis] for axis in longer] != [length for length in shaped if length > 1]:
        raise SourceError(
            f"the stated shape {inner} is not that of the pages {tuple(length for length in shaped if length > 1)}",
            where=name,
            remedy="Export the stack again with one plane per page.",
        )
    rest = iter(longer)
    return tuple(next(rest) if length > 1 else None for length in shaped)


def _ravel(place: Index, shape: Index) -> int:
    number = 0
    for step, length in zip(place, shape, strict=True):
        number = number * length + step
    return number


def inner_axes(shape: Index, pages: int) -> int | None:
    """Return how many trailing axes of a stored shape lie within one of `pages` pages, or None where none fits."""
    for axis in range(len(shape) + 1):
        if prod(shape[:axis]) == pages:
            # Axes of length 1 go to the pages.
            return len(shape) - axis
    return None
