"""The coders that are compared: stackbound's tile codec, the near-lossless standard, and rounding + shuffle + zstd.

Each takes a stack in memory and gives byte strings, and back; cutting and pasting tiles or planes counts as its work.
Times are CPU times of the process, which runs on one core.
"""

from __future__ import annotations

import time
from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass
from math import prod
from typing import Any

import jpeg_ls
import numpy as np
import zstandard
from numpy.typing import NDArray
from stackbound.config import Pipeline, build, read_config
from stackbound.errors import StackboundError
from stackbound.geometry import Box, counts, whole_boxes
from stackbound.plugins import registry
from stackbound.regions import cut_tile
from stackbound.sample import sample_tiles
from stackbound.tilecodec import TileCoder, decode
from stacks import InMemory, Stack

SHARD_INDEX_ENTRY = 16
"""Bytes per inner chunk in a shard's index: offset and length, 64 bits each (Zarr v3 sharding specification)."""
SHARD_INDEX_CHECKSUM = 4


class NotPossibleError(Exception):
    """A coder cannot code this stack at this tolerance; the text says why."""


@dataclass
class Encoded:
    """What an encoder made, and how long the choice of its parameters took (part of the encoding time)."""

    payloads: list[bytes]
    size: int
    planning: float = 0.0


class Coder(ABC):
    """One way of coding a stack under a maximum error."""

    name: str

    @abstractmethod
    def encode(self, stack: Stack, tolerance: float) -> Encoded:
        """Code the whole stack."""

    @abstractmethod
    def decode(self, stack: Stack, encoded: Encoded) -> NDArray[Any]:
        """Return all pixels; only shape and dtype of `stack` are looked at."""


class TileCodec(Coder):
    """Stackbound's tile codec under one configuration; the size includes the index of every shard."""

    def __init__(self, name: str, config: Mapping[str, Any] | str | None = None) -> None:
        self.name = name
        self.config = config
        self._pipelines: dict[float, Pipeline] = {}

    def _pipeline(self, tolerance: float) -> Pipeline:
        # Reading a configuration takes tens of milliseconds whatever the stack: not a part of coding, so it is kept.
        if tolerance not in self._pipelines:
            # The shortest decimal that reads back to the same number: what a user would type.
            self._pipelines[tolerance] = build(read_config(self.config, tolerance=repr(tolerance)), registry())
        return self._pipelines[tolerance]

    def encode(self, stack: Stack, tolerance: float) -> Encoded:
        """Plan on a sample of whole tiles as a run does, then code tile by tile."""
        shape = stack.pixels.shape
        whole = Box((0,) * len(shape), shape)
        try:
            pipeline = self._pipeline(tolerance)
            self._grid = pipeline.tile.grid(stack.info)
            sample = [tile for _, tile in sample_tiles(InMemory(stack), stack.info, self._grid)]
            began = time.process_time()
            coder = TileCoder(pipeline.predict, pipeline.encode).planned(sample, [tolerance] * len(sample))
            planning = time.process_time() - began
            payloads = [coder.encode(cut_tile(stack.pixels, whole, box), tolerance) for box in self._boxes(shape)]
        except StackboundError as error:
            raise NotPossibleError(str(error)) from error
        shards = prod(counts(shape, self._grid.region))
        slots = shards * prod(counts(self._grid.region, self._grid.tile))
        index = slots * SHARD_INDEX_ENTRY + shards * SHARD_INDEX_CHECKSUM
        return Encoded(payloads, sum(map(len, payloads)) + index, planning)

    def decode(self, stack: Stack, encoded: Encoded) -> NDArray[Any]:
        """Decode tile by tile into the stack."""
        out = np.empty_like(stack.pixels)
        for box, payload in zip(self._boxes(out.shape), encoded.payloads, strict=True):
            view = out[box.slices()]
            tile = decode(payload, self._grid.tile, out.dtype)
            view[...] = tile[tuple(slice(n) for n in view.shape)]
        return out

    def _boxes(self, shape: tuple[int, ...]) -> list[Box]:
        """Return all tiles, whole also where they reach beyond the stack."""
        return whole_boxes((0,) * len(shape), shape, self._grid.tile)


