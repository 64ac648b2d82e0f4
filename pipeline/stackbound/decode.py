"""Decode the tiles of a store with numpy alone: ``python decode.py STORE TARGET.npy``.

A copy of this file lies in every store beside ``DECODE.txt``, which describes the same bytes in words. It imports
nothing of stackbound and nothing compiled, so that a store can be read when the program that wrote it can no longer
be installed. It is slow (about a second for a million pixels) and meant for that day, and as a second opinion in the
tests.

``decode(payload, shape, dtype)`` returns the pixels of one inner chunk of the array, ``decode_store(store, target)``
writes those of the whole array.
"""

# This file stands alone: annotations are for readers, and numpy's own types would need casts everywhere.
# mypy: disable-error-code="no-any-return, import-not-found"

from __future__ import annotations

import json
import sys
from itertools import product
from math import cos, pi, prod, sqrt
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

VERSION = 1
LENGTHS = (1, 2, 4, 8, 16, 32)
WIDEST = 2**24 - 1
MISSING = 2**64 - 1
Shape = tuple[int, int, int]


class DamagedError(ValueError):
    """The bytes are not those of a tile, or not of this one."""


# ------------------------------------------------------------------------------------------------------ whole numbers


class Reader:
    """Numbers and byte strings from a payload."""

    def __init__(self, data: bytes) -> None:
        self.data, self.at = data, 0

    def number(self, most: int = 2**65) -> int:
        """Seven bits a byte, least significant first, the top bit meaning that more follow."""
        value = 0
        for place in range(10):
            byte = self.take(1)[0]
            value |= (byte & 0x7F) << (7 * place)
            if byte < 0x80:
                break
        if value > most:
            raise DamagedError(f"a number is {value} where at most {most} makes sense")
        return value

    def signed(self) -> int:
        """0, 1, 2, 3, 4 ... stand for 0, -1, 1, -2, 2 ..."""
        folded = self.number()
        return -((folded + 1) >> 1) if folded & 1 else folded >> 1

    def take(self, count: int) -> bytes:
        """Return so many bytes."""
        if self.at + count > len(self.data):
            raise DamagedError("the bytes end too soon")
        self.at += count
        return self.data[self.at - count : self.at]

    def sized(self) -> bytes:
        """Return bytes that stand after their number."""
        return self.take(self.number())


