"""Load Zarr: arrays of format 2 and 3, and the full-resolution level of OME-Zarr 0.4 and 0.5 images."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from stackbound.axes import Layout, apply_axes, describe_shape, guess_axes
from stackbound.errors import SourceError
from stackbound.plugins import hookimpl
from stackbound.stages import Load, OpenSource, SourceFile, StackInfo, Stage

from ._lazy import LazyPixels
from ._ome_zarr import OmeZarrImage, axis_letters, ome_attributes, read_image
from ._stored import StoredSource, as_path

if TYPE_CHECKING:
    import zarr

_MARKS = ("zarr.json", ".zarray", ".zgroup")
_CUT = "Copy or export it again."


class ZarrLoad(Load):
    """Zarr arrays and OME-Zarr images on disk."""

    name = "zarr"

    def recognises(self, source: object) -> bool:
        """Return whether this is a folder with Zarr metadata, or one that is called so."""
        path = as_path(source)
        return path is not None and path.is_dir() and (_is_node(path) or path.suffix.lower() == ".zarr")

    def open(self, source: object, *, axes: str | None = None) -> OpenSource:
        """Open an array, or the one image or array of a group."""
        path = as_path(source)
        assert path is not None
        if not _is_node(path):
            raise SourceError(
                "the folder is called .zarr but holds no Zarr metadata (zarr.json, .zarray or .zgroup)",
                where=str(path),
                remedy=_CUT,
            )
        node = _open_node(path)
        image, notes = None, []
        places = [path]
        while not _is_array(node):
            image = _image(node, path)
            if image is None:
                inner, path = _only_child(node, path)
                node = inner
                places.append(path)
                continue
            if image.levels > 1:
                notes.append(f"Only the full resolution is taken; {image.levels - 1} smaller levels are left out.")
            notes += _own_promise(node.attrs)
            inside = not Path(image.path).is_absolute() and ".." not in Path(image.path).parts
            if not inside or not _is_node(path / image.path):
                raise SourceError(f"the array {image.path!r} that the metadata name is not there", where=str(path))
            path = path / image.path
            places.append(path)
            node = _open_node(path)
        return _opened(node, image, axes, places, notes)


def _is_node(path: Path) -> bool:
    return any((path / mark).is_file() for mark in _MARKS)


def _is_array(node: Any) -> bool:
    return hasattr(node, "shape")


def _open_node(path: Path) -> Any:
    import zarr

    try:
        return zarr.open(str(path), mode="r")
    except Exception as error:  # the library raises what its parsers happen to raise
        raise SourceError(f"the Zarr metadata cannot be used: {error}", where=str(path), remedy=_CUT) from error


def _image(group: Any, path: Path) -> OmeZarrImage | None:
    attributes: Mapping[str, Any] = dict(group.attrs)
    said = ome_attributes(attributes)
    if "plate" in said or "well" in said:
        what = "plate" if "plate" in said else "well"
        raise SourceError(
            f"this is a {what} of many images",
            where=str(path),
            remedy="Give one of its fields, such as PLATE.ome.zarr/A/1/0.",
        )
    try:
        return read_image(attributes)
    except ValueError as error:
        raise SourceError(str(error), where=str(path), remedy=_CUT) from error


def _only_child(group: Any, path: Path) -> tuple[Any, Path]:
    """Return the one image or array of a group that is no image itself (bioformats2raw writes such groups)."""
    names = sorted(name for name in group if name != "OME")
    children = {name: group[name] for name in names[:1000]}
    images = [name for name, node in children.items() if not _is_array(node) and read_image(dict(node.attrs))]
    arrays = [name for name, node in children.items() if _is_array(node)]
    found = images or arrays
    if len(found) == 1:
        return children[found[0]], path / found[0]
    if not found:
        groups = [name for name in children if name not in arrays]
        what = f"no image and no array, only the groups {', '.join(groups[:8])}" if groups else "nothing"
        raise SourceError(f"the Zarr group holds {what}", where=str(path), remedy="Give the path of an image inside.")
    kind = "images" if images else "arrays"
    listed = ", ".join(_describe(name, children[name]) for name in found[:8])
    more = f" and {len(found) - 8} more" if len(found) > 8 else ""
    raise SourceError(
        f"the Zarr group holds {len(found)} {kind}: {listed}{more}",
        where=str(path),
        remedy=f"Give one of them, such as {path.name}/{found[0]}.",
    )


def _describe(name: str, node: Any) -> str:
    if not _is_array(node):
        return name
    return f"{name} ({describe_shape(node.shape)} {node.dtype})"


def _own_promise(attributes: Mapping[str, Any]) -> list[str]:
    """Return a remark where the source is one of our own stores."""
    own = attributes.get("stackbound")
    if not isinstance(own, Mapping) or not isinstance(own.get("promise"), Mapping):
        return []
    return ["The source is itself a store of stackbound: its errors and those of the new store add up."]


def _opened(
    array: zarr.Array[Any], image: OmeZarrImage | None, axes: str | None, places: list[Path], notes: list[str]
) -> StoredSource:
    name = str(places[-1])
    dtype = np.dtype(array.dtype)
    if dtype.kind not in "iuf" or dtype.itemsize > 8:
        raise SourceError(
            f"{dtype} pixels cannot be compressed within a tolerance",
            where=name,
            remedy="Convert them to whole numbers of 8 to 64 bits or floats of 16, 32 or 64 bits first.",
        )
    shape = tuple(array.shape)
    letters = _letters(array, image, name)
    if axes is not None:
        letters = apply_axes(axes, shape, name)
    elif "?" in letters or len(letters) != len(shape) or not {"y", "x"} <= set(letters):
        letters, told = guess_axes(shape, name)
        notes = [*notes, *told]
    try:
        layout = Layout(letters, shape)
    except SourceError as error:
        raise error.at(name) from None
    missing = _missing_chunks(array)
    if missing:
        notes = [*notes, f"{missing} chunks are not stored and are read as the fill value {array.fill_value}."]
    scale, units = (image.scale, image.units) if image else ({}, {})
    channels = dict(zip(layout.axes, layout.lengths, strict=True)).get("c", 0)
    named = image.channel_names if image else ()
    xml = places[0] / "OME" / "METADATA.ome.xml"
    pixels = LazyPixels(array, name)
    info = StackInfo(
        kind="OME-Zarr" if image else f"Zarr {array.metadata.zarr_format}",
        axes=layout.axes,
        shape=layout.lengths,
        dtype=dtype.newbyteorder("="),
        scale=tuple(scale.get(axis) for axis in layout.axes),
        units=tuple(units.get(axis) for axis in layout.axes),
        channel_names=named if len(named) == channels else (),
        ome_xml=xml.read_bytes() if xml.is_file() else None,
        headers=_headers(places),
        attributes={"format": "zarr", "axes": letters},
        notes=tuple(notes),
        read_overhead=pixels.overhead,
    )
    return StoredSource(info, layout, pixels, _files(places))


def _letters(array: zarr.Array[Any], image: OmeZarrImage | None, name: str) -> str:
    """Return the stored axes from the image's metadata, or from the array's own dimension names."""
    if image is not None:
        if len(image.letters) != array.ndim:
            raise SourceError(
                f"the metadata name {len(image.letters)} axes, but the array has {array.ndim}", where=name, remedy=_CUT
            )
        return image.letters
    names = getattr(array.metadata, "dimension_names", None) or array.attrs.get("_ARRAY_DIMENSIONS")
    if not isinstance(names, list | tuple) or any(not isinstance(one, str) for one in names):
        return ""
    return axis_letters(names)


def _missing_chunks(array: zarr.Array[Any]) -> int:
    """Return how many chunks were never written: Zarr reads them as the fill value without a word."""
    if getattr(array, "shards", None) is not None:
        return 0  # what a shard leaves out is said in its own index
    return max(0, int(array.nchunks) - int(array.nchunks_initialized))


def _headers(places: list[Path]) -> dict[str, bytes]:
    headers: dict[str, bytes] = {}
    for number, place in enumerate(places):
        for mark in (*_MARKS, ".zattrs"):
            if (place / mark).is_file():
                headers[f"level{number}-{mark.lstrip('.').removesuffix('.json')}.json"] = (place / mark).read_bytes()
    return headers


def _files(places: list[Path]) -> list[SourceFile]:
    """Return the metadata files on the way to the array, and all files of the array, in a steady order."""
    found = [place / mark for place in places for mark in (*_MARKS, ".zattrs") if (place / mark).is_file()]
    known = set(found)
    inside = sorted(path for path in places[-1].rglob("*") if path.is_file() and path not in known)
    looked = [(path, path.stat()) for path in (*found, *inside)]
    return [SourceFile(path, status.st_size, status.st_mtime_ns) for path, status in looked]


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [ZarrLoad]
