"""OME-XML: what it says of one image, and how it comes back valid in a file that was written anew."""

from __future__ import annotations

import uuid
import xml.etree.ElementTree as ET
from dataclasses import dataclass

from stackbound.stages import StackInfo

from ._units import unit_name

PIXEL_TYPES = {
    "int8": "int8",
    "int16": "int16",
    "int32": "int32",
    "uint8": "uint8",
    "uint16": "uint16",
    "uint32": "uint32",
    "float32": "float",
    "float64": "double",
}
"""Pixel types that OME-XML has a name for."""


@dataclass(frozen=True)
class OmeImage:
    """What OME-XML says of one image: distance and unit per axis where stated, and a name per channel."""

    scale: dict[str, float]
    units: dict[str, str]
    channel_names: tuple[str, ...]


def parse(xml: bytes | str) -> ET.Element:
    """Return the root element.

    Raises
    ------
    ValueError
        Not XML, or XML with entities of its own, which could blow up.
    """
    text = xml.decode("utf-8", "replace") if isinstance(xml, bytes) else xml
    if "<!DOCTYPE" in text or "<!ENTITY" in text:
        raise ValueError("the XML declares entities")
    try:
        return ET.fromstring(text.strip("\0 \r\n\t"))
    except ET.ParseError as error:
        raise ValueError(f"the XML is broken: {error}") from error


def tag(element: ET.Element) -> str:
    """Return an element's name without its namespace."""
    return element.tag.rsplit("}", 1)[-1]


def children(element: ET.Element, name: str) -> list[ET.Element]:
    """Return the child elements of a name, in any namespace."""
    return [child for child in element if tag(child) == name]


def read_image(xml: bytes | str, number: int = 0) -> OmeImage:
    """Return what is said of one image; nothing where it is not there."""
    images = children(parse(xml), "Image")
    pixels = children(images[number], "Pixels") if number < len(images) else []
    if not pixels:
        return OmeImage({}, {}, ())
    found = pixels[0]
    scale: dict[str, float] = {}
    units: dict[str, str] = {}
    keys = {axis: f"PhysicalSize{axis.upper()}" for axis in "zyx"} | {"t": "TimeIncrement"}
    for axis, key in keys.items():
        value = _positive(found.get(key))
        if value is None:
            continue
        scale[axis] = value
        # The schema's defaults where the unit is left out.
        unit = unit_name(found.get(f"{key}Unit", "s" if axis == "t" else "µm"))
        if unit:
            units[axis] = unit
    names: list[str] = []
    for channel in children(found, "Channel"):
        samples = int(channel.get("SamplesPerPixel") or 1)
        names += [channel.get("Name") or ""] * (1 if samples < 1 else samples)
    return OmeImage(scale, units, tuple(names) if any(names) else ())


def _positive(text: str | None) -> float | None:
    try:
        value = float(text or "")
    except ValueError:
        return None
    return value if 0 < value < float("inf") else None


def mend(xml: bytes, info: StackInfo, order: str, *, planes: int, big_endian: bool) -> bytes | None:
    """Return the original OME-XML fitted to a file that holds its planes in the given order from its first page on.

    Identifiers and file names of the old file go, a new UUID comes; all else stays. None where the XML speaks of
    another stack (of other lengths or another pixel type), or of several.

    Parameters
    ----------
    xml : bytes
        The original.
    info : StackInfo
        The stack that is written.
    order : str
        OME's DimensionOrder of the written planes ("XYCZT").
    planes : int
        Pages that are written.
    big_endian : bool
        Byte order of the written pixels.
    """
    try:
        root = parse(xml)
    except ValueError:
        return None
    images = children(root, "Image")
    pixels = [found for image in images for found in children(image, "Pixels")]
    if len(pixels) != 1 or not _fits(pixels[0], info):
        return None
    found = pixels[0]
    namespace = found.tag[: found.tag.rfind("}") + 1]
    for old in [child for child in found if tag(child) in ("TiffData", "BinData", "MetadataOnly")]:
        found.remove(old)
    data = ET.Element(f"{namespace}TiffData", {"IFD": "0", "PlaneCount": str(planes)})
    # The schema wants Channel elements first, then the data, then Plane elements.
    place = max((number + 1 for number, child in enumerate(found) if tag(child) == "Channel"), default=0)
    found.insert(place, data)
    found.set("DimensionOrder", order)
    found.set("BigEndian", "true" if big_endian else "false")
    root.set("UUID", f"urn:uuid:{uuid.uuid5(uuid.NAMESPACE_OID, xml.decode('utf-8', 'replace'))}")
    if namespace:
        ET.register_namespace("", namespace.strip("{}"))
    ET.register_namespace("xsi", "http://www.w3.org/2001/XMLSchema-instance")
    # OME-TIFF wants the comment in the description to be ASCII or UTF-8; numeric references are both.
    text: str = ET.tostring(root, encoding="unicode")
    return b'<?xml version="1.0" encoding="UTF-8"?>' + text.encode("ascii", "xmlcharrefreplace")


def _fits(pixels: ET.Element, info: StackInfo) -> bool:
    size = dict(zip(info.axes, info.shape, strict=True))
    lengths = all(pixels.get(f"Size{axis.upper()}") == str(size.get(axis, 1)) for axis in "tczyx")
    return lengths and pixels.get("Type", pixels.get("PixelType")) == PIXEL_TYPES.get(info.dtype.name)
