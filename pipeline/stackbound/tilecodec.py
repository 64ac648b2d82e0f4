"""One tile to bytes and back.

A payload is a format version, a checksum of everything after it, a checksum of the decoded pixels, and the numbers and
streams from which they are decoded. ``DECODE.txt`` beside this file describes every byte.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound import exceptions, lattice, tilecore
from stackbound.byteio import Reader, Writer, damaged
from stackbound.checksum import crc32c
from stackbound.errors import TileError, UsageError
from stackbound.floatlattice import bit_lattice, float_lattice, read_float_lattice
from stackbound.integerlattice import integer_lattice, read_integer_lattice
from stackbound.lattice import Lattice, LatticeTile, Tolerance
from stackbound.prediction import NoPrediction, Prediction
from stackbound.stages import Encode, Predict

VERSION = 1
HEAD = 9
"""Bytes of the version and the two checksums."""

LATTICE_BYTES = 24
"""So many bytes after the checksums go into the beginning of the pixels' checksum: the lattice is among them."""


class TileCoder:
    """The stages and the stack-level plan with which tiles are encoded.

    Frozen in use: safe to share between threads and to pickle.

    Parameters
    ----------
    predict : Predict
    encode : Encode
    plan : mapping, optional
        What `planned` chose for the stack; without it every tile plans for itself, which takes longer.
    """

    def __init__(self, predict: Predict, encode: Encode, plan: Mapping[str, Any] | None = None) -> None:
        self.predict = predict
        self.stage = encode
        self.plan: Mapping[str, Any] = dict(plan or {})

    def planned(self, samples: Sequence[NDArray[Any]], tolerances: Sequence[Tolerance]) -> TileCoder:
        """Return a coder whose stack-level choices fit some whole tiles.

        Parameters
        ----------
        samples : sequence of ndarray
            Whole tiles.
        tolerances : sequence of tolerances
            One for each.
        """
        tiles = []
        for pixels, tolerance in zip(samples, tolerances, strict=True):
            whole, limit = _prepared(pixels, tolerance)
            kept = lattice.crop(whole)
            tile = _lattice(kept, lattice.cropped_tolerance(limit, kept.shape)).split(kept)[0]
            tiles += [tile] if tile.span else []
        if not tiles:
            return TileCoder(self.predict, self.stage, self.plan)
        return TileCoder(self.predict, self.stage, self.predict.plan(tiles, self._size))

    def encode(self, pixels: NDArray[Any], tolerance: Tolerance) -> bytes:
        """Return the bytes of one tile, every pixel of which decodes to within the tolerance.

        Parameters
        ----------
        pixels : ndarray
            One to five axes, at least one pixel; integers of 8 to 64 bits or floats of 16 to 64, in native byte order.
        tolerance : int, float or ndarray
            In stored pixel values; an array broadcasts over the tile.

        Raises
        ------
        stackbound.errors.UsageError
            A dtype that cannot be coded, or a tolerance below zero or not a number.
        stackbound.errors.PluginError
            A stage broke its contract.
        """
        whole, limit = _prepared(pixels, tolerance)
        kept = lattice.crop(whole)
        limit = lattice.cropped_tolerance(limit, kept.shape)
        writer = Writer()
        for length, left in zip(whole.shape, kept.shape, strict=True):
            writer.number(length - left)
        if kept.shape != whole.shape:
            writer.data += whole[-1, -1, -1:].astype(whole.dtype.newbyteorder("<")).tobytes()
        start = len(writer.data)
        mapped = _lattice(kept, limit)
        decoded = self._write(writer, mapped, kept)
        mask = mapped.exceptions(kept, decoded)
        if mask is not None and exceptions.too_many(kept, mask):
            del writer.data[start:]
            mask, mapped = None, bit_lattice(kept, float(np.min(limit)))
            decoded = self._write(writer, mapped, kept)
        exceptions.write(writer, kept, mask)
        if mask is not None:
            decoded[mask] = kept[mask]
        return _sealed(bytes(writer.data), _uncropped(decoded, whole).reshape(pixels.shape))

    def _write(self, writer: Writer, mapped: Lattice, pixels: NDArray[Any]) -> NDArray[Any]:
        """Write a lattice and the arrays on it, and return the pixels that they decode to."""
        mapped.write(writer)
        values = []
        for tile in mapped.split(pixels):
            # One value needs no stage.
            prediction = self.predict.predict(tile, self.plan, self._size) if tile.span else NoPrediction()
            parts = tilecore.encode(tile, prediction, self.stage)
            writer.data += parts.head + parts.indices + parts.residuals
            values.append(parts.values)
        return mapped.pixels(values, pixels.dtype)

    def _size(self, tile: LatticeTile, prediction: Prediction) -> int:
        """Return how many bytes a tile takes under a prediction."""
        return len(tilecore.encode(tile, prediction, self.stage))


def decode(
    payload: bytes | memoryview | NDArray[np.uint8], shape: tuple[int, ...], dtype: np.dtype[Any]
) -> NDArray[Any]:
    """Return the pixels of one tile.

    Parameters
    ----------
    payload : bytes-like
        What `TileCoder.encode` returned.
    shape : tuple of int
    dtype : numpy.dtype
        Native byte order.

    Returns
    -------
    ndarray
        C-contiguous.

    Raises
    ------
    stackbound.errors.TileError
        The bytes are damaged, belong to another tile, or would decode to other pixels than the encoder's.
    """
    view = _bytes(payload)
    body = _opened(view)
    pixels = decode_body(Reader(body), shape, np.dtype(dtype))
    if _pixel_checksum(pixels, body) != int.from_bytes(view[5:9], "little"):
        raise TileError(
            "this tile decodes to other pixels than those that were verified",
            remedy="The program, a library or the machine computes differently; the stored bytes are as written.",
        )
    return pixels


