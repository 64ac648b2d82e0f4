"""The verification log: canonical records, their order, the tree root and the root of the store.

The log is a text of JSON lines. Each line is one record in the canonical form of RFC 8785 followed by a line feed; the
values are strings, whole numbers, true, false, null, lists and objects, never floating-point numbers, so that no number
formatter decides a hash. The order of the records:

1. ``header``: format, program, stages with their origins, configuration, promise, source, tile and region shapes;
2. ``region``: one per region, in index order;
3. ``totals``: sums over the regions, figures, ratio, tree root over the region records, source files, other files;
4. ``end``: SHA-256 of all bytes before it, the **root** of the store.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import rfc8785

from stackbound.errors import IntegrityError

FORMAT = "stackbound verification log"
FORMAT_VERSION = 1

Record = dict[str, Any]


def canonical(value: object) -> bytes:
    """Return the canonical JSON bytes of a value without floating-point numbers (RFC 8785, UTF-8)."""
    _refuse_floats(value)
    return rfc8785.dumps(value)  # type: ignore[arg-type]


def _refuse_floats(value: object) -> None:
    if isinstance(value, float):
        raise TypeError(f"the log holds whole numbers and strings only, got {value!r}")
    if isinstance(value, Mapping):
        for entry in value.values():
            _refuse_floats(entry)
    elif isinstance(value, list | tuple):
        for entry in value:
            _refuse_floats(entry)


def tree_root(leaves: Iterable[bytes]) -> str:
    """Return the Merkle tree hash of some entries, in hexadecimal (RFC 6962 section 2.1, SHA-256).

    The recursive definition splits at the largest power of two below the length; pairing level by level and carrying
    an odd last node up unchanged builds the same tree.
    """
    level = [hashlib.sha256(b"\x00" + leaf).digest() for leaf in leaves]
    if not level:
        return hashlib.sha256(b"").hexdigest()
    while len(level) > 1:
        carried = level[len(level) & ~1 :]
        level = [hashlib.sha256(b"\x01" + level[i] + level[i + 1]).digest() for i in range(0, len(level) - 1, 2)]
        level += carried
    return level[0].hex()


def regions_root(regions: Iterable[Mapping[str, Any]]) -> str:
    """Return the tree root over region records, each leaf the canonical bytes of one record."""
    return tree_root(canonical(region) for region in regions)


def write_log(header: Mapping[str, Any], regions: Sequence[Mapping[str, Any]], totals: Mapping[str, Any]) -> bytes:
    """Return the bytes of a whole log; the last line is made from those before it."""
    lines = [canonical(record) + b"\n" for record in (header, *regions, totals)]
    body = b"".join(lines)
    return body + end_line(body)


def end_line(body: bytes) -> bytes:
    """Return the last line for the bytes of all lines before it."""
    return canonical({"record": "end", "sha256": hashlib.sha256(body).hexdigest()}) + b"\n"


@dataclass(frozen=True)
class Log:
    """A log as it was read.

    Attributes
    ----------
    root : str or None
        The SHA-256 that stands for the whole log, recomputed; None where the last line does not confirm it.
    header, totals : mapping or None
        The first and the last record but one, where they could be read.
    regions : mapping of int to mapping
        Region records by index.
    faults : tuple of str
        What is wrong with the bytes, with line numbers; empty for an intact log.
    """

    root: str | None
    header: Record | None
    regions: dict[int, Record]
    totals: Record | None
    faults: tuple[str, ...]


def read_log(data: bytes) -> Log:
    """Read a log and say what is wrong with it; never raises for damaged bytes.

    The hash of the last line is checked before any record is interpreted. Records of a log that fails are still
    returned where they can be read, so that a check can go on and say more.
    """
    body, last = _split_last_line(data)
    expected = end_line(body)
    faults: list[str] = []
    if last != expected:
        faults.append(_end_fault(data, last))
    header: Record | None = None
    totals: Record | None = None
    regions: dict[int, Record] = {}
    for number, line in enumerate(body.split(b"\n")[:-1], start=1):
        record = _record(line)
        match record.get("record") if record is not None else None:
            case "header" if number == 1:
                header = record
            case "region" if record is not None and isinstance(record.get("index"), int):
                if record["index"] in regions:
                    faults.append(f"line {number} repeats the record of region {record['index']}")
                regions[record["index"]] = record
            case "totals":
                totals = record
            case _:
                faults.append(f"line {number} is not a record that belongs there")
    if header is None:
        faults.append("the header record (line 1) cannot be read")
    if totals is None:
        faults.append("the totals record (last line but one) is missing or cannot be read")
    root = hashlib.sha256(body).hexdigest() if last == expected else None
    return Log(root, header, regions, totals, tuple(faults))


def root_of(data: bytes) -> str:
    """Return the root of an intact log.

    Raises
    ------
    stackbound.errors.IntegrityError
        The last line is missing or is not that of the bytes before it.
    """
    body, last = _split_last_line(data)
    if last != end_line(body):
        raise IntegrityError(_end_fault(data, last))
    return hashlib.sha256(body).hexdigest()


def _split_last_line(data: bytes) -> tuple[bytes, bytes]:
    # The last line starts after the last line feed but one.
    start = data.rfind(b"\n", 0, max(len(data) - 1, 0)) + 1
    return data[:start], data[start:]


def _end_fault(data: bytes, last: bytes) -> str:
    if not data.endswith(b"\n") or b'"end"' not in last:
        return "the log is cut: its last line is missing or incomplete"
    return "the log was changed: its last line is not the hash of the lines before it"


def _record(line: bytes) -> Record | None:
    try:
        record = json.loads(line.decode("utf-8"))
    except ValueError:
        return None
    return record if isinstance(record, dict) else None
