"""One region: cut into tiles, encode, write as a shard, read back from disk through plain zarr, compare, record."""

from __future__ import annotations

import threading
from collections.abc import Sequence
from concurrent.futures import Executor
from dataclasses import dataclass, field
from fractions import Fraction
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from stackbound import compare
from stackbound.errors import IntegrityError, PluginError, PromiseError, SourceError, StackboundError
from stackbound.geometry import Box, Index, box_at, position_of, whole_boxes
from stackbound.hashes import sha256_file, sha256_pixels
from stackbound.log import Record
from stackbound.numbers import decimal
from stackbound.shard import shard_parts
from stackbound.store import shard_name
from stackbound.target import write_file

if TYPE_CHECKING:
    from stackbound.promise import Promise
    from stackbound.stages import Grid, OpenSource, StackInfo, Verify
    from stackbound.tilecodec import TileCoder

Pixels = NDArray[Any]


@dataclass(frozen=True)
class Result:
    """What is known of one region after it was compared.

    Attributes
    ----------
    record : dict
        Its record in the log.
    parts : tuple
        What it adds to each figure.
    errors : Errors
        Its errors, and the range of the source's pixels.
    """

    record: Record
    parts: tuple[Any, ...]
    errors: compare.Errors


@dataclass
class RegionWorker:
    """All that the regions of one run have in common; `work` is called from several threads.

    Attributes
    ----------
    folder : Path
        The store being written.
    array : zarr.Array
        The array inside it, opened for reading.
    tiles : Executor
        Where tiles are encoded.
    """

    folder: Path
    source: OpenSource
    info: StackInfo
    grid: Grid
    promise: Promise
    coder: TileCoder
    figures: Sequence[Verify]
    array: Any
    tiles: Executor
    _reading: threading.Lock = field(default_factory=threading.Lock)

    def work(self, index: int, kept: Record | None = None) -> Result:
        """Bring one region onto the disk and compare what is there with the source.

        Parameters
        ----------
        index : int
            C-order index of the region.
        kept : mapping, optional
            Journal entry of a shard that an interrupted run wrote; it is used where it still has the same bytes.

        Raises
        ------
        stackbound.errors.PromiseError
            A pixel read back from disk is outside its tolerance.
        stackbound.errors.StackboundError
            Reading, encoding or writing failed; names the place.
        """
        box, name = self.place(index)
        with self._reading:
            original = read_source(self.source, self.info, box)
        source_hash = sha256_pixels(original)
        if kept is not None and kept["source_sha256"] != source_hash:
            raise SourceError("The unfinished run is of another source: its pixels differ here.", where=f"region {box}")
        if not self._still_there(name, kept):
            write_file(self.folder / name, self._encode(original, box))
        decoded = read_back(self.array, box)
        return self._compare(index, box, name, original, decoded, source_hash)

    def place(self, index: int) -> tuple[Box, str]:
        """Return the box of a region and the path of its shard."""
        position = position_of(index, self.info.shape, self.grid.region)
        return box_at(self.info.shape, self.grid.region, position), shard_name(position)

    def _still_there(self, name: str, kept: Record | None) -> bool:
        path = self.folder / name
        return kept is not None and path.is_file() and sha256_file(path) == kept["file_sha256"]

    def _encode(self, original: Pixels, region: Box) -> list[bytes]:
        tiles = whole_boxes(region.start, self.grid.region, self.grid.tile)
        inside = [all(a < b for a, b in zip(tile.start, self.info.shape, strict=True)) for tile in tiles]
        futures = [
            self.tiles.submit(self._encode_tile, original, region, tile) if within else None
            for tile, within in zip(tiles, inside, strict=True)
        ]
        try:
            return shard_parts([None if future is None else future.result() for future in futures])
        except BaseException:
            for future in futures:
                if future is not None:
                    future.cancel()
            raise

    def _encode_tile(self, original: Pixels, region: Box, tile: Box) -> bytes:
        pixels = cut_tile(original, region, tile)
        return encode_tile(self.coder, self.promise, pixels, tile)

    def _compare(self, index: int, box: Box, name: str, original: Pixels, decoded: Pixels, source_hash: str) -> Result:
        errors, share, over = measure(original, decoded, box, self.promise)
        if over:
            raise PromiseError(
                f"{over} pixels read back from disk are outside their tolerance "
                f"(first at {first_over(original, decoded, box, self.promise)}).",
                where=f"region {box}",
            )
        # What the disk holds now, not what was meant to be written.
        path = self.folder / name
        record = {
            "record": "region",
            "index": index,
            "start": list(box.start),
            "stop": list(box.stop),
            "pixels": errors.pixels,
            "source_bytes": original.nbytes,
            "pixels_changed": errors.changed,
            "pixels_over": over,
            "max_error": decimal(errors.largest),
            "max_error_share": decimal(share),
            "sum_error": decimal(errors.total),
            "sum_squared_error": decimal(errors.squares),
            "source_sha256": source_hash,
            "decoded_sha256": sha256_pixels(decoded),
            "file": name,
            "file_bytes": path.stat().st_size,
            "file_sha256": sha256_file(path),
        }
        parts = tuple(_measure_figure(figure, original, decoded, self.info, box) for figure in self.figures)
        return Result(record, parts, errors)


