"""A folder or list of TIFF files as one stack: a plane per file, or, when the axes are named, a stack per file."""

from __future__ import annotations

import json
import re
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import replace
from math import prod
from pathlib import Path
from typing import Any

import numpy as np
import tifffile
from numpy.typing import NDArray
from stackbound.axes import DROPPED, Layout, check_axes
from stackbound.errors import SourceError, UsageError
from stackbound.sources import is_litter, natural_key
from stackbound.stages import Index, SourceFile, StackInfo

from ._plane_names import Arrangement, arrange
from ._stored import StoredSource, as_path, look_at
from ._tiff_ifd import CUT, Page, read_page_table
from ._tiff_metadata import Metadata, read_metadata
from ._tiff_pages import plane_offset
from ._tiff_planes import Plane, PlaneFiles, plane_texts
from ._tiff_series import check_dtype, watched

OpenFile = Callable[[Path, str | None], StoredSource]


def list_planes(folder: Path, suffixes: tuple[str, ...]) -> tuple[list[Path], list[Path]]:
    """Return a folder's TIFF files in natural order, and everything else in it but the operating system's litter."""
    entries = sorted((path for path in folder.iterdir() if not is_litter(path.name)), key=natural_key)
    planes = [path for path in entries if path.name.lower().endswith(suffixes) and path.is_file()]
    taken = set(planes)
    return planes, [path for path in entries if path not in taken]


def is_plane_list(source: object, suffixes: tuple[str, ...]) -> bool:
    """Return whether a source is a list of paths to TIFF files."""
    if not isinstance(source, list | tuple) or not source:
        return False
    return all(isinstance(one, str | Path) and str(one).lower().endswith(suffixes) for one in source)


def open_planes(source: object, suffixes: tuple[str, ...], axes: str | None, open_file: OpenFile) -> StoredSource:
    """Open a folder or a list of files as one stack."""
    folder = as_path(source)
    others: list[Path] = []
    if folder is not None:
        paths, others = list_planes(folder, suffixes)
    else:
        assert isinstance(source, list | tuple)
        paths = sorted((Path(one) for one in source), key=natural_key)
    if len(paths) == 1 or _is_ome_set(paths):
        opened = open_file(paths[0], axes)
    elif len(read_page_table(paths[0], str(paths[0])).pages) == 1:
        opened = _open_single_planes(paths, axes)
    else:
        opened = _open_stacks(paths, axes, open_file)
    listing = {"planes": [path.name for path in paths], "others": [path.name for path in others]}
    headers = {**opened.info.headers, "files.json": json.dumps(listing, ensure_ascii=False, indent=1).encode()}
    notes = opened.info.notes
    if others:
        kinds = Counter("folders" if path.is_dir() else path.suffix.lower() or "no suffix" for path in others)
        told = ", ".join(f"{kind}: {count}" for kind, count in sorted(kinds.items()))
        notes = (*notes, f"{len(others)} other entries of the folder are not part of the stack ({told}).")
    opened.info = replace(opened.info, headers=headers, notes=notes)
    return opened


def _is_ome_set(paths: Sequence[Path]) -> bool:
    """Return whether the OME-XML of the first file lists just these files as the places of one image's planes."""
    try:
        with tifffile.TiffFile(paths[0], _multifile=False) as tiff:
            text = tiff.ome_metadata or ""
    except (OSError, tifffile.TiffFileError):
        return False  # the reader of planes says what is wrong
    return {path.name for path in paths} == set(re.findall(r'FileName="([^"]+)"', text))


# ------------------------------------------------------------------------------------------------- a plane per file


