"""The files of a store besides its tiles: an OME-Zarr 0.5 image with a `stackbound` group.

::

    zarr.json            group: OME multiscales; promise, configuration, source, tree root of the log's region records
    0/zarr.json          the array: sharded, each inner chunk one tile of the codec stackbound.tile
    0/c/...              one shard per region
    OME/                 group: METADATA.ome.xml, the source's own OME-XML, verbatim, where there was one
    stackbound/          group: verification.jsonl, source/ (headers, verbatim), plugins/ (texts of plugin files),
                         README.txt, DECODE.txt, decode.py

Every ``zarr.json`` is written by this module, not by zarr, so that its bytes do not depend on zarr's version; so are
the shards. Reading goes through zarr.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from importlib import resources
from typing import TYPE_CHECKING, Any

import numpy as np

from stackbound import log
from stackbound.errors import IntegrityError, SourceError
from stackbound.geometry import Index
from stackbound.promise import Promise
from stackbound.stages import Grid, StackInfo
from stackbound.storetext import readme
from stackbound.zarrcodec import NAME as CODEC_NAME

if TYPE_CHECKING:
    from pathlib import Path

FORMAT_VERSION = 1
ARRAY = "0"
LOG = "stackbound/verification.jsonl"
SOURCE_FOLDER = "stackbound/source"
PLUGIN_FOLDER = "stackbound/plugins"

AXIS_TYPES = {"t": "time", "c": "channel", "z": "space", "y": "space", "x": "space"}

# Well apart in pairs, and for most kinds of colour blindness the first two as well.
COLOURS = ("00FF00", "FF00FF", "00FFFF", "FFFF00", "FF0000", "0000FF")

# Names that Windows reserves or characters that it refuses; a store has to survive a copy to any file system.
_RESERVED = {"con", "prn", "aux", "nul", *(f"com{i}" for i in range(10)), *(f"lpt{i}" for i in range(10))}
_FORBIDDEN = set('<>:"/\\|?*') | {chr(code) for code in range(32)}
LONGEST_PATH = 79


@dataclass(frozen=True)
class Description:
    """What decides the metadata of a store.

    Attributes
    ----------
    version : str
        Version of stackbound.
    info : StackInfo
        The stack.
    grid : Grid
        Tile and region shapes.
    promise : Promise
        The tolerance in words and numbers.
    configuration : mapping
        Record of the whole configuration.
    plan : mapping
        What was chosen for the stack as a whole.
    plugins : list of mapping
        Stages of the run: "kind:name", distribution, version, hash of a plugin file.
    plugin_files : mapping of str to bytes
        Text of the plugin files that take part, by name.
    """

    version: str
    info: StackInfo
    grid: Grid
    promise: Promise
    configuration: Mapping[str, Any]
    plan: Mapping[str, Any]
    plugins: list[dict[str, Any]]
    plugin_files: Mapping[str, bytes]


def json_text(value: Any) -> bytes:
    """Return the bytes of one ``zarr.json``: two spaces of indentation, keys as given, shortest float forms, UTF-8."""
    return (json.dumps(value, indent=2, ensure_ascii=False, allow_nan=False) + "\n").encode("utf-8")


def shard_name(position: Index) -> str:
    """Return the path of a region's shard inside the store (Zarr v3 default chunk key encoding)."""
    return "/".join([ARRAY, "c", *map(str, position)])


# ---------------------------------------------------------------------------------------------------------- metadata


def array_json(store: Description) -> bytes:
    """Return the metadata of the array."""
    stages = {kind: store.configuration[kind] for kind in ("predict", "transform", "quantize", "encode")}
    configuration = {
        "format": 1,
        "tolerance": list(store.promise.stored),
        "stages": stages,
        "plan": dict(store.plan),
    }
    sharding = {
        "chunk_shape": list(store.grid.tile),
        "codecs": [{"name": CODEC_NAME, "configuration": configuration}],
        "index_codecs": [{"name": "bytes", "configuration": {"endian": "little"}}, {"name": "crc32c"}],
        "index_location": "end",
    }
    return json_text(
        {
            "zarr_format": 3,
            "node_type": "array",
            "shape": list(store.info.shape),
            "data_type": store.info.dtype.name,
            "chunk_grid": {"name": "regular", "configuration": {"chunk_shape": list(store.grid.region)}},
            "chunk_key_encoding": {"name": "default", "configuration": {"separator": "/"}},
            "fill_value": 0.0 if store.info.dtype.kind == "f" else 0,
            "codecs": [{"name": "sharding_indexed", "configuration": sharding}],
            "attributes": {},
            "dimension_names": list(store.info.axes),
            "storage_transformers": [],
        }
    )


