"""The record beside a store: when, where, by whom and how it was made. Nothing of this is inside the store."""

from __future__ import annotations

import datetime
import getpass
import json
import platform
import socket
from importlib import metadata
from pathlib import Path

from stackbound.errors import TargetError
from stackbound.reports import CompressReport

_LIBRARIES = ("numpy", "numba", "scipy", "zarr", "tifffile", "pydicom")


class Clock:
    """The time at which something began."""

    def __init__(self) -> None:
        self.started = _now()


def _now() -> str:
    return datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds")


def write_run_file(path: Path, clock: Clock, report: CompressReport, command: str | None) -> None:
    """Write ``NAME.run.json``.

    Raises
    ------
    stackbound.errors.TargetError
        It cannot be written; the store itself is complete.
    """
    record = {
        "schema_version": 1,
        "store": report.store.name,
        "root": report.root,
        "started": clock.started,
        "finished": _now(),
        "host": socket.gethostname(),
        "operator": _operator(),
        "command": command,
        "workers": report.workers,
        "memory": report.memory,
        "python": platform.python_version(),
        "system": platform.platform(),
        "libraries": {name: version for name in _LIBRARIES if (version := _version(name))},
    }
    try:
        path.write_text(json.dumps(record, indent=2, ensure_ascii=False) + "\n", encoding="utf-8", newline="\n")
    except OSError as error:
        raise TargetError(
            f"The record of the run cannot be written ({error.strerror}).",
            where=str(path),
            left=f"The store {report.store} is complete and verified.",
        ) from error


def _operator() -> str | None:
    try:
        return getpass.getuser()
    except (OSError, KeyError, ImportError):  # no such user in this system, common in containers
        return None


def _version(name: str) -> str | None:
    try:
        return metadata.version(name)
    except metadata.PackageNotFoundError:
        return None