def _open_single_planes(paths: Sequence[Path], axes: str | None) -> StoredSource:
    shape, dtype, letters, metadata = _first_plane(paths[0])
    arrangement, inner = _arranged(paths, axes, letters, shape)
    reference = read_page_table(paths[0], str(paths[0])).pages[0]
    planes: list[Plane] = []
    files: list[SourceFile] = []
    for number in arrangement.order:
        path = paths[number]
        name = str(path)
        files.append(look_at(path))
        table = read_page_table(path, name)
        page = table.pages[0]
        if len(table.pages) > 1 or page.pixel_signature != reference.pixel_signature:
            raise SourceError(
                f"the file ({len(table.pages)} pages, {_words(page)}) is unlike the first ({_words(reference)})",
                where=name,
                remedy="Keep only the planes of one stack in the folder, or give the files one by one.",
            )
        offset = plane_offset(page, page.grid(), table.size, name)
        planes.append(Plane(path, page, offset, dtype.newbyteorder(table.byteorder)))  # type: ignore[arg-type]
    layout = Layout(arrangement.axes + inner, arrangement.shape + shape)
    pixels = PlaneFiles(planes, arrangement.shape, shape)
    metadata.notes.insert(0, arrangement.note)
    texts = plane_texts((plane.path, plane.page) for plane in planes)
    if texts is not None:
        metadata.headers["plane-descriptions.jsonl"] = texts
    metadata.attributes |= {"axes": layout.stored, "kind": "planes"}
    return StoredSource(_info(layout, dtype, metadata, pixels.overhead), layout, pixels, files)


def _words(page: Page) -> str:
    return f"{page.field(257)} x {page.field(256)}, {page.field(277)} samples of {page.field(258)} bits"


def _first_plane(path: Path) -> tuple[Index, np.dtype[Any], str, Metadata]:
    """Return shape, pixel type, axes and metadata of the one plane of a file."""
    name = str(path)
    try:
        with watched(name), tifffile.TiffFile(path, _multifile=False) as tiff:
            page = tiff.pages.first
            check_dtype(page.dtype, page, name)
            # Not through the series: it would go looking for the other files of the set.
            kind = "ome" if tiff.is_ome else "imagej" if tiff.is_imagej else "uniform"
            metadata = read_metadata(tiff, kind, "")
            letters = "".join(letter.lower() if letter in "YXS" else "?" for letter in page.axes)
            return tuple(page.shape), np.dtype(str(page.dtype)), letters, metadata
    except (OSError, tifffile.TiffFileError) as error:
        raise SourceError(f"the file cannot be read as TIFF: {error}", where=name, remedy=CUT) from error


def _arranged(paths: Sequence[Path], axes: str | None, letters: str, shape: Index) -> tuple[Arrangement, str]:
    """Return how the files are arranged and the letters of the axes within one."""
    where = str(paths[0].parent)
    names = [path.stem for path in paths]
    inner = letters
    wanted = None
    if axes is not None:
        said = check_axes(axes)
        count = sum(length > 1 or letter in "yx" for letter, length in zip(letters, shape, strict=True))
        wanted = said[: len(said) - count]
        if not wanted:
            raise UsageError(
                f"--axes {said} names {len(said)} axes; a folder of planes has one more than its planes ({count})",
                where=where,
                remedy="Put the axis of the files first, for example --axes zyx.",
            )
        inner = _inner_letters(said[len(said) - count :], letters, shape)
    if "?" in inner or not {"y", "x"} <= set(inner):
        raise SourceError("the axes of a plane are not y and x", where=where, remedy="Name them with --axes.")
    try:
        return arrange(names, wanted), inner
    except SourceError as error:
        raise error.at(where) from None


def _inner_letters(said: str, letters: str, shape: Index) -> str:
    """Return the letters of one plane's axes from the end of the user's word."""
    rest = iter(said)
    return "".join(
        next(rest) if length > 1 or letter in "yx" else DROPPED for letter, length in zip(letters, shape, strict=True)
    )


