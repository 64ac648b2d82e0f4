"""One tile to bytes and back."""

from __future__ import annotations

import struct
import zlib
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.errors import TileError, UsageError
from stackbound.lattice import Tolerance
from stackbound.stages import Encode, Predict

_HEAD = struct.Struct("<BBqqI")


class TileCoder:
    """The stages and the stack-level plan with which tiles are encoded."""

    def __init__(self, predict: Predict, encode: Encode, plan: Mapping[str, Any] | None = None) -> None:
        self.predict = predict
        self.stage = encode
        self.plan: Mapping[str, Any] = dict(plan or {})

    def planned(self, samples: Sequence[NDArray[Any]], tolerances: Sequence[Tolerance]) -> TileCoder:
        """Return a coder whose stack-level choices fit these whole tiles."""
        return TileCoder(self.predict, self.stage, self.plan)

    def encode(self, pixels: NDArray[Any], tolerance: Tolerance) -> bytes:
        """Return the bytes of one tile, each pixel of which will decode to within `tolerance`."""
        if pixels.dtype.kind not in "iu":
            raise UsageError(f"pixels of type {pixels.dtype} cannot be coded")
        low, high = int(pixels.min()), int(pixels.max())
        bound = min(int(tolerance), high - low)  # type: ignore[arg-type]
        if pixels.dtype.itemsize == 8 and high - low >= 2**62:
            bound = 0
        wide = 2 * bound + 1
        index = ((pixels.astype(np.uint64) - np.uint64(low % 2**64)) + np.uint64(bound)) // np.uint64(wide)
        body = zlib.compress(np.ascontiguousarray(index).tobytes(), 1)
        return _HEAD.pack(1, 0, low, high, bound) + struct.pack("<I", zlib.crc32(body)) + body


def decode(
    payload: bytes | memoryview | NDArray[np.uint8], shape: tuple[int, ...], dtype: np.dtype[Any]
) -> NDArray[Any]:
    """Return the pixels of one tile.

    Raises
    ------
    stackbound.errors.TileError
        The bytes are damaged or belong to another tile.
    """
    data = bytes(payload)
    try:
        version, _, low, high, bound = _HEAD.unpack_from(data)
        (crc,) = struct.unpack_from("<I", data, _HEAD.size)
        body = data[_HEAD.size + 4 :]
        if version != 1 or zlib.crc32(body) != crc:
            raise TileError("the bytes of this tile are damaged")
        raw = zlib.decompress(body)
        index = np.frombuffer(raw, np.uint64).reshape(shape)
    except (struct.error, zlib.error, ValueError) as error:
        raise TileError("the bytes of this tile are damaged") from error
    value = np.minimum(index * np.uint64(2 * bound + 1), np.uint64(high - low)) + np.uint64(low % 2**64)
    return value.astype(dtype)


def describe(payload: bytes | memoryview | NDArray[np.uint8]) -> dict[str, Any]:
    """Return what the bytes of one tile say about themselves."""
    version, _, low, high, bound = _HEAD.unpack_from(bytes(payload[:64]))
    return {"version": version, "mode": "plain", "tolerance": bound, "minimum": low, "maximum": high}
