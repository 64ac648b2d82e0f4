"""The stacks of a folder: every sub-folder or file is one, read through stackbound's own loaders."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from stackbound.sources import open_source
from stackbound.stages import StackInfo


@dataclass(frozen=True)
class Stack:
    """A stack in memory, with what the loader told of it."""

    name: str
    info: StackInfo
    pixels: NDArray[Any]


def find(folder: Path) -> list[Path]:
    """Return the sources of a folder in natural order: its sub-folders and its image files."""
    suffixes = {".tif", ".tiff", ".npy", ".dcm"}
    found = [p for p in folder.iterdir() if p.is_dir() or p.suffix.lower() in suffixes]
    return sorted(found, key=lambda p: _natural(p.name))


def load(path: Path) -> Stack:
    """Read one source whole."""
    if path.suffix.lower() == ".dcm" or (path.is_dir() and any(path.glob("*.dcm"))):
        return _load_dicom(path)
    with open_source(_only_file(path)) as source:
        info = source.info
        return Stack(path.name, info, source.read((0,) * len(info.shape), info.shape))


def _only_file(path: Path) -> Path:
    """Return the one image of a folder that holds one: a folder is for planes."""
    if path.is_dir():
        files = [p for p in path.iterdir() if not p.name.startswith(".")]
        if len(files) == 1:
            return files[0]
    return path


def _load_dicom(path: Path) -> Stack:
    """Stack the raw stored values of a DICOM file or series, by instance number."""
    import pydicom
    from pydicom.pixels import pixel_array

    files = sorted(path.glob("*.dcm"), key=lambda p: _natural(p.name)) if path.is_dir() else [path]
    files.sort(key=lambda p: int(pydicom.dcmread(p, stop_before_pixels=True).get("InstanceNumber") or 0))
    planes = [pixel_array(p, raw=True) for p in files]
    pixels = np.ascontiguousarray(np.stack(planes) if len(planes) > 1 else planes[0])
    axes = "tczyx"[-pixels.ndim :]
    return Stack(path.name, StackInfo("DICOM", axes, pixels.shape, pixels.dtype), pixels)


def _natural(name: str) -> list[tuple[int, int | str]]:
    return [(0, int(part)) if part.isdigit() else (1, part.lower()) for part in re.split(r"(\d+)", name)]


def tiles(shape: tuple[int, ...], tile: tuple[int, ...]) -> Iterator[tuple[slice, ...]]:
    """Yield the boxes of a grid in C order; the last ones may reach beyond the stack."""
    counts = [-(-n // t) for n, t in zip(shape, tile, strict=True)]
    for position in np.ndindex(*counts):
        yield tuple(slice(p * t, (p + 1) * t) for p, t in zip(position, tile, strict=True))
