"""The end of a run: figures, totals, the metadata that wait for them, the log."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from fractions import Fraction
from pathlib import Path
from typing import TYPE_CHECKING, Any

from stackbound.compare import Errors
from stackbound.errors import IntegrityError, PluginError, StackboundError
from stackbound.hashes import sha256_bytes, sha256_file
from stackbound.log import Record, regions_root, write_log
from stackbound.numbers import decimal
from stackbound.store import LOG, Description, root_json
from stackbound.target import Target, sync_tree, write_file

if TYPE_CHECKING:
    from stackbound.regions import Result
    from stackbound.stages import StackInfo, Verify


def complete_store(
    target: Target,
    description: Description,
    figures: Sequence[Verify],
    header: Record,
    results: Sequence[Result],
    files: Mapping[str, bytes],
    source_files: list[dict[str, Any]],
) -> dict[str, Any]:
    """Write what is still missing in the unfinished store; return what the report says of it.

    Parameters
    ----------
    files : mapping of str to bytes
        Every file already written except the shards, by path.
    source_files : list of mapping
        Number, size and hash of the source's files.
    """
    regions = [result.record for result in results]
    found = sum((result.errors for result in results), Errors())
    root_metadata = root_json(description, regions_root(regions), (found.lowest or 0, found.highest or 0))
    write_file(target.partial / "zarr.json", root_metadata)
    totals = sum_up(regions)
    totals["figures"] = _combine(figures, results, description.info)
    totals["source_files"] = source_files
    totals["files"] = _file_records(target.partial, {**files, "zarr.json": root_metadata})
    data = write_log(header, regions, totals)
    write_file(target.partial / LOG, data)
    sync_tree(target.partial)
    tiles = sum(region["file_bytes"] for region in regions)
    return {
        "store_bytes": tiles + sum(file["bytes"] for file in totals["files"]) + len(data),
        "pixels": totals["pixels"],
        "pixels_changed": totals["pixels_changed"],
        "pixels_over": totals["pixels_over"],
        "largest_error": totals["max_error"],
        "figures": totals["figures"],
        "root": sha256_bytes(data[: data.rfind(b"\n", 0, -1) + 1]),
    }


def sum_up(regions: Sequence[Mapping[str, Any]]) -> Record:
    """Return the totals that follow from region records alone; a check of the log makes them again."""
    source_bytes = sum(region["source_bytes"] for region in regions)
    file_bytes = sum(region["file_bytes"] for region in regions)
    return {
        "record": "totals",
        "regions": len(regions),
        "regions_root": regions_root(regions),
        "pixels": sum(region["pixels"] for region in regions),
        "pixels_changed": sum(region["pixels_changed"] for region in regions),
        "pixels_over": sum(region["pixels_over"] for region in regions),
        "max_error": max((region["max_error"] for region in regions), key=Fraction),
        "max_error_share": max((region["max_error_share"] for region in regions), key=Fraction),
        "sum_error": decimal(sum(Fraction(region["sum_error"]) for region in regions)),
        "sum_squared_error": decimal(sum(Fraction(region["sum_squared_error"]) for region in regions)),
        "source_bytes": source_bytes,
        "file_bytes": file_bytes,
        "ratio": decimal(float(Fraction(source_bytes, file_bytes))),
    }


def _combine(figures: Sequence[Verify], results: Sequence[Result], info: StackInfo) -> dict[str, str]:
    combined: dict[str, str] = {}
    for number, figure in enumerate(figures):
        try:
            text = figure.combine([result.parts[number] for result in results], info)
        except StackboundError:
            raise
        except Exception as error:
            raise PluginError(f"The figure '{figure.name}' raised {type(error).__name__}: {error}.") from error
        if not isinstance(text, str):
            raise PluginError(f"The figure '{figure.name}' returned {text!r}, not a decimal string.")
        combined[figure.name] = text
    return combined


def _file_records(folder: Path, files: Mapping[str, bytes]) -> list[dict[str, Any]]:
    """Return path, size and hash of every file but shards and log, after a look at what the disk holds."""
    records = []
    for name, data in sorted(files.items()):
        digest = sha256_bytes(data)
        if sha256_file(folder / name) != digest:
            raise IntegrityError("The file does not hold what was written.", where=name)
        records.append({"path": name, "bytes": len(data), "sha256": digest})
    return records