def golomb(data: bytes, count: int) -> list[int]:
    """Return `count` signed numbers from Golomb-Rice codes whose parameter follows the numbers."""
    bits = np.unpackbits(np.frombuffer(data, np.uint8), bitorder="little").tolist()
    at, spread, seen = 0, 4, 1
    numbers = []
    for _ in range(count):
        low = 0
        while seen << low < spread and low < 40:
            low += 1
        ones = 0
        while ones < 32 and at < len(bits) and bits[at]:
            ones, at = ones + 1, at + 1
        if ones == 32:
            low, ones = 40, 0
        else:
            at += 1
        if at + low > len(bits):
            raise DamagedError("a list of numbers ends too soon")
        folded = (ones << low) | sum(bit << place for place, bit in enumerate(bits[at : at + low]))
        at += low
        numbers.append(-((folded + 1) >> 1) if folded & 1 else folded >> 1)
        spread, seen = spread + folded, seen + 1
        if seen == 16:
            spread, seen = spread >> 1, seen >> 1
    if -(-at // 8) != len(data):
        raise DamagedError("a list of numbers does not end where it should")
    return numbers


# ------------------------------------------------------------------------------------------------------- range coding


def read_tables(reader: Reader, count: int) -> tuple[list[int], list[list[int]]]:
    """Return each table's group, and per group 4096 slots: symbol | (slot - start) << 8 | (frequency - 1) << 20."""
    groups = reader.number(count)
    starts = np.unpackbits(np.frombuffer(reader.take(-(-count // 8)), np.uint8), count=count, bitorder="little")
    group = np.cumsum(starts, dtype=np.int64).tolist()
    numbers = reader.number(groups * 258)
    values = iter(golomb(reader.sized(), numbers))
    if group[-1] >= groups:
        raise DamagedError("a table is missing")
    slots = []
    for _ in range(groups):
        try:
            first = next(values) + 128
            last = first + next(values)
            if not 0 <= first <= last <= 255:
                raise DamagedError("a table makes no sense")
            frequencies, level = [0] * 256, 0
            for symbol in range(first, last + 1):
                level += next(values)
                if not 0 <= level <= 80:
                    raise DamagedError("a table makes no sense")
                octave = (level - 8) // 8 if level >= 16 else 0
                frequencies[symbol] = (level - 8 * octave) << octave
        except StopIteration:
            raise DamagedError("a table ends too soon") from None
        slots.append(_slots(_rescaled(frequencies)))
    if next(values, None) is not None:
        raise DamagedError("a table is too long")
    return group, slots


def _rescaled(frequencies: list[int]) -> list[int]:
    """Scale whole numbers to a sum of 4096 in which nothing above 0 becomes 0."""
    total = sum(frequencies)
    if total == 0:
        return [4096] + [0] * 255
    scaled = [max(1, f * 4096 // total) if f else 0 for f in frequencies]
    rest = 4096 - sum(scaled)
    while rest < 0:
        scaled[scaled.index(max(scaled))] -= 1
        rest += 1
    scaled[scaled.index(max(scaled))] += rest
    return scaled


def _slots(frequencies: list[int]) -> list[int]:
    return [s | offset << 8 | (f - 1) << 20 for s, f in enumerate(frequencies) for offset in range(f)]


class Coder:
    """Interleaved range decoding: states of 32 bits that take in words of 16 bits."""

    def __init__(self, reader: Reader, states: int) -> None:
        self.states = np.frombuffer(reader.take(4 * states), "<u4").tolist()
        data = reader.sized()
        if len(data) % 2:
            raise DamagedError("half a word")
        self.words = np.frombuffer(data, "<u2").tolist()
        self.at = 0

    def symbol(self, lane: int, slots: list[int]) -> int:
        """Return the next symbol of one state under one table."""
        x = self.states[lane]
        entry = slots[x & 4095]
        x = ((entry >> 20) + 1) * (x >> 12) + ((entry >> 8) & 4095)
        if x < 65536:
            if self.at >= len(self.words):
                raise DamagedError("the words end too soon")
            x = x << 16 | self.words[self.at]
            self.at += 1
        self.states[lane] = x & 0xFFFFFFFF
        return entry & 255

    def end(self) -> None:
        """Refuse words left over and states that are not where the encoder began."""
        if self.at != len(self.words) or any(state != 65536 for state in self.states):
            raise DamagedError("the range coder does not end where it should")


def shift_of(spread: int) -> int:
    """Return how many low bits numbers of a spread class write as they are."""
    return (spread - 32) // 2 if spread > 33 else 0


def table_of(spread: int) -> int:
    """Return the table of a spread class above 0."""
    return spread - 1 if spread <= 33 else 31 + spread % 2


class Rest:
    """What stands beside the symbols: low bits, and numbers that fit no symbol."""

    def __init__(self, reader: Reader, most: int) -> None:
        data = reader.sized()
        self.bits = np.unpackbits(np.frombuffer(data, np.uint8), bitorder="little").tolist()
        self.at, self.size = 0, len(data)
        count = reader.number(most)
        self.listed = golomb(reader.sized(), count) if count else []
        self.position = 0

    def number(self, symbol: int, shift: int) -> int:
        """Return the number of a symbol."""
        value = symbol - 128
        if symbol == 0:
            if self.position >= len(self.listed):
                raise DamagedError("a listed number is missing")
            value = self.listed[self.position]
            self.position += 1
        if self.at + shift > len(self.bits):
            raise DamagedError("low bits are missing")
        low = sum(bit << place for place, bit in enumerate(self.bits[self.at : self.at + shift]))
        self.at += shift
        return (((value << shift | low) + 2**31) & 0xFFFFFFFF) - 2**31

    def end(self) -> None:
        """Refuse bits and numbers left over."""
        if self.position != len(self.listed) or -(-self.at // 8) != self.size:
            raise DamagedError("low bits or listed numbers are left over")


# ---------------------------------------------------------------------------------------------------------- residuals


def read_classes(reader: Reader, shape: tuple[int, int, int]) -> NDArray[np.int64]:
    """Return the spread class of each cell, each coded as its difference from what its neighbours foresee."""
    group, slots = read_tables(reader, 3)
    coder = Coder(reader, 1)
    classes = np.zeros(shape, np.int64)
    for z, y, x in product(*map(range, shape)):
        before = int(classes[z - 1, y, x]) if z else -1
        left = int(classes[z, y, x - 1]) if x else -1
        upper = int(classes[z, y - 1, x]) if y else -1
        if left < 0:
            left = upper if upper >= 0 else max(before, 0)
        if upper < 0:
            upper = left
        if before < 0:
            foreseen, apart = (left + upper + 1) >> 1, abs(left - upper)
        else:
            foreseen = (left + upper + 2 * before + 2) >> 2
            apart = max(left, upper, before) - min(left, upper, before)
        context = 0 if apart <= 1 else (1 if apart <= 3 else 2)
        value = coder.symbol(0, slots[group[context]]) - 128 + foreseen
        if not 0 <= value <= 100:
            raise DamagedError("an impossible class")
        classes[z, y, x] = value
    coder.end()
    return classes


def read_residuals(reader: Reader, shape: tuple[int, int, int]) -> NDArray[np.int64]:
    """Return the residuals (nz, ny, nx): rows from top to bottom, in runs of eight of one class, one state a pixel."""
    nz, ny, nx = shape
    out = np.zeros(shape, np.int64)
    if reader.number(1) == 0:
        return out
    classes = read_classes(reader, (nz, -(-ny // 8), -(-nx // 8)))
    group, slots = read_tables(reader, 33)
    coder = Coder(reader, 8)
    rest = Rest(reader, nz * ny * nx)
    for z, y in product(range(nz), range(ny)):
        row = []
        for run, spread in enumerate(classes[z, y // 8].tolist()):
            count = min(8, nx - run * 8)
            if spread == 0:
                row += [128] * count
            else:
                table = slots[group[table_of(spread)]]
                row += [coder.symbol(lane, table) for lane in range(count)]
        out[z, y] = row
    coder.end()
    _finish(out, classes, rest)
    return out


def _finish(symbols: NDArray[np.int64], classes: NDArray[np.int64], rest: Rest) -> None:
    """Turn symbols into residuals, in place and in coding order."""
    per_pixel = classes.repeat(8, axis=1).repeat(8, axis=2)[:, : symbols.shape[1], : symbols.shape[2]]
    special = (per_pixel > 33) | (symbols == 0)
    values = [rest.number(s, shift_of(c)) for s, c in zip(symbols[special].tolist(), per_pixel[special].tolist())]
    symbols -= 128
    symbols[special] = values
    rest.end()


# -------------------------------------------------------------------------------------------------------- coefficients

NEIGHBOURS = (((0, 0, 1), 2), ((0, 1, 0), 2), ((1, 0, 0), 2), ((0, 1, 1), 1), ((0, 0, 2), 1), ((0, 2, 0), 1))
RATIOS = np.array([round(256 * (4 / 3 * 2 ** (j / 2) - 1 / 3)) for j in range(-3, 9)], np.int64)


def read_indices(reader: Reader, block: tuple[int, int, int], grid: tuple[int, int, int]) -> NDArray[np.int64]:
    """Return the indices, shape (*block, *grid)."""
    indices = np.zeros((*block, *grid), np.int64)
    if reader.number(1) == 0:
        return indices
    order, bands = scan(block)
    # How many bands each block reaches; what lies beyond is zero and not coded.
    last = read_classes(reader, grid)
    given = reader.number(bands[-1] + 1)
    band_classes = np.cumsum(golomb(reader.sized(), given)).tolist() if given else []
    if given != last.max() or min(band_classes, default=0) < 0 or max(band_classes, default=0) > 88:
        raise DamagedError("the bands make no sense")
    band_classes += [0] * (bands[-1] + 1 - given)
    group, slots = read_tables(reader, 33)
    coder = Coder(reader, 8)
    rest = Rest(reader, prod(block) * prod(grid))
    mean = {place: _mean_of(band_classes[band]) for place, band in zip(order, bands)}
    for place, band in zip(order, bands):
        base = band_classes[band]
        active = last > band
        if base == 0 or not active.any():
            continue
        near = [(tuple(np.subtract(place, lower)), weight) for lower, weight in NEIGHBOURS if _inside(place, lower)]
        classes = _classes(near, base, mean, indices)[active].tolist()
        symbols = [coder.symbol(i % 8, slots[group[table_of(c)]]) for i, c in enumerate(classes)]
        indices[place][active] = [rest.number(s, shift_of(c)) for s, c in zip(symbols, classes)]
    coder.end()
    rest.end()
    _restore_means(indices[0, 0, 0])
    return indices


def scan(block: tuple[int, int, int]) -> tuple[list[tuple[int, ...]], list[int]]:
    """Return the order of the frequencies (w, v, u) and the band of each place in it."""
    bz, by, bx = block
    places = sorted(np.ndindex(block), key=lambda f: (f[0] * 32 // bz + f[1] * 32 // by + f[2] * 32 // bx, f))
    bands: list[int] = []
    while len(bands) < len(places):
        start = len(bands)
        size = 1 if start < 16 else max(1, start // 8)
        bands += [bands[-1] + 1 if bands else 0] * min(size, len(places) - start)
    return places, bands


def _inside(place: tuple[int, ...], lower: tuple[int, ...]) -> bool:
    return all(p >= d for p, d in zip(place, lower))


def _mean_of(band_class: int) -> int:
    """Return the mean magnitude that a class stands for, in units of 2**-12."""
    octave = max(band_class - 1, 0) // 2
    return 0 if band_class == 0 else ((181 << octave) >> 7 if band_class % 2 == 0 else 1 << octave)


def _classes(near: Any, base: int, mean: dict[Any, int], indices: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return the class of each index of a frequency, foreseen from lower frequencies of this and the next blocks."""
    grid = indices.shape[3:]
    expected = 8 * sum(weight * min(mean[place], 4095 << 12) for place, weight in near)
    if expected == 0:
        return np.full(grid, max(base, 1))
    own = np.zeros(grid, np.int64)
    for place, weight in near:
        own += weight * np.minimum(np.abs(indices[place]), 4095)
    framed = np.pad(own, ((0, 0), (1, 1), (1, 1)), "edge")
    around = 4 * own + framed[:, 1:-1, :-2] + framed[:, 1:-1, 2:] + framed[:, :-2, 1:-1] + framed[:, 2:, 1:-1]
    above = sum((around > (expected * int(ratio) >> 20)).astype(np.int64) for ratio in RATIOS)
    return np.maximum(base - 4 + above, 1)


def _restore_means(plane: NDArray[np.int64]) -> None:
    """Add to each mean value the median of left, upper, and their plane through both, in place."""
    for z, y, x in product(*map(range, plane.shape)):
        if y == 0 and x == 0:
            foreseen = plane[z - 1, 0, 0] if z else 0
        elif y == 0:
            foreseen = plane[z, 0, x - 1]
        elif x == 0:
            foreseen = plane[z, y - 1, x]
        else:
            left, upper, corner = plane[z, y, x - 1], plane[z, y - 1, x], plane[z, y - 1, x - 1]
            foreseen = sorted((left, upper, left + upper - corner))[1]
        plane[z, y, x] = (plane[z, y, x] + foreseen + 2**31) % 2**32 - 2**31


# --------------------------------------------------------------------------------------------------------- prediction


def cosine(length: int) -> NDArray[np.float64]:
    """Return the integer cosine basis in units of 2**-14, row u being the basis function of index u."""
    rows = [[sqrt(0.5) if u == 0 else cos((2 * x + 1) * u * pi / (2 * length)) for x in range(length)]
            for u in range(length)]  # fmt: skip
    return np.rint(np.array(rows) * 2**14)


def read_prediction(reader: Reader, shape: Shape, span: int, plain: bool) -> NDArray[np.int64]:
    """Return the integer prediction of a tile: indices times steps through an integer basis, exact in float64."""
    block = (LENGTHS[reader.number(5)], LENGTHS[reader.number(5)], LENGTHS[reader.number(5)])
    if block[0] > 16 or any(side >= 2 * length for side, length in zip(block, shape)):
        raise DamagedError("a block does not fit the tile")
    bases = []
    for side in block:
        if reader.number(1) == 0:
            bases.append(cosine(side))
        else:
            bases.append(np.array([reader.signed() for _ in range(side * side)], np.float64).reshape(side, side))
    count = prod(block) if reader.number(1) else 1
    steps = np.array([reader.number(2**26) for _ in range(count)], np.float64)
    grid = (-(-shape[0] // block[0]), -(-shape[1] // block[1]), -(-shape[2] // block[2]))
    if plain:
        indices = np.clip(read_zstd(reader, prod(block) * prod(grid)), -(2**28), 2**28).reshape(*block, *grid)
    else:
        indices = read_indices(reader, block, grid)
    factors = np.broadcast_to(steps, prod(block)).reshape(*block, 1, 1, 1)
    data = np.clip(indices.astype(np.float64) * factors, -(2.0**26), 2.0**26)
    for axis in range(3):
        if block[axis] > 1:
            data = np.rint(np.moveaxis(np.tensordot(bases[axis], data, ([0], [axis])), 0, axis) * 2.0**-14)
    scale = 2.0 ** -max(0, min(8, 24 - span.bit_length()))
    pixels = np.clip(np.rint(data * scale) + (span + 1) // 2, 0, span)
    placed = pixels.transpose(3, 0, 4, 1, 5, 2).reshape([n * side for n, side in zip(grid, block)])
    return placed[: shape[0], : shape[1], : shape[2]].astype(np.int64)


def read_array(reader: Reader, shape: Shape, span: int, tolerance: Any) -> NDArray[np.int64]:
    """Return the lattice values of one array: prediction and residual, clipped to the span."""
    plain = reader.number(1) == 1
    kind = reader.number(3)
    if kind in (1, 3):
        predicted = read_prediction(reader, shape, span, plain)
    else:
        predicted = np.full(shape, (span + 1) // 2, np.int64)
    if kind >= 2:
        if plain or not isinstance(tolerance, int) or not 0 < span < 2**17 or shape[1] < BANDS:
            raise DamagedError("a tile of this kind is not coded in bands")
        return read_bands(reader, predicted if kind == 3 else None, shape, span, 2 * tolerance + 1)
    residuals = read_zstd(reader, prod(shape)).reshape(shape) if plain else read_residuals(reader, shape)
    return np.clip(predicted + (2 * tolerance + 1) * residuals, 0, span)


def read_zstd(reader: Reader, count: int) -> NDArray[np.int64]:
    """Return whole numbers stored by the `zstd` stage: width, then zstd (RFC 8878) of all first bytes, and so on.

    Needs ``compression.zstd`` (Python 3.14) or the package `zstandard`; the other coder needs nothing.
    """
    width = (1, 2, 4)[reader.number(2)]
    data = reader.sized()
    try:
        from compression import zstd

        raw = zstd.ZstdDecompressor().decompress(data, count * width + 1)
    except ImportError:
        import zstandard

        raw = zstandard.ZstdDecompressor().stream_reader(data).read(count * width + 1)
    if len(raw) != count * width:
        raise DamagedError("a compressed array has the wrong size")
    shuffled = np.frombuffer(raw, np.uint8).reshape(width, count).T
    return np.ascontiguousarray(shuffled).view(f"<i{width}").reshape(-1).astype(np.int64)


# ------------------------------------------------------------------------------------------------------------- bands

BANDS = 16
HALO = 3


def read_bands(
    reader: Reader, base: NDArray[np.int64] | None, shape: Shape, span: int, width: int
) -> NDArray[np.int64]:
    """Return the lattice values of an array in which decoded neighbours foresee each value.

    The rows of a plane are cut into sixteen bands, which are decoded side by side: the last axis of all arrays here.
    """
    nz, ny, nx = shape
    flags, count = reader.number(3), 8 * reader.number(8)
    taps = np.array(read_numbers(reader, 3 * count), np.int64).reshape(-1, 3)
    weights = np.array(read_numbers(reader, 4 * (count + 3)), np.int64).reshape(4, -1)
    offsets = np.array([0 if base is not None else reader.number(span) for _ in range(nz)])
    first_class = reader.number(51)
    # The smallest and largest number that there can be in the bands.
    bottom, top = (-span, span) if base is not None else (-int(offsets.max()), span - int(offsets.min()))
    known = ((taps[:, 0] == 0) & (taps[:, 1] < 0)) | (taps[:, 0] == -1)
    reach = int(np.abs(weights).sum(1).max()) * max(abs(bottom), abs(top), 1) if weights.size else 0
    if not known.all() or np.abs(taps).max(initial=0) > HALO or bottom > top or reach + 4096 >= 2**31:
        raise DamagedError("the neighbours make no sense")
    rows = -(-ny // BANDS)
    full = ny - BANDS * (rows - 1)
    residuals = BandResiduals(reader, nx, nz * ny * nx)
    alone, clamped = flags >= 2, flags % 2 == 1
    decoded = np.zeros((2, rows + 2 * HALO, nx + 2 * HALO, BANDS), np.int64)
    energy = np.zeros((2, rows + 2 * HALO, nx, BANDS), np.int64)
    out = np.zeros((nz, rows, nx, BANDS), np.int64)
    for z in range(nz):
        now, before = z % 2, 1 - z % 2
        if z > 0:
            decoded[now, :HALO], energy[now, :HALO] = decoded[before, :HALO], energy[before, :HALO]
        for y in range(rows):
            at = y + HALO
            kind = 2 * min(z, 1) + min(y, 1)
            # Left of a row lies the first value of the row above it.
            decoded[now, at, :HALO] = decoded[now, at - 1, HALO]
            sums = np.full((nx, BANDS), 2048)
            for (dz, dy, dx), weight in zip(taps.tolist(), weights[kind, 3:].tolist()):
                plane = decoded[now if dz == 0 else before]
                sums += weight * plane[at + dy, HALO + dx : HALO + dx + nx]
            low, high = np.full((nx, BANDS), bottom), np.full((nx, BANDS), top)
            if clamped and y > 0:
                above = decoded[now, at - 1]
                three = np.stack([above[HALO - 1 + i : HALO - 1 + i + nx] for i in range(3)])
                low, high = three.min(0), three.max(0)
            if z == 0 and y == 0:
                classes = np.full((nx, BANDS), first_class)
            elif alone or z == 0:
                classes = band_classes(14 * energy[now, at - 1] + 7 * energy[now, at - 2])
            else:
                around = energy[before, at - 1] + 2 * energy[before, at] + energy[before, at + 1]
                classes = band_classes(3 * (2 * energy[now, at - 1] + energy[now, at - 2] + around))
            found = residuals.row(classes, full if y == rows - 1 else BANDS)
            line = decoded[now, at]
            w1, w2, w3 = weights[kind, :3].tolist()
            for x in range(nx):
                left = line[x + 2]
                foreseen = (sums[x] + w1 * left + w2 * line[x + 1] + w3 * line[x]) >> 12
                foreseen = np.minimum(np.maximum(foreseen, np.minimum(low[x], left)), np.maximum(high[x], left))
                line[x + HALO] = np.clip(foreseen + found[x] * width, bottom, top)
            line[nx + HALO :] = line[nx + HALO - 1]
            out[z, y] = line[HALO : nx + HALO]
            padded = np.pad(np.minimum(np.abs(found), 65535), ((2, 2), (0, 0)), "edge")
            energy[now, at] = sum(w * padded[i : i + nx] for i, w in enumerate((1, 2, 3, 2, 1)))
            if y == 0:
                decoded[now, :HALO] = line
                if z == 0:
                    energy[now, :HALO] = energy[now, at]
        join_bands(decoded[now], rows)
        join_bands(energy[now], rows)
    residuals.end()
    return from_bands(out, base, offsets, shape, span)


def read_numbers(reader: Reader, count: int) -> list[int]:
    """Return signed numbers that stand after their count, which must be as expected."""
    if reader.number() != count:
        raise DamagedError("numbers are missing")
    return golomb(reader.sized(), count) if count else []


def band_classes(energy: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return 1 + floor(2 log2 energy) less what the unit takes, from the leading bits of a float32; 0 for nothing."""
    return np.maximum((energy.astype(np.float32).view(np.int32).astype(np.int64) >> 22) - 253, 0)


def join_bands(plane: NDArray[np.int64], rows: int) -> None:
    """Fill the rows above and below a finished plane from the next bands; the outer ones repeat their own."""
    for k in range(1, HALO + 1):
        source = plane[HALO + max(rows - k, 0)].copy()
        plane[HALO - k, :, 1:], plane[HALO - k, :, 0] = source[:, :-1], plane[HALO, :, 0]
    for k in range(1, HALO + 1):
        source = plane[HALO + min(k - 1, rows - 1)].copy()
        last = HALO + rows - 1
        plane[last + k, :, :-1], plane[last + k, :, -1] = source[:, 1:], plane[last, :, -1]


def from_bands(
    banded: NDArray[np.int64], base: NDArray[np.int64] | None, offsets: NDArray[Any], shape: Shape, span: int
) -> NDArray[np.int64]:
    """Return the values of bands in their places: where rows do not come out even, the last bands have one less."""
    rows = banded.shape[1]
    full = shape[1] - BANDS * (rows - 1)
    pieces = [banded[:, : rows if band < full else rows - 1, :, band] for band in range(BANDS)]
    values = np.concatenate(pieces, 1) + (offsets[:, None, None] if base is None else base)
    return np.asarray(np.clip(values, 0, span), np.int64)


class BandResiduals:
    """The residuals of one row of all bands after the other: one range coding state per band."""

    def __init__(self, reader: Reader, columns: int, most: int) -> None:
        group, slots = read_tables(reader, 52)
        self.slots = np.array(slots, np.int64)[group]
        self.states = np.frombuffer(reader.take(4 * BANDS), "<u4").astype(np.int64)
        data = reader.sized()
        if len(data) % 2:
            raise DamagedError("half a word")
        self.words = np.frombuffer(data, "<u2").astype(np.int64)
        self.at = 0
        self.columns = columns
        bits = np.unpackbits(np.frombuffer(reader.sized(), np.uint8), bitorder="little")
        count = reader.number(most)
        self.listed = golomb(reader.sized(), count) if count else []
        self.bits = bits[: bits.size - reader.number(7)].tolist()
        self.bit = self.position = 0

    def row(self, classes: NDArray[np.int64], lanes: int) -> NDArray[np.int64]:
        """Return the residuals of a row; lanes beyond `lanes` are not coded and zero."""
        out = np.full((self.columns, BANDS), 128)
        for x in range(self.columns):
            state = self.states[:lanes]
            entry = self.slots[classes[x, :lanes], state & 4095]
            state = ((entry >> 20) + 1) * (state >> 12) + ((entry >> 8) & 4095)
            short = np.flatnonzero(state < 65536)
            if self.at + short.size > self.words.size:
                raise DamagedError("the words end too soon")
            state[short] = state[short] << 16 | self.words[self.at : self.at + short.size]
            self.at += short.size
            self.states[:lanes] = state & 0xFFFFFFFF
            out[x, :lanes] = entry & 255
        out -= 128
        for place in np.flatnonzero((out == -128) | (classes > 24)).tolist():
            out.flat[place] = self._rest(int(out.flat[place]), int(classes.flat[place]))
        return out

    def _rest(self, value: int, spread: int) -> int:
        """Return a residual with its low bits, or the listed one."""
        if value == -128:
            if self.position >= len(self.listed):
                raise DamagedError("a listed number is missing")
            value = min(max(self.listed[self.position], -(2**28)), 2**28)
            self.position += 1
        shift = (spread - 23) >> 1 if spread > 24 else 0
        if self.bit + shift > len(self.bits):
            raise DamagedError("low bits are missing")
        low = sum(bit << place for place, bit in enumerate(self.bits[self.bit : self.bit + shift]))
        self.bit += shift
        return min(max(value << shift | low, -(2**28)), 2**28) if shift else value

    def end(self) -> None:
        """Refuse what is left over."""
        whole = self.at == self.words.size and self.bit == len(self.bits) and self.position == len(self.listed)
        if not whole or np.any(self.states != 65536):
            raise DamagedError("the range coder does not end where it should")


# --------------------------------------------------------------------------------------------------------------- store


def decode_store(store: str | Path, target: str | Path) -> None:
    """Write all pixels of a store's array to a new NPY file, axes in the store's order.

    Raises
    ------
    DamagedError
        A tile or the index of a shard is missing or damaged; names the shard.
    FileExistsError
        The target exists.
    FileNotFoundError
        A file of the store is missing.
    """
    folder = Path(store) / "0"
    about = json.loads((folder / "zarr.json").read_text(encoding="utf-8"))
    shape, dtype = tuple(about["shape"]), np.dtype(about["data_type"])
    region = about["chunk_grid"]["configuration"]["chunk_shape"]
    tile = about["codecs"][0]["configuration"]["chunk_shape"]
    Path(target).touch(exist_ok=False)
    try:
        pixels = np.lib.format.open_memmap(target, "w+", dtype, shape)
        for position in product(*(range(-(-length // step)) for length, step in zip(shape, region, strict=True))):
            shard = folder.joinpath("c", *map(str, position))
            try:
                _place_tiles(pixels, shard.read_bytes(), position, region, tile)
            except DamagedError as error:
                raise DamagedError(f"{shard.relative_to(store).as_posix()}: {error}") from error
        pixels.flush()
    except BaseException:
        Path(target).unlink()
        raise


def _place_tiles(pixels: Any, shard: bytes, position: Any, region: Any, tile: Any) -> None:
    """Decode the tiles of a shard to their places.

    A shard is laid down by the Zarr specification of `sharding_indexed`: at its end an index of two little-endian
    uint64 a tile, offset and length, and the CRC-32C of the index. The last tiles of an axis may reach beyond it.
    """
    places = list(product(*(range(outer // inner) for outer, inner in zip(region, tile, strict=True))))
    end = len(shard) - 4
    begin = end - 16 * len(places)
    if begin < 0 or crc32c(shard[begin:end]) != int.from_bytes(shard[end:], "little"):
        raise DamagedError("the index of the shard is damaged")
    index = np.frombuffer(shard[begin:end], "<u8").reshape(-1, 2).tolist()
    for place, (offset, length) in zip(places, index, strict=True):
        starts = [p * r + q * t for p, r, q, t in zip(position, region, place, tile, strict=True)]
        inside = tuple(slice(a, min(a + t, n)) for a, t, n in zip(starts, tile, pixels.shape, strict=True))
        if any(part.start >= part.stop for part in inside):
            continue
        if offset == MISSING:
            raise DamagedError(f"the tile at {starts} is missing")
        decoded = decode(shard[offset : offset + length], tuple(tile), pixels.dtype)
        pixels[inside] = decoded[tuple(slice(part.stop - part.start) for part in inside)]


# --------------------------------------------------------------------------------------------------------------- tile


def decode(payload: bytes, shape: tuple[int, ...], dtype: Any) -> NDArray[Any]:
    """Return the pixels of one tile (one inner chunk of the array).

    Raises
    ------
    DamagedError
        The bytes are not those of this tile, or decode to other pixels than the encoder's.
    """
    payload, dtype = bytes(payload), np.dtype(dtype)
    if len(payload) < 9 or payload[0] != VERSION:
        raise DamagedError("not a tile of a version that this file reads")
    if crc32c(payload[5:]) != int.from_bytes(payload[1:5], "little"):
        raise DamagedError("the checksum of the bytes does not match")
    reader = Reader(payload[9:])
    little = dtype.newbyteorder("<")
    long = [1, 1, 1] + [length for length in shape if length != 1]
    whole = (prod(long[:-2]), long[-2], long[-1])
    cut = [reader.number(length - 1) for length in whole]
    last = np.frombuffer(reader.take(dtype.itemsize), little) if any(cut) else np.zeros(1, little)
    kept = (whole[0] - cut[0], whole[1] - cut[1], whole[2] - cut[2])
    inside = read_floats(reader, kept, dtype) if dtype.kind == "f" else read_integers(reader, kept, dtype)
    read_exceptions(reader, inside)
    if reader.at != len(reader.data):
        raise DamagedError("bytes are left over")
    pixels = np.full(whole, last.astype(dtype), dtype)
    pixels[: kept[0], : kept[1], : kept[2]] = inside
    named = f"{dtype.name} {'x'.join(map(str, shape))} ".encode()
    found = crc32c(pixels.astype(little, copy=False).tobytes(), crc32c(named + payload[9:33]))
    if found != int.from_bytes(payload[5:9], "little"):
        raise DamagedError("the pixels are not those that the encoder saw")
    return pixels.reshape(shape)


def read_integers(reader: Reader, shape: Shape, dtype: np.dtype[Any]) -> NDArray[Any]:
    """Return integer pixels: ``min(low + unit * value, low + width)``, in Python's numbers where 64 bits are needed."""
    low, width, tolerance = reader.signed(), reader.number(), reader.number()
    unit = 2 * tolerance + 1 if reader.number(1) else 1
    each = read_tolerances(reader, shape)
    limits = np.iinfo(dtype)
    if low < limits.min or low + width > limits.max or (unit > 1 and not 0 < 2 * tolerance < width):
        raise DamagedError("the lattice does not fit the pixel type")
    span = (width + unit // 2) // unit
    if unit == 1 and span <= WIDEST:
        value = read_array(reader, shape, span, min(tolerance, span) if each is None else each)
        return (value.astype(object) + low).astype(dtype) if dtype.itemsize == 8 else (value + low).astype(dtype)
    return (low + np.minimum(read_pieces(reader, shape, span) * unit, width)).astype(dtype)


def read_pieces(reader: Reader, shape: Shape, span: int) -> NDArray[Any]:
    """Return whole numbers up to `span` that are coded without loss, in pieces of 16 bits where 24 do not hold them."""
    if span <= WIDEST:
        return read_array(reader, shape, span, 0).astype(object)
    value = np.zeros(shape, object)
    count = -(-span.bit_length() // 16)
    for place in range(count):
        part = span >> 16 * (count - 1) if place == 0 else 2**16 - 1
        value = value * 2**16 + read_array(reader, shape, part, 0)
    return value


def read_floats(reader: Reader, shape: Shape, dtype: np.dtype[Any]) -> NDArray[Any]:
    """Return floating-point pixels: from their bits in order, or ``low + step * value`` in float64, then rounded."""
    if reader.number(1) == 0:
        reader.take(8)
        low, width = reader.number(), reader.number()
        bits = 8 * dtype.itemsize
        if low + width >= 2**bits:
            raise DamagedError("the bits do not fit the pixel type")
        order = np.minimum(read_pieces(reader, shape, width), width) + low
        top = 2 ** (bits - 1)
        return np.where(order >= top, order - top, 2**bits - 1 - order).astype(f"u{dtype.itemsize}").view(dtype)
    _, start, step = np.frombuffer(reader.take(24), "<f8").astype(np.float64)
    span, fineness = reader.number(WIDEST), reader.number(WIDEST)
    if not (np.isfinite(start) and step >= 0 and np.isfinite(step)):
        raise DamagedError("an impossible lattice")
    each = read_tolerances(reader, shape)
    value = read_array(reader, shape, span, min(fineness, span) if each is None else each)
    with np.errstate(over="ignore"):
        return np.asarray(start + step * value.astype(np.float64)).astype(dtype)


def read_tolerances(reader: Reader, shape: Shape) -> NDArray[np.int64] | None:
    """Return whole tolerances where they differ from pixel to pixel, along the axes that the first number names."""
    along = reader.number(8)
    if along == 0:
        return None
    lengths = [length if along >> axis & 1 else 1 for axis, length in enumerate(shape)]
    count = reader.number(prod(lengths))
    values = np.cumsum(golomb(reader.sized(), count))
    if count != prod(lengths) or values.min() < 0:
        raise DamagedError("the tolerances make no sense")
    return np.asarray(values.reshape(lengths), np.int64)


def read_exceptions(reader: Reader, pixels: NDArray[Any]) -> None:
    """Put the pixels that are kept bit for bit in place: runs by distance from the run before, length less 1, bits."""
    count = reader.number(pixels.size)
    if count == 0:
        return
    pairs = reader.number(2 * count)
    numbers = golomb(reader.sized(), pairs)
    size = pixels.dtype.itemsize
    bits = np.frombuffer(reader.take(count * size), f"<u{size}")
    flat = pixels.reshape(-1).view(f"u{size}")
    at = 0
    if pairs != 2 * count:
        raise DamagedError("exceptions are missing")
    for gap, more, value in zip(numbers[0::2], numbers[1::2], bits):
        if gap < 0 or more < 0 or at + gap + more >= flat.size:
            raise DamagedError("exceptions lie outside the tile")
        flat[at + gap : at + gap + more + 1] = value
        at += gap + more + 1


# ----------------------------------------------------------------------------------------------------------- checksum


def crc32c(data: bytes, seed: int = 0) -> int:
    """Return the CRC-32C (RFC 3720) of `data`, or of what has the CRC-32C `seed` followed by `data`.

    Pieces of equal length go through the table side by side; a checksum over zeros is linear, so the pieces' checksums
    are joined by the 32 by 32 matrix over GF(2) that running over one piece of zeros is.
    """
    piece = max(1, int(sqrt(len(data))) // 2)
    count = len(data) // piece
    state = seed ^ 0xFFFFFFFF
    if count > 1:
        columns = np.frombuffer(data, np.uint8, count * piece).reshape(count, piece).T
        sums = np.zeros(count, np.uint32)
        basis = np.uint32(1) << np.arange(32, dtype=np.uint32)
        for column in columns:
            sums = _TABLE[(sums ^ column) & np.uint32(0xFF)] ^ (sums >> np.uint32(8))
            basis = _TABLE[basis & np.uint32(0xFF)] ^ (basis >> np.uint32(8))
        matrix = basis.tolist()
        for value in sums.tolist():
            over = 0
            for bit in range(32):
                over ^= matrix[bit] if state >> bit & 1 else 0
            state = over ^ value
        data = data[count * piece :]
    table = _TABLE.tolist()
    for byte in data:
        state = table[(state ^ byte) & 0xFF] ^ (state >> 8)
    return state ^ 0xFFFFFFFF


def _crc_table() -> NDArray[np.uint32]:
    table = np.arange(256, dtype=np.uint32)
    for _ in range(8):
        table = np.where(table & np.uint32(1), (table >> np.uint32(1)) ^ np.uint32(0x82F63B78), table >> np.uint32(1))
    return table


_TABLE = _crc_table()


if __name__ == "__main__":
    if len(sys.argv) != 3:
        sys.exit(f"usage: python {Path(sys.argv[0]).name} STORE TARGET.npy")
    decode_store(sys.argv[1], sys.argv[2])