def root_json(store: Description, regions_root: str, extent: tuple[float, float]) -> bytes:
    """Return the metadata of the image: OME multiscales and the promise.

    Parameters
    ----------
    regions_root : str
        Tree root over the region records of the log.
    extent : tuple of numbers
        Smallest and largest finite pixel of the source, for viewers to start with.
    """
    info = store.info
    units = info.units or (None,) * len(info.axes)
    scale = info.scale or (None,) * len(info.axes)
    axes = [_axis(name, unit) for name, unit in zip(info.axes, units, strict=True)]
    factors = [1.0 if factor is None else float(factor) for factor in scale]
    dataset = {"path": ARRAY, "coordinateTransformations": [{"type": "scale", "scale": factors}]}
    ome: dict[str, Any] = {"version": "0.5", "multiscales": [{"name": "stack", "axes": axes, "datasets": [dataset]}]}
    if info.channel_names:
        ome["omero"] = {"channels": _channels(info, extent)}
    attributes = {
        "ome": ome,
        "stackbound": {
            "format_version": FORMAT_VERSION,
            "version": store.version,
            "promise": store.promise.record(),
            "configuration": dict(store.configuration),
            "plugins": store.plugins,
            "source": source_record(info),
            "regions_root": regions_root,
        },
    }
    return group_json(attributes)


def group_json(attributes: Mapping[str, Any] | None = None) -> bytes:
    """Return the metadata of a group."""
    return json_text({"zarr_format": 3, "node_type": "group", "attributes": dict(attributes or {})})


def _axis(name: str, unit: str | None) -> dict[str, str]:
    axis = {"name": name, "type": AXIS_TYPES[name]}
    return axis if unit is None else {**axis, "unit": unit}


def _channels(info: StackInfo, extent: tuple[float, float]) -> list[dict[str, Any]]:
    """Return names for viewers; the specification wants a colour and a window beside each."""
    floats = info.dtype.kind == "f"
    limits = np.finfo(info.dtype) if floats else np.iinfo(info.dtype)
    low, high = extent if floats else (int(limits.min), int(limits.max))
    window = {"min": low, "max": high, "start": extent[0], "end": extent[1]}
    return [
        {"label": name, "color": COLOURS[number % len(COLOURS)], "active": True, "window": window}
        for number, name in enumerate(info.channel_names)
    ]


def source_record(info: StackInfo) -> dict[str, Any]:
    """Return what `restore` and readers need to know of the source beside its pixels."""
    scale = [None if factor is None else repr(float(factor)) for factor in info.scale]
    return {
        "kind": info.kind,
        "axes": info.axes,
        "shape": list(info.shape),
        "data_type": info.dtype.name,
        "scale": scale,
        "units": list(info.units),
        "channel_names": list(info.channel_names),
        "headers": sorted(info.headers),
        "attributes": dict(info.attributes),
    }


def log_header(store: Description) -> log.Record:
    """Return the first record of the log; an unfinished run is continued only where this is the same."""
    return {
        "record": "header",
        "format": log.FORMAT,
        "format_version": log.FORMAT_VERSION,
        "version": store.version,
        "plugins": store.plugins,
        "configuration": dict(store.configuration),
        "promise": store.promise.record(),
        "source": {
            "kind": store.info.kind,
            "axes": store.info.axes,
            "shape": list(store.info.shape),
            "data_type": store.info.dtype.name,
        },
        "tile": list(store.grid.tile),
        "region": list(store.grid.region),
        "plan": dict(store.plan),
        "hashes": HASHES,
    }


HASHES = (
    "SHA-256. Pixels: those of the region inside the stack, little-endian, in the order of the axes, the last fastest. "
    "Errors: decoded - original. Tree: RFC 6962, leaves are the region records without line feed."
)


# ------------------------------------------------------------------------------------------------------------- files