class NearLosslessStandard(Coder):
    """ISO/IEC 14495-1 through its reference-grade binding: one whole code stream per plane and channel.

    Signed pixels are shifted so that the smallest of the stack is 0. Each plane is coded with the number of bits that
    it needs, which is the choice that makes the streams smallest. The parameter NEAR ends at min(255, MAXVAL / 2).
    """

    name = "14495-1"

    def encode(self, stack: Stack, tolerance: float) -> Encoded:
        """Code plane by plane with the number of bits that the plane needs."""
        pixels = stack.pixels
        if pixels.dtype.kind not in "iu" or pixels.dtype.itemsize > 2:
            raise NotPossibleError(f"the standard has no {pixels.dtype} pixels")
        if tolerance > 255:
            raise NotPossibleError("the standard's largest tolerance is 255")
        payloads = []
        self._shift = int(pixels.min()) if pixels.dtype.kind == "i" else 0
        for plane in pixels.reshape(-1, *pixels.shape[-2:]):
            if self._shift:
                plane = (plane - np.int32(self._shift)).astype(f"u{pixels.dtype.itemsize}")
            # NEAR needs MAXVAL >= 2 NEAR; a plane that is darker than that is coded with more bits than it uses.
            bits = max(2, int(plane.max()).bit_length(), (2 * int(tolerance)).bit_length())
            source = plane.astype(np.uint8) if bits <= 8 else plane.astype(np.uint16, copy=False)
            stream = jpeg_ls.encode_buffer(source.tobytes(), *plane.shape, 1, bits, int(tolerance))
            payloads.append(bytes(stream))
        return Encoded(payloads, sum(map(len, payloads)))

    def decode(self, stack: Stack, encoded: Encoded) -> NDArray[Any]:
        """Decode plane by plane."""
        shape, dtype = stack.pixels.shape, stack.pixels.dtype
        out = np.empty((len(encoded.payloads), *shape[-2:]), dtype)
        for plane, payload in zip(out, encoded.payloads, strict=True):
            raw = jpeg_ls.decode_from_buffer(payload)
            decoded = np.frombuffer(raw, f"<u{len(raw) // plane.size}").reshape(plane.shape)
            plane[...] = decoded + np.int32(self._shift) if self._shift else decoded
        return out.reshape(shape)


class RoundShuffleZstd(Coder):
    """Values rounded to multiples of 2E+1 (floats: twice the tolerance), bytes shuffled, zstd; one stream per plane."""

    def __init__(self, level: int = 9) -> None:
        self.level = level
        self.name = f"zstd-{level}"

    def encode(self, stack: Stack, tolerance: float) -> Encoded:
        """Round, shuffle and compress plane by plane."""
        compressor = zstandard.ZstdCompressor(level=self.level)
        payloads = []
        for plane in stack.pixels.reshape(-1, *stack.pixels.shape[-2:]):
            rounded = round_to(plane, tolerance)
            shuffled = rounded.reshape(-1, 1).view(np.uint8).T.tobytes()
            payloads.append(compressor.compress(shuffled))
        return Encoded(payloads, sum(map(len, payloads)))

    def decode(self, stack: Stack, encoded: Encoded) -> NDArray[Any]:
        """Decompress and put the bytes back in order."""
        shape, dtype = stack.pixels.shape, stack.pixels.dtype
        out = np.empty((len(encoded.payloads), *shape[-2:]), dtype)
        decompressor = zstandard.ZstdDecompressor()
        for plane, payload in zip(out, encoded.payloads, strict=True):
            raw = np.frombuffer(decompressor.decompress(payload), np.uint8)
            plane[...] = np.ascontiguousarray(raw.reshape(dtype.itemsize, -1).T).view(dtype).reshape(plane.shape)
        return out.reshape(shape)


def round_to(pixels: NDArray[Any], tolerance: float) -> NDArray[Any]:
    """Round to the coarsest evenly spaced values that lie within the tolerance of every pixel, inside the dtype."""
    if tolerance == 0:
        return np.ascontiguousarray(pixels)
    if pixels.dtype.kind == "f":
        step = pixels.dtype.type(2 * tolerance)
        return np.asarray(np.rint(pixels / step) * step, pixels.dtype)
    wide = np.int32 if pixels.dtype.itemsize <= 2 else np.int64
    limits = np.iinfo(pixels.dtype)
    width = 2 * int(tolerance) + 1
    rounded = np.floor_divide(pixels.astype(wide) + int(tolerance), width) * width
    return np.asarray(np.clip(rounded, limits.min, limits.max), pixels.dtype)
