"""Load TIFF: multi-page files, BigTIFF, ImageJ hyperstacks, OME-TIFF, and folders or lists of single planes."""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import tifffile
from stackbound.axes import Layout
from stackbound.errors import SourceError, StackboundError
from stackbound.plugins import hookimpl
from stackbound.stages import Load, OpenSource, StackInfo, Stage

from ._flat import FlatPixels
from ._stored import Pixels, StoredSource, as_path, look_at
from ._tiff_folder import is_plane_list, list_planes, open_planes
from ._tiff_ifd import CUT, PageTable, read_page_table
from ._tiff_metadata import read_metadata
from ._tiff_pages import CodedPlanes, SpacedPlanes, inner_axes, plane_offset
from ._tiff_planes import plane_texts, spread_planes
from ._tiff_series import check_complete, check_dtype, check_offsets, choose_series, plane_pages, stored_axes, watched

SUFFIXES = (".tif", ".tiff", ".btf", ".tf2", ".tf8")

_MAGIC = (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")

_KINDS = {"ome": "OME-TIFF", "imagej": "ImageJ TIFF", "lsm": "LSM", "stk": "STK"}


class TiffLoad(Load):
    """TIFF files, and folders or lists of TIFF files that hold one plane each."""

    name = "tiff"

    def recognises(self, source: object) -> bool:
        """Return whether this is a file with TIFF's first bytes or name, a folder of such files, or a list of them."""
        path = as_path(source)
        if path is None:
            return is_plane_list(source, SUFFIXES)
        if path.is_dir():
            return bool(list_planes(path, SUFFIXES)[0])
        if path.name.lower().endswith(SUFFIXES):
            return True
        try:
            with path.open("rb") as file:
                return file.read(4) in _MAGIC
        except OSError:
            return False

    def open(self, source: object, *, axes: str | None = None) -> OpenSource:
        """Open a file, a folder or a list of files."""
        path = as_path(source)
        if path is not None and not path.is_dir():
            return open_file(path, axes)
        return open_planes(source, SUFFIXES, axes, open_file)


def open_file(path: Path, axes: str | None) -> StoredSource:
    """Open one TIFF file."""
    name = str(path)
    file = look_at(path)
    table = read_page_table(path, name)
    tiff: tifffile.TiffFile | None = None
    try:
        with watched(name) as minor:
            tiff = tifffile.TiffFile(path)
            series, notes = choose_series(tiff, name)
            check_dtype(series.dtype, series.keyframe, name)
            check_offsets(series.kind, table.size, name)
            check_complete(tiff, series, table, name)
            stored, shape, remarks = stored_axes(series, axes, name)
            layout = Layout(stored, shape)
            metadata = read_metadata(tiff, series.kind, stored)
        pixels: Pixels
        if getattr(series, "is_multifile", False):
            pixels, files = spread_planes(series, shape, name)
            notes.append(f"The planes lie in {len(files)} files that belong together.")
            tiff.close()
        else:
            pixels, files = _pixels(tiff, series, table, shape, path), [file]
            if series.kind != "ome":
                texts = plane_texts((path, page) for page in table.pages)
                if texts is not None:
                    metadata.headers["plane-descriptions.jsonl"] = texts
    except StackboundError as error:
        if tiff is not None:
            tiff.close()
        raise (error if error.where else error.at(name)) from error.__cause__
    except Exception as error:  # the library raises what its parsers happen to raise
        if tiff is not None:
            tiff.close()
        raise SourceError(f"the file cannot be read as TIFF: {error}", where=name, remedy=CUT) from error
    if minor:
        metadata.notes.append("Some fields of the file cannot be read and are not kept.")
    channels = dict(zip(layout.axes, layout.lengths, strict=True)).get("c", 0)
    info = StackInfo(
        kind=_KINDS.get(series.kind, "BigTIFF" if table.bigtiff else "TIFF"),
        axes=layout.axes,
        shape=layout.lengths,
        dtype=np.dtype(series.dtype.name),
        scale=tuple(metadata.scale.get(axis) for axis in layout.axes),
        units=tuple(metadata.units.get(axis) for axis in layout.axes),
        channel_names=metadata.channel_names if len(metadata.channel_names) == channels else (),
        ome_xml=metadata.ome_xml,
        headers=metadata.headers,
        attributes=metadata.attributes,
        notes=(*notes, *remarks, *metadata.notes),
        # Channels of samples each are put together in a copy.
        read_overhead=None if {"c", "s"} <= set(stored) else pixels.overhead,
    )
    return StoredSource(info, layout, pixels, files)


def _pixels(
    tiff: tifffile.TiffFile,
    series: tifffile.TiffPageSeries,
    table: PageTable,
    shape: tuple[int, ...],
    path: Path,
) -> Pixels:
    """Return the fastest reader that the file's layout allows; check that all pixel data lie inside the file."""
    name = str(path)
    stored = np.dtype(series.dtype).newbyteorder(tiff.byteorder)
    pages = plane_pages(series, table, name)
    if pages is None:
        return _virtual(tiff, series, table, shape, stored, path)
    grid = pages[0].grid()
    offsets = [plane_offset(page, grid, table.size, f"{name}, page {page.number + 1}") for page in pages]
    places = [offset for offset in offsets if offset is not None]
    inner = inner_axes(shape, len(pages))
    if len(places) == len(pages):
        plane = int(series.keyframe.size) * stored.itemsize
        if all(later - earlier == plane for earlier, later in pairwise(places)):
            tiff.close()
            return FlatPixels(path, places[0], shape, stored, name)
        if inner is not None:
            tiff.close()
            return SpacedPlanes(path, places, shape, inner, stored, name)
    if inner is None:
        raise SourceError(
            f"the {len(pages)} pages do not fit the stated shape {shape}", where=name, remedy="Export the stack again."
        )
    return CodedPlanes(tiff, pages, series.keyframe, shape, inner, name)


def _virtual(
    tiff: tifffile.TiffFile,
    series: tifffile.TiffPageSeries,
    table: PageTable,
    shape: tuple[int, ...],
    stored: np.dtype[Any],
    path: Path,
) -> FlatPixels:
    """Return the reader of planes that follow one another behind a single page, as ImageJ writes beyond 4 GB."""
    offset = series.dataoffset
    size = int(np.prod(shape, dtype=object)) * stored.itemsize
    if offset is None:
        raise SourceError(
            "the planes neither have pages of their own nor follow one another uncompressed",
            where=str(path),
            remedy="Export the stack with one page per plane.",
        )
    if offset + size > table.size:
        raise SourceError(
            f"pixel data should end at byte {offset + size}, but the file has only {table.size}",
            where=str(path),
            remedy=CUT,
        )
    tiff.close()
    return FlatPixels(path, offset, shape, stored, str(path))


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [TiffLoad]
