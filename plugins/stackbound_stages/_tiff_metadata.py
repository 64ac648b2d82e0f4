"""What a TIFF says beside its pixels: scale, units, channel names, original headers, and what a saver needs."""

from __future__ import annotations

import base64
import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import tifffile

from . import _ome_xml
from ._units import unit_name

_LAYOUT_TAGS = {273, 279, 324, 325, 288, 289, 347}
"""Fields that only say where bytes lie or how they are coded; they mean nothing without the file."""

_OWN_TAGS = (
    {254, 255, 256, 257, 258, 259, 262, 266, 270, 273, 277, 278, 279, 280, 281, 282, 283, 284, 288, 289, 292, 293, 296}
    | {305, 306, 315, 317, 320, 322, 323, 324, 325, 330, 338, 339, 340, 341, 347, 400, 529, 530, 531, 532}
    | {32997, 32998, 33432, 34377, 34665, 34853, 40965, 50838, 50839}
)
"""Fields that a saver writes by itself or that point elsewhere in the file, and smallest and largest values, which need
not hold any more. All others come back byte for byte."""

_LONGEST_FIELD = 2**20

_PRINT_RESOLUTIONS = {0, 1, 72, 96, 100, 150, 200, 300, 400, 600, 1200}
"""Dots per inch that programs write when they know nothing of the image."""


_LOSSY = (6, 7, 33007, 34892, 34887)
"""JPEG in its four TIFF forms, and LERC."""


@dataclass
class Metadata:
    """The parts of a `StackInfo` that come from metadata; scale and units by axis."""

    scale: dict[str, float] = field(default_factory=dict)
    units: dict[str, str] = field(default_factory=dict)
    channel_names: tuple[str, ...] = ()
    ome_xml: bytes | None = None
    headers: dict[str, bytes] = field(default_factory=dict)
    attributes: dict[str, Any] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)


def read_metadata(tiff: tifffile.TiffFile, kind: str, stored: str) -> Metadata:
    """Return what a file says of its stack.

    Parameters
    ----------
    tiff : tifffile.TiffFile
        The open file.
    kind : str
        tifffile's name for the kind of the series ("ome", "imagej", ...).
    stored : str
        Letters of the stored axes.
    """
    page = tiff.pages.first
    found = Metadata()
    found.attributes = _attributes(tiff, page, kind, stored)
    found.headers = _headers(tiff, page)
    _resolution(page, found)
    if kind == "ome" and page.description:
        found.ome_xml = _raw_description(tiff, page)
        image = _ome_xml.read_image(found.ome_xml)
        found.scale, found.units, found.channel_names = image.scale, image.units, image.channel_names
    elif kind == "imagej":
        _imagej(page, tiff.imagej_metadata or {}, found)
    elif tiff.is_metaseries:
        _metaseries(tiff.metaseries_metadata or {}, found)
    elif kind == "shaped":
        _shaped(tiff.shaped_metadata or (), found)
    _remarks(page, found)
    return found


def _raw_description(tiff: tifffile.TiffFile, page: tifffile.TiffPage) -> bytes:
    """Return the description as it stands in the file: tifffile may have decoded it otherwise."""
    tag = page.tags[270]
    handle = tiff.filehandle
    handle.seek(tag.valueoffset)
    return bytes(handle.read(tag.valuebytecount)).rstrip(b"\0")


def _attributes(tiff: tifffile.TiffFile, page: tifffile.TiffPage, kind: str, stored: str) -> dict[str, Any]:
    found: dict[str, Any] = {
        "format": "tiff",
        "kind": kind,
        "axes": stored,
        "byteorder": "big" if tiff.byteorder == ">" else "little",
        "bigtiff": bool(tiff.is_bigtiff),
        "photometric": _read_photometric(page),
        "planar": int(page.planarconfig or 1) == 2,
        "samples": int(page.samplesperpixel),
    }
    if page.extrasamples:
        found["extrasamples"] = [int(value) for value in page.extrasamples]
    resolution = [page.tags[code].value for code in (282, 283) if code in page.tags]
    if len(resolution) == 2 and all(isinstance(pair, tuple) and len(pair) == 2 for pair in resolution):
        found["resolution"] = [[int(part) for part in pair] for pair in resolution]
        found["resolution_unit"] = int(page.tags[296].value) if 296 in page.tags else 2
    if page.colormap is not None and page.colormap.shape[-1] <= 256:
        found["colormap"] = page.colormap.astype(int).tolist()
    return found


def _read_photometric(page: tifffile.TiffPage) -> int:
    """Return the meaning of the pixels as they are read: the decoders of JPEG give RGB (2) for YCbCr (6)."""
    photometric = int(page.photometric)
    return 2 if photometric == 6 and int(page.compression) in _LOSSY else photometric