def decode_body(reader: Reader, shape: tuple[int, ...], dtype: np.dtype[Any]) -> NDArray[Any]:
    """Return the pixels from what follows the checksums."""
    whole = lattice.three_axes_shape(shape)
    cut = [reader.number(length - 1) for length in whole]
    last = np.zeros(1, dtype)
    if any(cut):
        last = np.frombuffer(reader.take(dtype.itemsize), dtype.newbyteorder("<")).astype(dtype)
    kept = (whole[0] - cut[0], whole[1] - cut[1], whole[2] - cut[2])
    mapped = _read_lattice(reader, kept, dtype)
    values = [tilecore.decode(reader, kept, part) for part in mapped.parts()]
    pixels = mapped.pixels(values, dtype)
    exceptions.read(reader, pixels)
    reader.end()
    if any(cut):
        out = np.full(whole, last, dtype)
        out[: kept[0], : kept[1], : kept[2]] = pixels
        pixels = out
    return pixels.reshape(shape)


def _prepared(pixels: NDArray[Any], tolerance: Tolerance) -> tuple[NDArray[Any], float | NDArray[np.float64]]:
    """Return pixels and tolerance in the three axes of coding."""
    if pixels.dtype.kind not in "iuf" or pixels.dtype.itemsize > 8 or not pixels.dtype.isnative:
        raise UsageError(
            f"pixels of type {pixels.dtype} cannot be coded",
            remedy="Convert them to integers of 8 to 64 bits or floats of 16 to 64 bits.",
        )
    return lattice.three_axes(pixels), lattice.checked(tolerance, pixels.shape)


def _lattice(pixels: NDArray[Any], tolerance: float | NDArray[np.float64]) -> Lattice:
    return float_lattice(pixels, tolerance) if pixels.dtype.kind == "f" else integer_lattice(pixels, tolerance)


def _read_lattice(reader: Reader, shape: tuple[int, int, int], dtype: np.dtype[Any]) -> Lattice:
    if dtype.kind == "f":
        return read_float_lattice(reader, shape, dtype)
    found = read_integer_lattice(reader, shape)
    info = np.iinfo(dtype)
    if found.low < info.min or found.low + found.width > info.max:
        raise damaged(f"its values do not fit {dtype}")
    return found


def _uncropped(pixels: NDArray[Any], whole: NDArray[Any]) -> NDArray[Any]:
    if pixels.shape == whole.shape:
        return pixels
    out = np.full(whole.shape, whole[-1, -1, -1], pixels.dtype)
    out[tuple(slice(length) for length in pixels.shape)] = pixels
    return out


def describe(
    payload: bytes | memoryview | NDArray[np.uint8], shape: tuple[int, ...], dtype: np.dtype[Any]
) -> dict[str, Any]:
    """Return what the bytes of one tile say about themselves, without decoding its streams.

    Parameters
    ----------
    payload : bytes-like
    shape : tuple of int
    dtype : numpy.dtype
        As for `decode`.

    Returns
    -------
    dict
        ``version``, ``bytes``, ``tolerance`` (in stored values), the lattice's numbers, ``mode`` ("constant", "none",
        "transform"), and for transforms ``block``.

    Raises
    ------
    stackbound.errors.TileError
        The bytes are damaged.
    """
    view = _bytes(payload)
    reader = Reader(_opened(view))
    whole = lattice.three_axes_shape(shape)
    cut = [reader.number(length - 1) for length in whole]
    reader.take(np.dtype(dtype).itemsize if any(cut) else 0)
    kept = (whole[0] - cut[0], whole[1] - cut[1], whole[2] - cut[2])
    mapped = _read_lattice(reader, kept, np.dtype(dtype))
    told: dict[str, Any] = {"version": view[0], "bytes": len(view), **mapped.describe()}
    return told | tilecore.describe(reader, mapped.parts()[0].span)


def _bytes(payload: bytes | memoryview | NDArray[np.uint8]) -> memoryview:
    """Return a payload as bytes in one piece."""
    return memoryview(np.ascontiguousarray(np.frombuffer(payload, np.uint8)).data)


def _sealed(body: bytes, pixels: NDArray[Any]) -> bytes:
    checksum = _pixel_checksum(pixels, memoryview(body)).to_bytes(4, "little")
    return bytes([VERSION]) + crc32c(checksum + body).to_bytes(4, "little") + checksum + body


def _opened(view: memoryview) -> memoryview:
    if len(view) < HEAD:
        raise damaged("it ends too soon")
    if view[0] != VERSION:
        raise TileError(
            f"this tile has format version {view[0]}, and this program reads version {VERSION}",
            remedy="Install a newer stackbound.",
        )
    if crc32c(view[5:]) != int.from_bytes(view[1:5], "little"):
        raise damaged("its checksum does not match")
    return view[HEAD:]


def _pixel_checksum(pixels: NDArray[Any], body: memoryview) -> int:
    """Return the checksum of the pixels' little-endian bytes, begun from one of type, shape and lattice parameters.

    So a payload that decodes to the right bytes of another shape or type is refused as well.
    """
    named = f"{pixels.dtype.name} {'x'.join(map(str, pixels.shape))} ".encode()
    little = np.ascontiguousarray(pixels, pixels.dtype.newbyteorder("<"))
    return crc32c(little.reshape(-1).view(np.uint8), crc32c(named + bytes(body[:LATTICE_BYTES])))
