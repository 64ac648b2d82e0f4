"""Planes that are spread over several TIFF files: one file each, or the files of one OME-TIFF set."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import tifffile
from numpy.typing import NDArray
from stackbound.errors import SourceError
from stackbound.stages import Index, SourceFile

from ._descriptions import pack
from ._flat import PIECE, FlatPixels
from ._stored import Pixels, look_at
from ._tiff_ifd import CUT, Page, PageTable, read_page_table
from ._tiff_pages import CodedPlanes, decoding_overhead, inner_axes, plane_offset
from ._tiff_series import watched


@dataclass(frozen=True)
class Plane:
    """Where the one plane of a file lies; no offset where it must be decoded."""

    path: Path
    page: Page
    offset: int | None
    dtype: np.dtype[Any]


class PlaneFiles:
    """Planes in files of their own, one file open at a time."""

    def __init__(self, planes: Sequence[Plane], lead: Index, shape: Index) -> None:
        self._planes, self._lead, self._shape = planes, lead, shape
        self._open: tuple[int, Pixels] | None = None

    @property
    def overhead(self) -> int:
        """Bytes that `fill` may hold beside `out`."""
        coded = [plane.page for plane in self._planes if plane.offset is None]
        return decoding_overhead(coded) if coded else PIECE

    def fill(self, start: Index, stop: Index, out: NDArray[Any]) -> None:
        """Read a box into `out`."""
        lead = len(self._lead)
        for index in np.ndindex(*out.shape[:lead]):
            place = tuple(low + step for low, step in zip(start, index, strict=False))
            number = int(np.ravel_multi_index(place, self._lead))
            self._plane(number).fill(start[lead:], stop[lead:], out[index])

    def _plane(self, number: int) -> Pixels:
        if self._open is None or self._open[0] != number:
            self.close()
            self._open = number, self._opened(self._planes[number])
        return self._open[1]

    def _opened(self, plane: Plane) -> Pixels:
        name = str(plane.path)
        if plane.offset is not None:
            return FlatPixels(plane.path, plane.offset, self._shape, plane.dtype, name)
        try:
            with watched(name):
                tiff = tifffile.TiffFile(plane.path, _multifile=False)
        except (OSError, tifffile.TiffFileError) as error:
            raise SourceError(f"the file cannot be read as TIFF: {error}", where=name, remedy=CUT) from error
        return CodedPlanes(tiff, [plane.page], tiff.pages.first, self._shape, len(self._shape), name)

    def close(self) -> None:
        """Close the open file."""
        if self._open is not None:
            self._open[1].close()
            self._open = None


def spread_planes(series: tifffile.TiffPageSeries, shape: Index, name: str) -> tuple[PlaneFiles, list[SourceFile]]:
    """Return the planes of a series that lies in several files, and these files.

    Parameters
    ----------
    series : tifffile.TiffPageSeries
        The series, with all its pages.
    shape : tuple of int
        Lengths of the stored axes.
    name : str
        What messages call the first file.
    """
    inner = inner_axes(shape, len(series.pages))
    if inner is None:
        raise SourceError(f"the {len(series.pages)} pages do not fit the stated shape {shape}", where=name, remedy=CUT)
    tables: dict[Path, PageTable] = {}
    places: dict[Path, dict[int, Page]] = {}
    planes: list[Plane] = []
    for found in series.pages:
        assert found is not None  # checked when the series was
        path = Path(found.parent.filehandle.path)
        if path not in tables:
            tables[path] = read_page_table(path, str(path))
            places[path] = {page.offset: page for page in tables[path].pages}
        table, page = tables[path], places[path].get(found.offset)
        if page is None or (planes and page.pixel_signature != planes[0].page.pixel_signature):
            raise SourceError("a plane is missing or unlike the first", where=str(path), remedy=CUT)
        where = f"{path}, page {page.number + 1}"
        dtype = np.dtype(series.dtype).newbyteorder(table.byteorder)  # type: ignore[arg-type]
        planes.append(Plane(path, page, plane_offset(page, page.grid(), table.size, where), dtype))
    lead = len(shape) - inner
    return PlaneFiles(planes, shape[:lead], shape[lead:]), [look_at(path) for path in tables]


def plane_texts(planes: Iterable[tuple[Path, Page]]) -> bytes | None:
    """Return the descriptions of all planes, packed; None where only the first plane has one, or none."""
    located = list(planes)
    if not any(page.text for _, page in located[1:]):
        return None
    texts = []
    for path, page in located:
        text = ""
        if page.text is not None:
            with path.open("rb") as file:
                file.seek(page.text[0])
                text = file.read(page.text[1]).rstrip(b"\0").decode("utf-8", "backslashreplace")
        texts.append(text)
    return pack(texts)