def _headers(tiff: tifffile.TiffFile, page: tifffile.TiffPage) -> dict[str, bytes]:
    entries = []
    for tag in page.tags:
        entry = {"code": tag.code, "name": tag.name, "type": int(tag.dtype), "count": tag.count}
        if tag.code not in _LAYOUT_TAGS:
            entry["value"] = _plain(tag.value)
        if tag.code not in _OWN_TAGS and tag.valuebytecount <= _LONGEST_FIELD:
            tiff.filehandle.seek(tag.valueoffset)
            entry["raw"] = base64.b64encode(tiff.filehandle.read(tag.valuebytecount)).decode()
        entries.append(entry)
    text = json.dumps(entries, ensure_ascii=False, indent=1)
    headers = {"tiff-tags.json": text.encode()}
    if 270 in page.tags:
        headers["description.txt"] = _raw_description(tiff, page)
    if 50839 in page.tags and 50838 in page.tags:  # ImageJ's own metadata and the lengths of its parts
        tag, counts = page.tags[50839], page.tags[50838].value
        tiff.filehandle.seek(tag.valueoffset)
        headers["imagej-metadata.bin"] = bytes(tiff.filehandle.read(tag.valuebytecount))
        headers["imagej-metadata-counts.json"] = json.dumps(counts if isinstance(counts, tuple) else [counts]).encode()
    return headers


def _plain(value: Any) -> Any:
    """Return a tag's value as JSON knows it."""
    if isinstance(value, bytes):
        return {"base64": base64.b64encode(value).decode()}
    if isinstance(value, Mapping):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, tuple | list):
        return [_plain(item) for item in value]
    if hasattr(value, "tolist"):
        return _plain(value.tolist())
    if isinstance(value, bool | int | str) or value is None:
        return int(value) if isinstance(value, int) and not isinstance(value, bool) else value
    return repr(value) if isinstance(value, float) else str(value)


def _rational(page: tifffile.TiffPage, code: int) -> float | None:
    value = page.tags[code].value if code in page.tags else None
    if isinstance(value, tuple) and len(value) == 2 and value[0] > 0 and value[1] > 0:
        return float(value[0]) / float(value[1])
    return None


def _resolution(page: tifffile.TiffPage, found: Metadata) -> None:
    """Take the resolution fields as pixel size where they are more than a printer's habit (TIFF 6.0: 2 inch, 3 cm)."""
    unit = int(page.tags[296].value) if 296 in page.tags else 2
    for axis, code in (("x", 282), ("y", 283)):
        density = _rational(page, code)
        if density is None or unit not in (2, 3) or (unit == 2 and density in _PRINT_RESOLUTIONS) or density == 1:
            continue
        found.scale[axis] = (10_000 if unit == 3 else 25_400) / density
        found.units[axis] = "micrometer"


def _imagej(page: tifffile.TiffPage, said: Mapping[str, Any], found: Metadata) -> None:
    """ImageJ writes pixels per unit into the resolution fields and the unit into its description."""
    unit = unit_name(str(said.get("unit", "")))
    found.scale, found.units = {}, {}
    if unit is None:
        # "pixel", or nothing: the fields hold no size.
        unit = None
    else:
        for axis, code in (("x", 282), ("y", 283)):
            density = _rational(page, code)
            if density:
                found.scale[axis] = 1 / density
                found.units[axis] = unit_name(str(said.get(f"{axis}unit", ""))) or unit
        if _number(said.get("spacing")):
            found.scale["z"] = abs(float(said["spacing"]))
            found.units["z"] = unit_name(str(said.get("zunit", ""))) or unit
    interval = _number(said.get("finterval"))
    if interval:
        found.scale["t"] = interval
        found.units["t"] = unit_name(str(said.get("tunit", ""))) or "second"


def _metaseries(said: Mapping[str, Any], found: Metadata) -> None:
    plane = said.get("PlaneInfo", {})
    unit = unit_name(str(plane.get("spatial-calibration-units", "")))
    if not unit or not plane.get("spatial-calibration-state", True):
        return
    for axis in "xy":
        value = _number(plane.get(f"spatial-calibration-{axis}"))
        if value:
            found.scale[axis], found.units[axis] = value, unit


def _shaped(said: tuple[Mapping[str, Any], ...], found: Metadata) -> None:
    """Metadata that tifffile (and our own saver) writes beside the shape, in the words of OME."""
    first = said[0] if said else {}
    for axis in "zyx":
        value, unit = _number(first.get(f"PhysicalSize{axis.upper()}")), first.get(f"PhysicalSize{axis.upper()}Unit")
        if value:
            found.scale[axis] = value
            found.units.pop(axis, None)
            name = unit_name(str(unit or "µm"))
            if name:
                found.units[axis] = name
    value = _number(first.get("TimeIncrement"))
    if value:
        found.scale["t"] = value
        found.units["t"] = unit_name(str(first.get("TimeIncrementUnit") or "s")) or "second"
    names = first.get("Channel", {})
    names = names.get("Name") if isinstance(names, Mapping) else None
    if isinstance(names, list | tuple) and all(isinstance(name, str) for name in names):
        found.channel_names = tuple(names)


def _number(value: Any) -> float | None:
    if isinstance(value, bool) or not isinstance(value, int | float) or not 0 < abs(value) < float("inf"):
        return None
    return abs(float(value))


def _remarks(page: tifffile.TiffPage, found: Metadata) -> None:
    if int(page.compression) in _LOSSY:
        name = tifffile.COMPRESSION(page.compression).name
        found.notes.append(
            f"The file is compressed with {name}, which as a rule is lossy: the promise counts from the pixels as they "
            "are read now."
        )
    if int(page.photometric) == 3:
        found.notes.append("The pixels are indices into a colour table: where it is no smooth ramp, use tolerance 0.")
    if page.dtype is not None and page.bitspersample not in (8, 16, 32, 64):
        found.notes.append(f"The pixels are stored with {page.bitspersample} bits and are read as {page.dtype.name}.")
