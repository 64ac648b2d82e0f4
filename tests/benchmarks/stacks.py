"""The stacks of a folder: every sub-folder or file is one, read through stackbound's own loaders."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from noise import entropy
from numpy.typing import NDArray
from stackbound.geometry import Box
from stackbound.sources import open_source
from stackbound.stages import Index, OpenSource, StackInfo
from stackbound_synthetic import SyntheticStack, confocal, electron_micrograph, light_sheet


@dataclass(frozen=True)
class Stack:
    """A stack in memory, with what the loader told of it.

    `floor` gives, where the noise is known exactly, its entropy in bits per pixel at a tolerance.
    """

    name: str
    info: StackInfo
    pixels: NDArray[Any]
    floor: Callable[[int], float] | None = None


class InMemory(OpenSource):
    """A stack in memory as a source."""

    def __init__(self, stack: Stack) -> None:
        self.info = stack.info
        self._pixels = stack.pixels

    def read(self, start: Index, stop: Index) -> NDArray[Any]:
        """Return a copy of one box."""
        return self._pixels[Box(start, stop).slices()].copy()


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
    from pydicom.pixels.utils import pixel_array

    files = sorted(path.glob("*.dcm"), key=lambda p: _natural(p.name)) if path.is_dir() else [path]
    files.sort(key=lambda p: int(pydicom.dcmread(p, stop_before_pixels=True).get("InstanceNumber") or 0))
    planes = [pixel_array(p, raw=True) for p in files]
    pixels = np.ascontiguousarray(np.stack(planes) if len(planes) > 1 else planes[0])
    axes = "tczyx"[-pixels.ndim :]
    return Stack(path.name, StackInfo("DICOM", axes, pixels.shape, pixels.dtype), pixels)


def synthetic() -> list[Stack]:
    """Return stacks of invented scenes through known cameras, and one through a photomultiplier of few photons."""
    bright = light_sheet((8, 768, 768))
    dim = replace(light_sheet((8, 768, 768), brightness=0.15), name="invented dim light-sheet stack")
    made = (bright, dim, electron_micrograph((4, 1024, 1024)), confocal((16, 512, 512)))
    return [_of_camera(stack) for stack in made]


def _of_camera(stack: SyntheticStack) -> Stack:
    pixels = stack.pixels()
    electrons = np.stack([stack.electrons(c, z) for c, z in np.ndindex(*stack.shape[:2])])
    info = StackInfo("synthetic", "czyx", pixels.shape, pixels.dtype)
    return Stack(
        "made: " + stack.name.removeprefix("invented ").removesuffix(" stack"),
        info,
        pixels,
        entropy(stack.camera, electrons),
    )


def _natural(name: str) -> list[tuple[int, int | str]]:
    return [(0, int(part)) if part.isdigit() else (1, part.lower()) for part in re.split(r"(\d+)", name)]
