"""Which image of a TIFF is the stack, what its axes are, and whether all of it is there."""

from __future__ import annotations

import contextlib
import logging
import re
import threading
from collections.abc import Iterator
from math import prod
from typing import Any

import numpy as np
import tifffile
from stackbound.axes import DROPPED, apply_axes, describe_shape
from stackbound.errors import SourceError

from ._tiff_ifd import CUT, Page, PageTable

_MINOR = re.compile(
    r"TiffTag|GeoKey|GDAL_NODATA|read_utf8|read_json|_metadata> raised|_tags> raised|get_resolution"
    r"|#\d+ raised|for tag #|read_uic"
)
"""Messages of tifffile about a single field; all others mean that the stack itself is in doubt. The fields on which
pixels depend were read by ourselves before."""


@contextlib.contextmanager
def watched(name: str) -> Iterator[list[str]]:
    """Turn what tifffile only logs into errors; yield the list that gathers its minor messages."""
    handler = _Gather()
    logger = tifffile.logger()
    passing_on, logger.propagate = logger.propagate, False
    logger.addHandler(handler)
    minor: list[str] = []
    # Text that is no ASCII is kept as bytes: nothing is lost.
    try:
        yield minor
    finally:
        logger.removeHandler(handler)
        logger.propagate = passing_on
        handler.messages = [message for message in handler.messages if "coercing" not in message]
        minor += [message for message in handler.messages if _MINOR.search(message)]
    grave = [message for message in handler.messages if not _MINOR.search(message)]
    if grave:
        said = re.sub(r"<tifffile\.\w+[^>]*>\s*", "", grave[0])
        together = "Put all files of the set into one folder." if "failed to read" in said else CUT
        raise SourceError(f"the file is damaged or incomplete: {said}", where=name, remedy=together)


class _Gather(logging.Handler):
    def __init__(self) -> None:
        super().__init__(logging.WARNING)
        self.messages: list[str] = []
        self._thread = threading.get_ident()

    def emit(self, record: logging.LogRecord) -> None:
        if threading.get_ident() == self._thread:
            self.messages.append(record.getMessage())


def choose_series(tiff: tifffile.TiffFile, name: str) -> tuple[tifffile.TiffPageSeries, list[str]]:
    """Return the one image of a file and remarks about what is left out."""
    series = list(tiff.series)
    notes = []
    if not series:
        raise SourceError("the TIFF has no image", where=name, remedy=CUT)
    # Bit 0 of NewSubfileType marks a reduced copy of another image (TIFF 6.0, section 8).
    full = [one for one in series if not int(one.keyframe.subfiletype) & 1] or series
    if len(full) > 1:
        listed = "; ".join(
            f"{number}. {one.axes.lower()} {describe_shape(one.shape)} {one.dtype}"
            for number, one in enumerate(full[:8], 1)
        )
        more = f"; and {len(full) - 8} more" if len(full) > 8 else ""
        raise SourceError(
            f"the file holds {len(full)} images of different kinds ({listed}{more})",
            where=name,
            remedy="Save each image as a file of its own.",
        )
    if len(series) > len(full):
        notes.append("A reduced copy of the image (a thumbnail) is left out.")
    if len(full[0].levels) > 1:
        notes.append(f"Only the full resolution is taken; {len(full[0].levels) - 1} smaller levels are left out.")
    return full[0], notes


def check_dtype(dtype: np.dtype[Any] | None, page: Any, name: str) -> None:
    """Refuse pixels that are neither whole numbers nor real numbers."""
    if dtype is not None and dtype.kind in "iuf" and dtype.itemsize <= 8:
        return
    what = {"b": "one-bit (yes or no) pixels", "c": "complex pixels"}.get(dtype.kind if dtype is not None else "", "")
    what = what or f"pixels of {page.bitspersample} bits in sample format {page.sampleformat}"
    raise SourceError(
        f"{what} cannot be compressed within a tolerance",
        where=name,
        remedy="Convert them to whole numbers of 8 to 64 bits or floats of 16, 32 or 64 bits first.",
    )


