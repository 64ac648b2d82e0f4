"""Save TIFF: an ImageJ TIFF where the source was one, else pages with axes, scale and channel names."""

from __future__ import annotations

import re
from math import prod
from pathlib import Path
from typing import Any, ClassVar

from stackbound.errors import UsageError
from stackbound.plugins import hookimpl
from stackbound.stages import OpenSource, Save, StackInfo, Stage

from ._tiff_writing import CLASSIC, ome_words, tiff_letters, write_tiff
from ._writing import stored_shape

_IMAGEJ_AXES = {"default": "tzc", "czt": "tzc", "ctz": "ztc", "zct": "tcz", "ztc": "ctz", "tcz": "zct", "tzc": "czt"}
"""Stored order of the planes, slowest first, for each word behind ``order=`` in ImageJ's description."""


class TiffSave(Save):
    """Uncompressed TIFF; BigTIFF above 4 GB."""

    name = "tiff"
    suffixes: ClassVar[tuple[str, ...]] = (".tiff", ".tif", ".btf")

    def check(self, info: StackInfo) -> None:
        """Refuse pixel types that TIFF has no field for."""
        if info.dtype.kind not in "iuf" or info.dtype.itemsize > 8:
            raise UsageError(f"TIFF cannot hold pixels of type {info.dtype}", remedy="Restore to .npy instead.")

    def write(self, target: Path, source: OpenSource) -> None:
        """Write all pixels and the metadata."""
        self.check(source.info)
        info = source.info
        letters = tiff_letters(info)
        kind = info.attributes.get("kind")
        text = info.headers.get("description.txt")
        if text is not None and _stays_imagej(info, letters, text):
            big = prod(info.shape) * info.dtype.itemsize > CLASSIC
            write_tiff(
                target,
                source,
                letters,
                description=imagej_description(text, info, letters),
                metadata=None,
                single_page=big,
            )
            return
        description = text if kind in ("uniform", "generic") else None
        plain = description is not None and letters in ("yx", "zyx", "yxs", "zyxs", "syx", "zsyx")
        metadata: dict[str, Any] | None = None
        if not plain:
            metadata = {"axes": letters.upper(), **ome_words(info)}
        write_tiff(target, source, letters, description=description, metadata=metadata)


def _stays_imagej(info: StackInfo, letters: str, text: bytes) -> bool:
    """Return whether the stack goes back into an ImageJ TIFF, whose reader knows some orders of planes alone."""
    if info.attributes.get("kind") != "imagej" or not text.startswith(b"ImageJ="):
        return False
    order = re.search(rb"^order=(\w+)", text, re.MULTILINE)
    stored = _IMAGEJ_AXES.get(order[1].decode().lower() if order else "default", "tzc")
    return "".join(axis for axis in stored if axis in letters) == re.sub("[syx]", "", letters)


def imagej_description(text: bytes, info: StackInfo, letters: str) -> bytes:
    """Return ImageJ's description with the numbers of planes as they are now; unchanged where they are the same."""
    size = dict(zip(letters, stored_shape(info, letters), strict=True))
    now = {b"channels": size.get("c", 1), b"slices": size.get("z", 1), b"frames": size.get("t", 1)}
    said = {key: int(value) for key, value in re.findall(rb"^(channels|slices|frames|images)=(\d+)\s*$", text, re.M)}
    planes = prod(now.values())
    samples = size.get("s", 1)
    named = prod(said.get(key, 1) for key in now)
    if named in (planes, planes * samples) or (not set(said) & set(now) and said.get(b"images", 1) == planes):
        return text
    lines = [line for line in text.splitlines() if not re.match(rb"(channels|slices|frames|images)=", line)]
    counts = [b"images=%d" % planes, *(b"%s=%d" % (key, value) for key, value in now.items() if value > 1)]
    return b"\n".join([lines[0], *(counts if planes > 1 else []), *lines[1:]]) + b"\n"


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [TiffSave]
