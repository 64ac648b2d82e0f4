"""Write a stack as an uncompressed TIFF: first all pages without pixels, then the pixels box by box."""

from __future__ import annotations

import base64
import json
import re
from collections.abc import Mapping
from math import prod
from pathlib import Path
from typing import Any, Literal

import numpy as np
import tifffile
from stackbound.axes import SAMPLES
from stackbound.stages import OpenSource, StackInfo

from ._units import in_micrometers
from ._writing import stored_letters, stored_shape, write_pixels

CLASSIC = 2**32 - 2**25
"""Largest classic TIFF, with room for tables and texts: its offsets have 32 bits (TIFF 6.0, section 2)."""


def needs_bigtiff(info: StackInfo) -> bool:
    """Return whether a stack is too large for a classic TIFF, or was a BigTIFF before."""
    return prod(info.shape) * info.dtype.itemsize > CLASSIC or bool(info.attributes.get("bigtiff", False))


def byte_order(info: StackInfo) -> Literal["<", ">"]:
    """Return the byte order of the source, "<" where it had none."""
    return ">" if info.attributes.get("byteorder") == "big" else "<"


def tiff_letters(info: StackInfo) -> str:
    """Return the stored axes: those of the source where a TIFF can hold them, with y, x (and samples) last."""
    letters = stored_letters(info)
    fits = re.fullmatch(r"[tcz]*(s?yx|yxs)", letters) is not None
    return letters if fits else info.axes


def write_tiff(
    target: Path,
    source: OpenSource,
    letters: str,
    *,
    description: bytes | None,
    metadata: dict[str, Any] | None,
    ome: bool = False,
    single_page: bool = False,
) -> None:
    """Write a file.

    Parameters
    ----------
    target : Path
        The new file.
    source : OpenSource
        The stack.
    letters : str
        Stored axes, slowest first, of "tczyxs".
    description : bytes or None
        Text of the first page.
    metadata : dict or None
        What tifffile writes of its own accord (shape and axes, or OME-XML).
    ome : bool
        Whether `metadata` becomes OME-XML.
    single_page : bool
        Only the first plane gets a page; the others follow it (what ImageJ does beyond 4 GB).
    """
    info = source.info
    texts = tag_texts(info)
    shape = stored_shape(info, letters)
    order = byte_order(info)
    page_axes = 3 if SAMPLES in letters else 2
    with tifffile.TiffWriter(
        target,
        bigtiff=needs_bigtiff(info) and not single_page,
        byteorder=order,
        ome=ome,
        shaped=metadata is not None and not ome,
    ) as writer:
        placed = writer.write(
            None,
            shape=shape[-page_axes:] if single_page else shape,
            dtype=info.dtype,
            description=description,
            metadata=metadata,
            software=texts.get(305, "stackbound"),
            datetime=_datetime(texts.get(306, "")),
            returnoffset=True,
            extratags=extra_tags(info),
            **_colour(info.attributes, letters, shape),
            **_resolution(info),
        )
    assert placed is not None
    write_pixels(target, placed[0], letters, info.dtype.newbyteorder(order), source)


def _colour(attributes: Mapping[str, Any], letters: str, shape: tuple[int, ...]) -> dict[str, Any]:
    """Return photometric interpretation and planar configuration as the source had them."""
    photometric = int(attributes.get("photometric", 2 if SAMPLES in letters else 1))
    if SAMPLES in letters:
        samples = shape[letters.index(SAMPLES)]
        planar = {"planarconfig": "contig" if letters.endswith(SAMPLES) else "separate"}
        extra = attributes.get("extrasamples")
        alpha = {"extrasamples": extra} if extra and photometric in (1, 2, 5) else {}
        if samples >= {2: 3, 5: 4, 6: 3, 8: 3}.get(photometric, samples + 1):
            return planar | alpha | {"photometric": photometric}
        # Samples without a meaning that tifffile writes.
        return planar | {"photometric": 2 if samples in (3, 4) else 1}
    if photometric == 3 and "colormap" in attributes:
        return {"photometric": 3, "colormap": np.array(attributes["colormap"], np.uint16)}
    return {"photometric": photometric if photometric in (0, 1) else 1}


def _resolution(info: StackInfo) -> dict[str, Any]:
    pairs = info.attributes.get("resolution")
    if pairs:
        return {
            "resolution": tuple(tuple(pair) for pair in pairs),
            "resolutionunit": int(info.attributes.get("resolution_unit", 2)),
        }
    known = dict(zip(info.axes, zip(info.scale, info.units, strict=True), strict=True)) if info.scale else {}
    sizes = [in_micrometers(known[axis][0] or 0, known[axis][1]) if axis in known else None for axis in "xy"]
    if all(sizes):
        return {"resolution": tuple(10_000 / size for size in sizes if size), "resolutionunit": 3}
    return {}


def _datetime(text: str) -> str | None:
    return text if re.fullmatch(r"\d{4}:\d\d:\d\d \d\d:\d\d:\d\d", text) else None


def extra_tags(info: StackInfo) -> list[tuple[int, int, int, Any, bool]]:
    """Return the fields of the source's first page that tifffile does not write by itself, byte for byte."""
    tags: list[tuple[int, int, int, Any, bool]] = []
    texts = tag_texts(info)
    tags += [(code, 2, 0, texts[code], True) for code in (315, 33432) if code in texts]  # artist, copyright
    for entry in _tag_entries(info):
        if "raw" in entry:
            raw = base64.b64decode(entry["raw"])
            tags.append((entry["code"], entry["type"], entry["count"], raw, True))
    if "imagej-metadata.bin" in info.headers:
        counts = tuple(json.loads(info.headers["imagej-metadata-counts.json"]))
        raw = info.headers["imagej-metadata.bin"]
        tags += [(50838, 4, len(counts), counts, True), (50839, 1, len(raw), raw, True)]
    return tags


def _tag_entries(info: StackInfo) -> list[dict[str, Any]]:
    entries: list[dict[str, Any]] = json.loads(info.headers.get("tiff-tags.json", b"[]"))
    return entries


def tag_texts(info: StackInfo) -> dict[int, str]:
    """Return the fields of the source's first page that are plain text, by code."""
    texts = {entry["code"]: entry.get("value") for entry in _tag_entries(info)}
    return {code: text for code, text in texts.items() if isinstance(text, str) and text.isascii() and text}


def ome_words(info: StackInfo) -> dict[str, Any]:
    """Return scale, units and channel names in the words of OME, which tifffile writes into either kind of metadata."""
    from ._units import unit_sign

    words: dict[str, Any] = {}
    for axis, scale, unit in zip(info.axes, info.scale or (), info.units or (), strict=False):
        sign = unit_sign(unit)
        if scale is None or axis == "c":
            continue
        key = "TimeIncrement" if axis == "t" else f"PhysicalSize{axis.upper()}"
        words[key] = scale
        # Without a unit OME-XML means micrometers (or seconds); "pixel" is its word for no unit at all.
        words[f"{key}Unit"] = sign or ("s" if axis == "t" else "pixel")
    if info.channel_names:
        words["Channel"] = {"Name": list(info.channel_names)}
    return words
