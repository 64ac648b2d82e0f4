"""The parts of a check that need no pixels: the log, the files, the metadata."""

from __future__ import annotations

import math
import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from stackbound.errors import IntegrityError
from stackbound.finish import sum_up
from stackbound.geometry import Box, box_at, counts, position_of
from stackbound.hashes import sha256_file
from stackbound.log import FORMAT, FORMAT_VERSION, Log, Record, read_log
from stackbound.promise import Promise
from stackbound.reports import Problem
from stackbound.stages import Grid, StackInfo
from stackbound.store import ARRAY, LOG, read_store, shard_name

# What file managers and systems leave in folders without being asked.
_LITTER = {".ds_store", "thumbs.db", "ehthumbs.db", "desktop.ini", ".directory", ".localized"}
_LITTER_STARTS = ("._", ".nfs", ".fuse_hidden")

# So many regions may be missing before the shape itself is held to be damaged.
_MISSING = 100_000


@dataclass
class Findings:
    """What a check found so far."""

    checks: list[str] = field(default_factory=list)
    problems: list[Problem] = field(default_factory=list)
    notices: list[str] = field(default_factory=list)

    def problem(self, where: str, what: str) -> None:
        """Add a problem."""
        self.problems.append(Problem(what, where))


@dataclass
class Expected:
    """What should be in a store, as far as it is known.

    Attributes
    ----------
    root : str or None
        Root of the log, where its last line confirms it.
    info, grid, promise : StackInfo, Grid, Promise, each or None
        The stack.
    regions : mapping of int to mapping
        Region records by index.
    files : mapping of str to mapping or None
        Records of the other files by path; None where the log does not tell.
    intact : bool
        Whether the log can be relied on.
    """

    root: str | None = None
    info: StackInfo | None = None
    grid: Grid | None = None
    promise: Promise | None = None
    regions: dict[int, Record] = field(default_factory=dict)
    files: dict[str, Record] | None = None
    regions_root: str | None = None
    largest_error: str | None = None
    intact: bool = False

    @property
    def count(self) -> int:
        """Number of regions."""
        assert self.info is not None
        assert self.grid is not None
        return math.prod(counts(self.info.shape, self.grid.region))

    def place(self, index: int) -> tuple[Box, str]:
        """Return the box of a region and the path of its shard."""
        assert self.info is not None
        assert self.grid is not None
        position = position_of(index, self.info.shape, self.grid.region)
        return box_at(self.info.shape, self.grid.region, position), shard_name(position)


# --------------------------------------------------------------------------------------------------------------- log


def check_log(store: Path, findings: Findings, root: str | None) -> Expected:
    """Check the log and return what it says should be there."""
    try:
        data = (store / LOG).read_bytes()
    except OSError as error:
        missing = isinstance(error, FileNotFoundError)
        findings.problem(LOG, "the log is missing" if missing else f"the log cannot be read ({error.strerror})")
        return Expected()
    log = read_log(data)
    for fault in log.faults:
        findings.problem(LOG, fault)
    if root is not None:
        findings.checks.append("Root: that of the log against the one given.")
        if log.root != root:
            shown = log.root or "not known, as the log is damaged"
            findings.problem(LOG, f"the root of this store is {shown}, not {root}: this is not the store of that root")
    findings.checks.append("Log: its last line against all before it, every record, totals and tree root.")
    return _expected(log, findings)


def _expected(log: Log, findings: Findings) -> Expected:
    expected = Expected(root=log.root, regions=log.regions)
    try:
        if log.header is not None:
            _read_header(log.header, expected)
    except (KeyError, TypeError, ValueError, ArithmeticError):
        findings.problem(LOG, "the header record cannot be read")
    try:
        if log.totals is not None:
            expected.files = {str(entry["path"]): entry for entry in log.totals["files"]}
            expected.largest_error = str(log.totals["max_error"])
            expected.regions_root = str(log.totals["regions_root"])
        if expected.info is not None:
            _check_records(log, expected, findings)
    except (KeyError, TypeError, ValueError, ArithmeticError, OverflowError):
        findings.problem(LOG, "the records do not hold what they should")
    expected.intact = log.root is not None and not findings.problems
    return expected


def _read_header(header: Record, expected: Expected) -> None:
    if header["format"] != FORMAT or header["format_version"] != FORMAT_VERSION:
        raise ValueError("another format")
    source = header["source"]
    info = StackInfo(source["kind"], source["axes"], tuple(source["shape"]), np.dtype(source["data_type"]))
    grid = Grid(tuple(header["tile"]), tuple(header["region"]))
    lengths = {len(info.axes), len(info.shape), len(grid.tile), len(grid.region)}
    if len(lengths) != 1 or min(info.shape + grid.tile + grid.region) < 1:
        raise ValueError("shapes that do not fit")
    if not _believable(info, grid, len(expected.regions)):
        raise ValueError("more regions than records")
    expected.info, expected.grid = info, grid
    expected.promise = Promise.from_record(header["promise"], info.axes, info.dtype)