def _info(layout: Layout, dtype: np.dtype[Any], metadata: Metadata, overhead: int) -> StackInfo:
    channels = dict(zip(layout.axes, layout.lengths, strict=True)).get("c", 0)
    return StackInfo(
        kind="TIFF planes",
        axes=layout.axes,
        shape=layout.lengths,
        dtype=dtype,
        scale=tuple(metadata.scale.get(axis) for axis in layout.axes),
        units=tuple(metadata.units.get(axis) for axis in layout.axes),
        channel_names=metadata.channel_names if len(metadata.channel_names) == channels else (),
        ome_xml=metadata.ome_xml,
        headers=metadata.headers,
        attributes=metadata.attributes,
        notes=tuple(metadata.notes),
        read_overhead=overhead,
    )


# ------------------------------------------------------------------------------------------------- a stack per file


class _StackFiles:
    """Stacks in files of their own along one more axis, one file open at a time."""

    def __init__(self, paths: Sequence[Path], axes: str, open_file: OpenFile) -> None:
        self._paths, self._axes, self._open_file = paths, axes, open_file
        self._open: tuple[int, StoredSource] | None = None

    @property
    def overhead(self) -> int:
        """Bytes that `fill` may hold beside `out`."""
        one = self.opened(0)
        return one.pixels.overhead + prod(one.info.shape[-2:]) * one.info.dtype.itemsize

    def opened(self, number: int) -> StoredSource:
        """Return one file's stack."""
        if self._open is None or self._open[0] != number:
            self.close()
            self._open = number, self._open_file(self._paths[number], self._axes)
        return self._open[1]

    def fill(self, start: Index, stop: Index, out: NDArray[Any]) -> None:
        """Read a box into `out`, plane by plane."""
        for index in np.ndindex(*out.shape[:-2]):
            low = tuple(first + step for first, step in zip(start, index, strict=False))
            high = tuple(first + 1 for first in low)
            box = self.opened(low[0]).read((*low[1:], *start[-2:]), (*high[1:], *stop[-2:]))
            out[index] = box.reshape(out.shape[-2:])

    def close(self) -> None:
        """Close the open file."""
        if self._open is not None:
            self._open[1].close()
            self._open = None


def _open_stacks(paths: Sequence[Path], axes: str | None, open_file: OpenFile) -> StoredSource:
    where = str(paths[0].parent)
    if axes is None:
        raise SourceError(
            f"the {len(paths)} files hold several planes each, so they are several stacks",
            where=where,
            remedy="Give them one by one, or say with --axes how they follow one another, the axis of the files first "
            "(--axes tzyx).",
        )
    said = check_axes(axes)
    files = _StackFiles(paths, said[1:], open_file)
    first = files.opened(0).info
    if said[0] in first.axes:
        raise UsageError(f"--axes {said} names {said[0]} twice", where=where)
    for number in range(len(paths)):
        info = files.opened(number).info
        if (info.axes, info.shape, info.dtype) != (first.axes, first.shape, first.dtype):
            raise SourceError(
                f"the stack ({info.axes} {info.shape} {info.dtype}) is unlike the first "
                f"({first.axes} {first.shape} {first.dtype})",
                where=str(paths[number]),
                remedy="Keep only stacks of one kind in the folder, or give them one by one.",
            )
    layout = Layout(said[0] + first.axes, (len(paths), *first.shape))
    by_axis = {axis: (first.scale[place], first.units[place]) for place, axis in enumerate(first.axes)}
    info = replace(
        first,
        kind="TIFF stacks",
        axes=layout.axes,
        shape=layout.lengths,
        scale=tuple(by_axis.get(axis, (None, None))[0] for axis in layout.axes),
        units=tuple(by_axis.get(axis, (None, None))[1] for axis in layout.axes),
        channel_names=first.channel_names if said[0] != "c" else (),
        ome_xml=None,
        read_overhead=files.overhead,
        attributes={**first.attributes, "axes": layout.stored, "kind": "planes"},
        notes=(
            f"{len(paths)} files in natural order of their names are taken as {said[0]} (as --axes says).",
            *first.notes,
        ),
    )
    return StoredSource(info, layout, files, [look_at(path) for path in paths])
