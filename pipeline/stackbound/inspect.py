"""Tell what a source or a store is, without decoding pixels."""

from __future__ import annotations

import json
import math
import os
from pathlib import Path
from typing import TYPE_CHECKING, Any

from .errors import IntegrityError
from .plugins import registry

if TYPE_CHECKING:
    from .stages import StackInfo

__all__ = ["inspect", "is_store"]

SCHEMA_VERSION = 1


def inspect(path: object) -> dict[str, Any]:
    """Return the facts about a source or a store.

    Parameters
    ----------
    path : path, list of paths or array
        A store, or anything that `compress` takes as a source.

    Returns
    -------
    dict
        Plain JSON values. `is` tells "store" or "source"; both have axes, shape, dtype, pixel_bytes, scale, units and
        channel_names. A store adds its promise, sizes, versions, root, and whether it can be read without plugins; a
        source its files and notes. Nothing is verified.

    Raises
    ------
    stackbound.errors.SourceError
        Nothing is there, or nothing that any loader recognises.
    stackbound.errors.IntegrityError
        A store whose metadata are damaged.
    """
    if isinstance(path, str | os.PathLike) and is_store(Path(path)):
        return _store_facts(Path(path))
    return _source_facts(path)


def is_store(path: Path) -> bool:
    """Return whether `path` holds a store of stackbound, whole or damaged."""
    if not path.is_dir():
        return False
    if (path / "stackbound" / "verification.jsonl").exists():
        return True
    try:
        return "stackbound" in json.loads((path / "zarr.json").read_bytes())["attributes"]
    except (OSError, ValueError, KeyError, TypeError):
        return False


def _store_facts(path: Path) -> dict[str, Any]:
    from .opened import open_store
    from .store import read_store

    stack = open_store(path)
    stored = read_store(path)
    size = sum(file.stat().st_size for file in path.rglob("*") if file.is_file())
    pixels = math.prod(stack.shape)
    written_by = stored.attributes["version"]
    configuration = stored.attributes["configuration"]
    try:
        root: str | None = stack.root
        notes = []
    except IntegrityError as error:
        root, notes = None, [f"{error} 'stackbound verify' says more."]
    foreign = [stage for stage in stored.attributes["plugins"] if stage["distribution"] != "stackbound"]
    return {
        "schema_version": SCHEMA_VERSION,
        "path": str(path),
        "is": "store",
        **_stack_facts(stack.info),
        "promise": stored.promise.words,
        "tolerance": configuration["tolerance"],
        "store_bytes": size,
        "ratio": pixels * stack.dtype.itemsize / size,
        "bits_per_pixel": 8 * size / pixels,
        "tile": list(stored.grid.tile),
        "region": list(stored.grid.region),
        "stages": {
            kind: configuration[kind]["name"] for kind in ("tile", "predict", "transform", "quantize", "encode")
        },
        "written_by": f"stackbound {written_by}",
        "format_version": stored.attributes["format_version"],
        "plugins": [f"{stage['stage']} of {stage['distribution']} {stage['version']}" for stage in foreign],
        # The decoder's vocabulary is closed and all of it is in the core, so this holds whatever plugins wrote.
        "readable_without_plugins": True,
        "root": root,
        "notes": notes,
    }


def _source_facts(source: object) -> dict[str, Any]:
    from .sources import open_source

    with open_source(source, registry=registry()) as opened:
        info = opened.info
        paths = [str(file.path) for file in opened.files]
        return {
            "schema_version": SCHEMA_VERSION,
            "path": _name(source),
            "is": "source",
            **_stack_facts(info),
            "files": len(paths),
            "file_bytes": sum(file.size for file in opened.files),
            "ome_xml_bytes": len(info.ome_xml) if info.ome_xml is not None else None,
            "headers": sorted(info.headers),
            "notes": list(info.notes),
        }


def _name(source: object) -> str:
    if isinstance(source, list | tuple):
        return f"{source[0]} and {len(source) - 1} more"
    return str(source) if isinstance(source, str | os.PathLike) else type(source).__name__


def _stack_facts(info: StackInfo) -> dict[str, Any]:
    return {
        "kind": info.kind,
        "axes": info.axes,
        "shape": list(info.shape),
        "dtype": info.dtype.name,
        "pixel_bytes": math.prod(info.shape) * info.dtype.itemsize,
        "scale": list(info.scale) or None,
        "units": list(info.units) or None,
        "channel_names": list(info.channel_names),
    }
