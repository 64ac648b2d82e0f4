"""One region as a file: the shard of the Zarr v3 sharding specification (``sharding_indexed``, index at the end).

A shard is the encoded tiles one after the other, then an index of two little-endian 64-bit numbers per tile (offset,
length), the last axis fastest, then the CRC-32C of the index. The tiles stand in the order of the index without gaps,
so one set of tiles has one file, byte for byte. A tile that lies wholly outside the stack has the empty entry
(2**64 - 1, 2**64 - 1).
"""

from __future__ import annotations

from collections.abc import Sequence

import google_crc32c
import numpy as np

from stackbound.errors import IntegrityError

EMPTY = 2**64 - 1
CHECKSUM_BYTES = 4


def index_size(tiles: int) -> int:
    """Return the number of bytes that the index of so many tiles takes, checksum included."""
    return 16 * tiles + CHECKSUM_BYTES


def shard_parts(payloads: Sequence[bytes | None]) -> list[bytes]:
    """Return the byte strings that make the shard when written one after the other.

    Parameters
    ----------
    payloads : sequence of bytes or None
        The encoded tiles of the whole region in C order; None for one outside the stack.
    """
    entries = np.full((len(payloads), 2), EMPTY, dtype="<u8")
    offset = 0
    for number, payload in enumerate(payloads):
        if payload is not None:
            entries[number] = offset, len(payload)
            offset += len(payload)
    index = entries.tobytes()
    checksum = np.array([google_crc32c.value(index)], dtype="<u4").tobytes()
    return [payload for payload in payloads if payload is not None] + [index, checksum]


def read_shard(data: bytes, tiles: int) -> list[memoryview | None]:
    """Return the encoded bytes of each tile of a shard, in C order; None for a tile without an entry.

    Parameters
    ----------
    data : bytes
        The whole file.
    tiles : int
        Number of tiles in a region.

    Raises
    ------
    stackbound.errors.IntegrityError
        The file is too short, its index does not match its checksum, or an entry points outside the file.
    """
    size = index_size(tiles)
    if len(data) < size:
        raise IntegrityError(f"the file has {len(data)} bytes; its index alone takes {size}")
    view = memoryview(data)
    index = view[-size:-CHECKSUM_BYTES]
    if google_crc32c.value(bytes(index)) != int.from_bytes(view[-CHECKSUM_BYTES:], "little"):
        raise IntegrityError("the index of the tiles does not match its checksum")
    payloads: list[memoryview | None] = []
    for number, (offset, length) in enumerate(np.frombuffer(index, dtype="<u8").reshape(-1, 2).tolist()):
        if (offset, length) == (EMPTY, EMPTY):
            payloads.append(None)
        elif offset + length > len(data) - size:
            raise IntegrityError(f"the index places tile {number} outside the file")
        else:
            payloads.append(view[offset : offset + length])
    return payloads