def read_source(source: OpenSource, info: StackInfo, box: Box) -> Pixels:
    """Return the source's pixels of a box, read-only, after checking that the loader kept its contract."""
    try:
        pixels = source.read(box.start, box.stop)
    except StackboundError:
        raise
    except OSError as error:
        raise SourceError(f"The source cannot be read ({error.strerror or error}).", where=f"region {box}") from error
    except Exception as error:
        raise PluginError(
            f"The loader raised {type(error).__name__}: {error}.", where=f"region {box}", remedy="Tell its author."
        ) from error
    if getattr(pixels, "shape", None) != box.shape or pixels.dtype != info.dtype:
        got = f"{getattr(pixels, 'shape', type(pixels).__name__)} {getattr(pixels, 'dtype', '')}"
        raise PluginError(f"The loader returned {got} for {box.shape} {info.dtype}.", where=f"region {box}")
    pixels = np.ascontiguousarray(pixels)
    pixels.flags.writeable = False
    return pixels


def cut_tile(original: Pixels, region: Box, tile: Box) -> Pixels:
    """Return one whole tile of a region; what lies outside the stack is zero, as a reader of Zarr expects."""
    stop = tuple(min(a, b) for a, b in zip(tile.stop, region.stop, strict=True))
    inside = Box(tile.start, stop)
    pixels = original[inside.slices(region.start)]
    if inside.shape == tile.shape:
        return np.ascontiguousarray(pixels)
    whole = np.zeros(tile.shape, dtype=original.dtype)
    whole[inside.slices(tile.start)] = pixels
    return whole


def encode_tile(coder: TileCoder, promise: Promise, pixels: Pixels, tile: Box) -> bytes:
    """Return the bytes of one tile under its own promise; an error names the tile."""
    try:
        return coder.encode(pixels, promise.for_tile(tile.start, tile.shape))
    except StackboundError as error:
        raise error.at(f"tile {tile}") from error.__cause__


def read_back(array: Any, box: Box) -> Pixels:
    """Return the pixels of a box through zarr, read-only.

    Raises
    ------
    stackbound.errors.IntegrityError
        The bytes on disk do not decode.
    """
    try:
        pixels = np.ascontiguousarray(array[box.slices()])
    except StackboundError as error:
        raise error.at(f"region {box}") from error.__cause__
    except Exception as error:  # zarr raises many kinds for damaged bytes
        raise IntegrityError(f"The bytes on disk cannot be decoded ({error}).", where=f"region {box}") from error
    if pixels.shape != box.shape:
        raise IntegrityError(f"Reading gave pixels of shape {pixels.shape}.", where=f"region {box}")
    pixels.flags.writeable = False
    return pixels


def measure(
    original: Pixels, decoded: Pixels, box: Box, promise: Promise
) -> tuple[compare.Errors, Fraction | float, int]:
    """Return the errors of a region, the largest as a share of its tolerance, and how many pixels are outside it."""
    total, share, outside = compare.Errors(), Fraction(0), 0
    for piece, tolerance in promise.pieces(box):
        cut = piece.slices(box.start)
        part = (original, decoded) if piece == box else (original[cut], decoded[cut])
        errors = compare.errors(*part)
        total += errors
        outside += compare.over(*part, tolerance, errors)
        if errors.largest and not outside:
            share = max(share, Fraction(errors.largest) / Fraction(tolerance))
    return total, share if not outside else float("inf"), outside


def first_over(original: Pixels, decoded: Pixels, box: Box, promise: Promise) -> Index:
    """Return the stack coordinates of the first pixel outside its tolerance (there must be one)."""
    for piece, tolerance in promise.pieces(box):
        cut = piece.slices(box.start)
        o, d = original[cut], decoded[cut]
        position: list[int] = []
        while o.ndim and compare.over(o, d, tolerance):
            row = next(i for i in range(o.shape[0]) if compare.over(o[i : i + 1], d[i : i + 1], tolerance))
            position.append(row)
            o, d = o[row], d[row]
        if position:
            return tuple(a + b for a, b in zip(piece.start, position, strict=True))
    raise AssertionError("no pixel is outside its tolerance")


def _measure_figure(figure: Verify, original: Pixels, decoded: Pixels, info: StackInfo, box: Box) -> Any:
    try:
        return figure.measure(original, decoded, info)
    except StackboundError:
        raise
    except Exception as error:
        raise PluginError(
            f"The figure '{figure.name}' raised {type(error).__name__}: {error}.", where=f"region {box}"
        ) from error