def _believable(info: StackInfo, grid: Grid, known: int) -> bool:
    """Return whether a stack could have the regions that are known of it: damaged shapes must not keep a check busy."""
    return math.prod(counts(info.shape, grid.region)) <= known + _MISSING


def _check_records(log: Log, expected: Expected, findings: Findings) -> None:
    """Check that the records are those of this stack, keep the promise, and add up to the totals."""
    assert expected.info is not None
    for index in sorted(set(log.regions) - set(range(expected.count))):
        findings.problem(LOG, f"there is a record of region {index}, which the stack does not have")
    for index in range(expected.count):
        record = log.regions.get(index)
        box, name = expected.place(index)
        if record is None:
            findings.problem(LOG, f"the record of region {index} {box} is missing")
            continue
        if (tuple(record["start"]), tuple(record["stop"]), record["file"]) != (box.start, box.stop, name):
            findings.problem(LOG, f"the record of region {index} is not that of {box}")
        if record["pixels_over"] != 0 or float(record["max_error_share"]) > 1:
            findings.problem(LOG, f"region {index} {box} has pixels outside their tolerance by its own record")
    if log.totals is not None and len(log.regions) == expected.count:
        again = sum_up([log.regions[index] for index in range(expected.count)])
        for key, value in again.items():
            if log.totals.get(key) != value:
                findings.problem(LOG, f"the records of the regions do not add up to the totals ({key})")


# ------------------------------------------------------------------------------------------------------------- files


def check_files(store: Path, expected: Expected, findings: Findings) -> None:
    """Check every file but the shards against its hash, and look for files that are not expected."""
    known = {LOG, *(record["file"] for record in expected.regions.values())}
    if expected.info is not None:
        known.update(expected.place(index)[1] for index in range(expected.count))
    for name, record in (expected.files or {}).items():
        known.add(name)
        fault = file_fault(store / name, record)
        if fault is not None:
            findings.problem(name, fault)
    for name in sorted(_listed(store)):
        if name in known:
            continue
        if _is_litter(name):
            findings.notices.append(f"{name}: left by an operating system; it is no part of the store.")
        elif expected.files is not None:
            findings.problem(name, "this file is not known to the log")
    if expected.files is not None:
        findings.checks.append(
            f"Files beside the shards: each of {len(expected.files)} against its hash; whether any is unknown."
        )


def file_fault(path: Path, record: Mapping[str, Any], size_key: str = "bytes", hash_key: str = "sha256") -> str | None:
    """Return what is wrong with a file, or None."""
    try:
        size = path.stat().st_size
        if not path.is_file():
            return "this is not a file"
        if size != record[size_key]:
            return f"the file has {size} bytes, not {record[size_key]}"
        if sha256_file(path) != record[hash_key]:
            return "the file was changed: its hash is not that of the log"
    except FileNotFoundError:
        return "the file is missing"
    except OSError as error:
        return f"the file cannot be read ({error.strerror})"
    except KeyError:
        return "the log holds no hash of this file"
    return None


def _listed(store: Path) -> Iterator[str]:
    for folder, folders, names in os.walk(store):
        # A link to a folder is not walked into: it is named like a file.
        links = [name for name in folders if (Path(folder) / name).is_symlink()]
        for name in (*names, *links):
            yield (Path(folder) / name).relative_to(store).as_posix()


def _is_litter(name: str) -> bool:
    last = name.rsplit("/", 1)[-1].lower()
    return last in _LITTER or last.startswith(_LITTER_STARTS)


# ---------------------------------------------------------------------------------------------------------- metadata


def check_metadata(store: Path, expected: Expected, findings: Findings) -> bool:
    """Check that metadata and log speak of the same; return whether zarr can be asked to read the array."""
    damaged = {problem.where for problem in findings.problems}
    try:
        stored = read_store(store)
    except IntegrityError as error:
        if not damaged & {"zarr.json", f"{ARRAY}/zarr.json"}:
            findings.problem(error.where or "zarr.json", error.what)
        return False
    if expected.info is None:
        if not _believable(stored.info, stored.grid, len(expected.regions)):
            findings.problem("zarr.json", "the metadata describe a stack that cannot be this one")
            return False
        # The log does not tell: what the metadata say is better than nothing.
        expected.info, expected.grid, expected.promise = stored.info, stored.grid, stored.promise
    ours = (expected.info.axes, expected.info.shape, expected.info.dtype, expected.grid, expected.promise)
    theirs = (stored.info.axes, stored.info.shape, stored.info.dtype, stored.grid, stored.promise)
    if ours != theirs:
        findings.problem("zarr.json", "metadata and log speak of different stacks or promises")
    elif expected.regions_root is not None and stored.attributes.get("regions_root") != expected.regions_root:
        findings.problem("zarr.json", "the tree root in the metadata is not that of the log")
    else:
        findings.checks.append("Metadata against the log: the same stack, the same promise, the same tree root.")
    return f"{ARRAY}/zarr.json" not in damaged