def side_files(store: Description) -> dict[str, bytes]:
    """Return every file of the store except the shards, the image's own ``zarr.json`` and the log, by path."""
    files = {
        f"{ARRAY}/zarr.json": array_json(store),
        "OME/zarr.json": group_json(),
        "stackbound/zarr.json": group_json(),
        "stackbound/README.txt": readme(store).encode("utf-8"),
    }
    for name in ("DECODE.txt", "decode.py"):
        text = resources.files("stackbound").joinpath(name).read_text(encoding="utf-8")
        files[f"stackbound/{name}"] = text.encode("utf-8")
    if store.info.ome_xml is not None:
        files["OME/METADATA.ome.xml"] = store.info.ome_xml
    for name, data in sorted(store.info.headers.items()):
        _check_name(SOURCE_FOLDER, name)
        files[f"{SOURCE_FOLDER}/{name}"] = data
    for name, data in sorted(store.plugin_files.items()):
        _check_name(PLUGIN_FOLDER, name)
        files[f"{PLUGIN_FOLDER}/{name}"] = data
    return files


def _check_name(folder: str, name: str) -> None:
    path = f"{folder}/{name}"
    stem = name.split(".", 1)[0].lower()
    if not name or stem in _RESERVED or set(name) & _FORBIDDEN or name[-1] in ". " or len(path) > LONGEST_PATH:
        raise SourceError(f"{name!r} cannot be a file name inside a store.", where=folder)


# ------------------------------------------------------------------------------------------------------------ reading


@dataclass(frozen=True)
class Stored:
    """A store's own description, read back.

    Attributes
    ----------
    info : StackInfo
        As the source had it (headers and OME-XML as bytes).
    grid : Grid
        Tile and region shapes.
    promise : Promise
        The tolerance.
    attributes : mapping
        The `stackbound` attributes of the image.
    """

    info: StackInfo
    grid: Grid
    promise: Promise
    attributes: Mapping[str, Any]


def read_store(folder: Path) -> Stored:
    """Read what a store says of itself.

    Raises
    ------
    stackbound.errors.IntegrityError
        A metadata file is missing or damaged.
    """
    try:
        image = json.loads((folder / "zarr.json").read_bytes())
        array = json.loads((folder / ARRAY / "zarr.json").read_bytes())
        attributes = image["attributes"]["stackbound"]
        version = attributes["format_version"]
        if version != FORMAT_VERSION:
            raise IntegrityError(
                f"The store has format {version}; this version of stackbound reads format {FORMAT_VERSION}.",
                remedy="Install a newer stackbound.",
            )
        info = _info(folder, attributes["source"])
        sharding = array["codecs"][0]["configuration"]
        grid = Grid(tuple(sharding["chunk_shape"]), tuple(array["chunk_grid"]["configuration"]["chunk_shape"]))
        promise = Promise.from_record(attributes["promise"], info.axes, info.dtype)
    except IntegrityError:
        raise
    except OSError as error:
        raise IntegrityError(f"A file of the store cannot be read ({error.strerror}).", where=error.filename) from error
    except (ValueError, KeyError, TypeError, IndexError, AttributeError) as error:
        raise IntegrityError("The metadata of the store are damaged.", where=str(folder)) from error
    return Stored(info, grid, promise, attributes)


def read_root(folder: Path) -> str:
    """Return the root of a store, from its log.

    Raises
    ------
    stackbound.errors.IntegrityError
        The log is missing, cut or changed.
    """
    try:
        return log.root_of((folder / LOG).read_bytes())
    except OSError as error:
        raise IntegrityError("The log of the store cannot be read.", where=LOG) from error
    except IntegrityError as error:
        raise error.at(LOG) from None


def _info(folder: Path, source: Mapping[str, Any]) -> StackInfo:
    xml = folder / "OME" / "METADATA.ome.xml"
    return StackInfo(
        kind=source["kind"],
        axes=source["axes"],
        shape=tuple(source["shape"]),
        dtype=np.dtype(source["data_type"]),
        scale=tuple(None if factor is None else float(factor) for factor in source["scale"]),
        units=tuple(source["units"]),
        channel_names=tuple(source["channel_names"]),
        ome_xml=xml.read_bytes() if xml.exists() else None,
        headers={name: (folder / SOURCE_FOLDER / name).read_bytes() for name in source["headers"]},
        attributes=source["attributes"],
    )
