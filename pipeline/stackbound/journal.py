"""The journal of an unfinished run: which regions are on disk, so that ``--resume`` can keep them.

Each line is the SHA-256 of a JSON text, a space, and that text. A line that a crash cut off, and all after it, do not
count.
"""

from __future__ import annotations

import contextlib
import json
import os
from collections.abc import Iterable
from pathlib import Path
from typing import IO, Any

from stackbound.errors import TargetError
from stackbound.hashes import sha256_bytes
from stackbound.log import Record, canonical


class Journal:
    """Header and one entry per finished region.

    Parameters
    ----------
    path : Path
        The file beside the unfinished store.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self._file: IO[bytes] | None = None

    def read(self) -> tuple[Record | None, dict[int, Record]]:
        """Return the header and the entries by region index, as far as the file is whole."""
        header: Record | None = None
        entries: dict[int, Record] = {}
        try:
            data = self.path.read_bytes()
        except FileNotFoundError:
            return None, {}
        for line in data.split(b"\n")[:-1]:
            entry = _entry(line)
            if entry is None:
                break
            if header is None:
                header = entry
            else:
                entries[entry["index"]] = entry
        return header, entries

    def start(self, header: Record, entries: dict[int, Record]) -> None:
        """Begin the file anew with what still counts, and keep it open for more.

        Raises
        ------
        stackbound.errors.TargetError
            The disk is full, or the file cannot be written; also raised by `add`.
        """
        try:
            self._file = self.path.open("wb")
        except OSError as error:
            raise self._failed(error) from error
        self._write(_line(record) for record in (header, *entries.values()))

    def add(self, entry: Record) -> None:
        """Append the entry of one region; it counts when this returns."""
        self._write([_line(entry)])

    def _write(self, lines: Iterable[bytes]) -> None:
        assert self._file is not None
        try:
            self._file.writelines(lines)
            self._file.flush()
            os.fsync(self._file.fileno())
        except OSError as error:
            raise self._failed(error) from error

    def _failed(self, error: OSError) -> TargetError:
        return TargetError(f"The journal cannot be written ({error.strerror}).", where=str(self.path))

    def close(self) -> None:
        """Close the file."""
        if self._file is not None:
            # Bytes that a full disk did not take were reported when they were written.
            with contextlib.suppress(OSError):
                self._file.close()
            self._file = None


def _line(record: Record) -> bytes:
    text = canonical(record)
    return sha256_bytes(text).encode("ascii") + b" " + text + b"\n"


def _entry(line: bytes) -> Record | None:
    digest, _, text = line.partition(b" ")
    if sha256_bytes(text).encode("ascii") != digest:
        return None
    entry: Any = json.loads(text)
    return entry if isinstance(entry, dict) else None