def stored_axes(series: tifffile.TiffPageSeries, axes: str | None, name: str) -> tuple[str, tuple[int, ...], list[str]]:
    """Return one letter of "tczyxs-" and one length per stored axis, and remarks on what was assumed.

    Axes of length 1 stay only where the file itself names them one by one, as tifffile's shape description does; the
    OME model always has five and ImageJ always three, so there they say nothing (tifffile leaves them out by itself).
    """
    shape, names = tuple(series.shape), series.axes.upper()
    if axes is not None:
        return apply_axes(axes, shape, name), shape, []
    keep = series.kind == "shaped"
    letters = []
    for letter, length in zip(names, shape, strict=True):
        known = letter.lower() if letter in "TCZYXS" else "?"
        if length == 1 and known not in "yx" and not (keep and known in "tcz"):
            known = DROPPED
        letters.append(known)
    notes = []
    unknown = [place for place, letter in enumerate(letters) if letter == "?"]
    free = [letter for letter in "ztc" if letter not in letters and not (letter == "c" and "s" in letters)]
    if len(unknown) > len(free):
        raise SourceError(
            f"the stored axes {names.lower()} ({describe_shape(shape)}) are more than t, c, z, y and x",
            where=name,
            remedy="Split the file, or say with --axes what they are.",
        )
    for place, letter in zip(unknown, sorted(free[: len(unknown)], key="tcz".index), strict=True):
        letters[place] = letter
        notes.append(f"An axis of {shape[place]} without a known name is taken as {letter} (--axes decides).")
    stored = "".join(letters)
    if not {"y", "x"} <= set(stored):
        raise SourceError(
            f"the stored axes {names.lower()} have no y and x", where=name, remedy="Name them with --axes."
        )
    return stored, shape, notes


def check_offsets(kind: str, size: int, name: str) -> None:
    """Refuse LSM files beyond 4 GB: they are classic TIFFs whose 32-bit offsets start again from 0."""
    if kind == "lsm" and size >= 2**32:
        raise SourceError(
            "an LSM file beyond 4 GB does not say where its planes lie", where=name, remedy="Export it as OME-TIFF."
        )


def check_complete(tiff: tifffile.TiffFile, series: tifffile.TiffPageSeries, table: PageTable, name: str) -> None:
    """Compare the planes that the file promises with those that it has."""
    if any(page is None for page in series.pages):
        missing = next(number for number, page in enumerate(series.pages, 1) if page is None)
        several = bool(getattr(series, "is_multifile", False))
        raise SourceError(
            f"a plane that the metadata list is not in the {'set of files' if several else 'file'}",
            where=f"{name}, plane {missing}",
            remedy="Put all files of the set into one folder." if several else CUT,
        )
    key = series.keyframe
    planes = prod(series.shape) // max(1, prod(key.shape))
    description = tiff.pages.first.description or ""
    if description.startswith("ImageJ="):
        promised = _imagej_planes(description, key.samplesperpixel)
        alone = series.kind == "imagej" and len(series.pages) == 1  # its planes follow the one page
        found = planes if alone else len(table.pages)
        if found < promised:
            raise SourceError(f"{found} of {promised} planes are in the file", where=name, remedy=CUT)
    levels = [level for one in tiff.series for level in one.levels]
    used = {page.offset for level in levels for page in level.pages if page is not None}
    rest = [page for page in table.pages if page.offset not in used and not page.field(254) & 1]
    if rest and planes == len(series.pages):
        raise SourceError(
            "the page belongs to no image that the metadata describe",
            where=f"{name}, page {rest[0].number + 1}",
            remedy="Export the stack again.",
        )


def _imagej_planes(description: str, samples: int) -> int:
    said = dict(re.findall(r"^(images|channels|slices|frames)=(\d+)\s*$", description, re.MULTILINE))
    channels = int(said.get("channels", 1))
    planes = int(said.get("slices", 1)) * int(said.get("frames", 1)) * (1 if channels == samples else channels)
    return planes if len(said) > 1 or "images" not in said else int(said["images"])


def plane_pages(series: tifffile.TiffPageSeries, table: PageTable, name: str) -> list[Page] | None:
    """Return the page table's entries of a stack's planes; None where one page stands for many planes.

    Raises
    ------
    stackbound.errors.SourceError
        A plane has another size, pixel type or compression than the first.
    """
    by_offset = {page.offset: page for page in table.pages}
    pages = [by_offset.get(page.offset if page is not None else -1) for page in series.pages]
    found = [page for page in pages if page is not None]
    if len(found) < len(pages) or len(found) * prod(series.keyframe.shape) != prod(series.shape):
        return None
    for page in found:
        if page.signature != found[0].signature:
            raise SourceError(
                f"the page ({page.field(257)} x {page.field(256)}, {page.field(258)} bits) is unlike the first "
                f"({found[0].field(257)} x {found[0].field(256)}, {found[0].field(258)} bits) in size, pixel type or "
                "compression",
                where=f"{name}, page {page.number + 1}",
                remedy="Save pages of one kind as a file of their own.",
            )
    return found
