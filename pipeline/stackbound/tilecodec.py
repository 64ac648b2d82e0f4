"""One tile to bytes and back.

A payload is a format version, a checksum of everything after it, a checksum of the decoded pixels, and the numbers and
streams from which they are decoded. ``DECODE.txt`` beside this file describes every byte.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound import lattice, tilecore
from stackbound.byteio import Reader, Writer, damaged
from stackbound.checksum import crc32c
from stackbound.errors import TileError
from stackbound.lattice import LatticeTile, Tolerance
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
            cropped, _ = lattice.crop(lattice.three_axes(pixels))
            mapped = lattice.to_lattice(cropped, tolerance)
            tiles += mapped.split(cropped)[:1] if mapped.width else []
        if not tiles:
            return TileCoder(self.predict, self.stage, self.plan)
        return TileCoder(self.predict, self.stage, self.predict.plan(tiles, _size))

    def encode(self, pixels: NDArray[Any], tolerance: Tolerance) -> bytes:
        """Return the bytes of one tile, every pixel of which decodes to within the tolerance.

        Parameters
        ----------
        pixels : ndarray
            One to five axes, integers of 8 to 64 bits in native byte order, at least one pixel.
        tolerance : int, float
            In stored pixel values.

        Raises
        ------
        stackbound.errors.UsageError
            A dtype that cannot be coded, or a tolerance below zero or not a number.
        stackbound.errors.PluginError
            A stage broke its contract.
        """
        whole = lattice.three_axes(pixels)
        cropped, last = lattice.crop(whole)
        mapped = lattice.to_lattice(cropped, tolerance)
        writer = Writer()
        for length, kept in zip(whole.shape, cropped.shape, strict=True):
            writer.number(length - kept)
        if cropped.shape != whole.shape:
            writer.signed(int(last))
        mapped.write(writer)
        values = []
        for tile in mapped.split(cropped):
            # One value needs no stage.
            prediction = self.predict.predict(tile, self.plan, _size) if tile.span else NoPrediction()
            parts = tilecore.encode(tile, prediction)
            writer.data += parts.head + parts.indices + parts.residuals
            values.append(parts.values)
        decoded = _uncropped(mapped.pixels(values, pixels.dtype), whole.shape, last).reshape(pixels.shape)
        return _sealed(bytes(writer.data), decoded)


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
    view = memoryview(payload).cast("B")
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
    last = reader.signed() if any(cut) else 0
    kept = (whole[0] - cut[0], whole[1] - cut[1], whole[2] - cut[2])
    mapped = lattice.read(reader, dtype)
    values = [tilecore.decode(reader, kept, span, tolerance) for span, tolerance in mapped.parts()]
    reader.end()
    info = np.iinfo(dtype)
    if not info.min <= last <= info.max:
        raise damaged("the padding does not fit the pixel type")
    return _uncropped(mapped.pixels(values, dtype), whole, last).reshape(shape)


def _uncropped(pixels: NDArray[Any], shape: tuple[int, ...], last: Any) -> NDArray[Any]:
    if pixels.shape == shape:
        return pixels
    out = np.full(shape, last, pixels.dtype)
    out[tuple(slice(length) for length in pixels.shape)] = pixels
    return out


def describe(payload: bytes | memoryview | NDArray[np.uint8]) -> dict[str, Any]:
    """Return what the bytes of one tile say about themselves, without decoding its streams.

    Returns
    -------
    dict
        ``version``, ``bytes``, ``minimum``, ``maximum`` (of the pixels, before decoding), ``tolerance``, ``mode``
        ("constant", "none" or "transform"), and for blocks ``block`` and ``basis``.

    Raises
    ------
    stackbound.errors.TileError
        The bytes are damaged.
    """
    view = memoryview(payload).cast("B")
    reader = Reader(_opened(view))
    if any([reader.number() for _ in range(3)]):
        reader.signed()
    mapped = lattice.read_any(reader)
    told: dict[str, Any] = {"version": view[0], "bytes": len(view), **mapped.describe()}
    return told | tilecore.describe(reader, mapped.parts()[0][0])


def _size(tile: LatticeTile, prediction: Prediction) -> int:
    return len(tilecore.encode(tile, prediction))


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
