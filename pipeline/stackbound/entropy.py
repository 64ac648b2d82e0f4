"""Residuals and indices to bytes and back: classes, tables, range-coded symbols, low bits, listed numbers."""

from __future__ import annotations

from math import prod
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.byteio import Reader, Writer, damaged
from stackbound.kernels import coefficients, golomb, neighbourclass, rans, spread, tables
from stackbound.kernels.frequencies import scan

TABLES = spread.DIRECT
HIGHEST_BAND_CLASS = spread.TOP - len(coefficients.RATIOS)


class _Split:
    """Residuals under one choice of classes, and about how many bits they and the classes take."""

    def __init__(self, residuals: NDArray[np.int32], classes: NDArray[np.uint8]) -> None:
        nz, ny, _ = residuals.shape
        runs = classes.shape[2]
        self.symbols = np.empty((nz * ny, runs * spread.CELL), np.uint8)
        self.run_tables = np.empty((nz * ny, runs), np.uint8)
        self.histogram = np.zeros((TABLES, tables.SYMBOLS), np.uint32)
        self.bits, self.listed = spread.split(residuals, classes, self.symbols, self.run_tables, self.histogram)
        coded = tables.costs(self.histogram, tables.FRACTIONS) + tables.costs(
            class_counts(classes)[2], tables.FRACTIONS
        )
        self.cost = (coded >> 12) + self.bits + 16 * self.listed


def encode_residuals(residuals: NDArray[np.int32]) -> bytes:
    """Return the bytes of the residuals of a tile.

    Parameters
    ----------
    residuals : ndarray of int32, shape (nz, ny, nx)
    """
    nz, ny, nx = residuals.shape
    own = np.empty((nz, -(-ny // spread.CELL), -(-nx // spread.CELL)), np.uint8)
    spread.cell_classes(residuals, own)
    writer = Writer()
    if not own.any():
        writer.number(0)
        return bytes(writer.data)
    writer.number(1)
    # Numbers that are alike all over need no class per cell: one for all costs next to nothing to say.
    alike = np.full_like(own, spread.mean_class(residuals))
    classes, split = min(((each, _Split(residuals, each)) for each in (own, alike)), key=lambda pair: pair[1].cost)
    _write_classes(writer, classes)
    low_bits, far = np.zeros(-(-split.bits // 8), np.uint8), np.empty(split.listed, np.int64)
    if split.bits or split.listed:
        spread.split_rest(residuals, classes, low_bits, far)
    symbols, run_tables, histogram = split.symbols, split.run_tables, split.histogram
    group, frequencies = write_tables(writer, histogram)
    _write_words(writer, rans.encode_runs, symbols, _grouped(run_tables, group), nx, frequencies)
    writer.sized(low_bits.tobytes())
    write_numbers(writer, far)
    return bytes(writer.data)


def decode_residuals(reader: Reader, shape: tuple[int, int, int]) -> NDArray[np.int32]:
    """Return the residuals of a tile (nz, ny, nx)."""
    nz, ny, nx = shape
    if reader.number(1) == 0:
        return np.zeros(shape, np.int32)
    classes = np.empty((nz, -(-ny // spread.CELL), -(-nx // spread.CELL)), np.uint8)
    _read_classes(reader, classes)
    group, slots = read_tables(reader)
    words, states = read_words(reader)
    out = np.empty((nz * ny, nx), np.int32)
    run_tables = np.empty((nz * ny, classes.shape[2]), np.uint8)
    spread.run_tables(classes, group, ny, run_tables)
    used = rans.decode_runs(run_tables, nx, slots, words, states, out)
    if used != words.size - rans.STATES or np.any(states != rans.LOW):
        raise damaged("the range coder does not end where it should")
    low_bits = np.frombuffer(reader.sized(), np.uint8)
    far = read_numbers(reader, nz * ny * nx)
    residuals = out.reshape(shape)
    if (
        low_bits.size or far.size or classes.max(initial=0) > spread.DIRECT or out.min(initial=0) == -128
    ) and spread.join_rest(residuals, classes, low_bits, far):
        raise damaged("low bits or listed numbers do not fit the symbols")
    return residuals


def encode_indices(indices: NDArray[np.int32], block: tuple[int, int, int], grid: tuple[int, int, int]) -> bytes:
    """Return the bytes of the indices of a tile.

    Parameters
    ----------
    indices : ndarray of int32, shape (bz*by*bx, at least nz*ny*nx)
        Magnitudes at most 2**30.
    block : tuple of int
        (bz, by, bx).
    grid : tuple of int
        Blocks along z, y and x.
    """
    order = scan(block)
    work = np.array(indices[:, : prod(grid)], np.int32, order="C")
    coefficients.median_predict(work[0].reshape(grid).copy(), work[0].reshape(grid))
    writer = Writer()
    last = np.empty(prod(grid), np.uint8)
    coefficients.last_bands(work, order.order, order.bands, last.size, last)
    if not last.any():
        writer.number(0)
        return bytes(writer.data)
    writer.number(1)
    _write_classes(writer, last.reshape(grid))
    classes = np.empty(int(order.bands[-1]) + 1, np.int64)
    coefficients.band_means(work, order.order, order.bands, last, classes)
    write_numbers(writer, np.diff(classes[: last.max()], prepend=0))
    reached = (last[:, None] > np.arange(len(classes))).sum(0)
    sizes = (-(-reached // 8) * 8)[order.bands]
    symbols, tabs = np.empty(int(sizes.sum()), np.uint8), np.empty(int(sizes.sum()), np.uint8)
    histogram = np.zeros((TABLES, tables.SYMBOLS), np.uint32)
    # The most low bits that the classes above each band's allow.
    tops = np.maximum(classes + len(coefficients.RATIOS) - coefficients.BELOW - spread.DIRECT + 1, 0) // 2
    low_bits = np.zeros(int((tops[order.bands] * sizes).sum()) // 8 + 1, np.uint8)
    # Only what is beyond a symbol by itself can be listed.
    listed = np.empty(int(np.count_nonzero(work > 127) + np.count_nonzero(work < -127)), np.int64)
    size, bits, far = coefficients.split_indices(
        work, order.order, order.neighbours, order.weights, order.bands, classes, _means(order, classes),
        np.array(grid), last, symbols, tabs, histogram, low_bits, listed,
    )  # fmt: skip
    group, frequencies = write_tables(writer, histogram)
    _write_words(writer, rans.encode, symbols[:size], _grouped(tabs[:size], group), rans.STATES, frequencies)
    writer.sized(low_bits[: -(-bits // 8)].tobytes())
    write_numbers(writer, listed[:far])
    return bytes(writer.data)


def decode_indices(reader: Reader, block: tuple[int, int, int], grid: tuple[int, int, int]) -> NDArray[np.int32]:
    """Return the indices of a tile, shape (bz*by*bx, blocks)."""
    order = scan(block)
    indices = np.zeros((len(order.order), prod(grid)), np.int32)
    if reader.number(1) == 0:
        return indices
    last = np.empty(prod(grid), np.uint8)
    _read_classes(reader, last.reshape(grid))
    bands = int(order.bands[-1]) + 1
    if last.max() > bands:
        raise damaged("a block has too many bands")
    classes = np.zeros(bands, np.int64)
    given = np.cumsum(read_numbers(reader, bands))
    if len(given) != last.max() or given.min(initial=0) < 0 or given.max(initial=0) > HIGHEST_BAND_CLASS:
        raise damaged("a band has an impossible class")
    classes[: len(given)] = given
    group, slots = read_tables(reader)
    words, states = read_words(reader)
    low_bits = np.frombuffer(reader.sized(), np.uint8)
    listed = read_numbers(reader, indices.size)
    wrong = coefficients.join_indices(
        order.order, order.neighbours, order.weights, order.bands, classes, _means(order, classes), np.array(grid),
        last, group, slots, words, states, low_bits, listed, indices,
    )  # fmt: skip
    if wrong or np.any(states != rans.LOW):
        raise damaged("the range coder does not end where it should")
    coefficients.median_restore(indices[0].reshape(grid))
    return indices


def _means(order: Any, classes: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return the mean magnitude (units of 2**-12) that the class of its band stands for, by raster index."""
    halves = (np.int64(181) << np.maximum(classes - 1, 0) // 2) >> 7  # sqrt(2) * 2**octave, the upper half's start
    values = np.where(classes % 2 == 0, halves, np.int64(1) << np.maximum(classes - 1, 0) // 2)
    values = np.where(classes > 0, values, 0)
    means = np.empty(len(order.order), np.int64)
    means[order.order] = values[order.bands]
    return means


def _grouped(numbers: NDArray[np.uint8], group: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """Return the shared table of each table number, leaving "not coded" alone."""
    lookup = np.full(256, rans.SKIP, np.uint8)
    lookup[: len(group)] = group
    return lookup[numbers]


def class_counts(classes: NDArray[np.uint8]) -> tuple[NDArray[np.uint8], NDArray[np.uint8], NDArray[np.uint32]]:
    """Return symbol and context of each class, and how often each symbol occurs in each context."""
    symbols, contexts = np.empty(classes.size, np.uint8), np.empty(classes.size, np.uint8)
    neighbourclass.split(classes, symbols, contexts)
    histogram = np.zeros((neighbourclass.CONTEXTS, tables.SYMBOLS), np.uint32)
    np.add.at(histogram, (contexts, symbols), 1)
    return symbols, contexts, histogram


def _write_classes(writer: Writer, classes: NDArray[np.uint8]) -> None:
    symbols, contexts, histogram = class_counts(classes)
    group, frequencies = write_tables(writer, histogram)
    padded = np.full(-(-classes.size // 8) * 8, rans.SKIP, np.uint8)
    padded[: classes.size] = group[contexts]
    symbols = np.resize(symbols, padded.size)
    _write_words(writer, rans.encode, symbols, padded, 1, frequencies)


def _read_classes(reader: Reader, classes: NDArray[np.uint8]) -> None:
    group, slots = read_tables(reader, neighbourclass.CONTEXTS)
    words, states = read_words(reader, 1)
    used = neighbourclass.decode(group, slots, words, states, classes)
    if used != words.size - rans.STATES or states[0] != rans.LOW:
        raise damaged("the classes do not end where they should")


def write_tables(
    writer: Writer, histogram: NDArray[np.uint32], most: int = 256
) -> tuple[NDArray[np.uint8], NDArray[np.int64]]:
    """Write the tables for a histogram; return the group of each table and the frequencies of each group."""
    group = np.zeros(len(histogram), np.uint8)
    groups = tables.share(histogram, group, tables.FRACTIONS, most)
    frequencies = histogram[:groups].astype(np.int64)
    numbers = np.empty(groups * (tables.SYMBOLS + 2), np.int64)
    count = tables.levels(frequencies, groups, numbers)
    writer.number(groups)
    writer.data += np.packbits(np.diff(group, prepend=0).astype(np.uint8), bitorder="little").tobytes()
    writer.number(count)
    _write_bits(writer, numbers[:count])
    return group, frequencies


def read_tables(reader: Reader, count: int = TABLES) -> tuple[NDArray[np.uint8], NDArray[np.uint32]]:
    """Return the group of each table and the decoding slots of each group."""
    groups = reader.number(count)
    starts = np.frombuffer(reader.take(-(-count // 8)), np.uint8)
    group = np.cumsum(np.unpackbits(starts, count=count, bitorder="little"), dtype=np.uint8)
    numbers = _read_bits(reader, reader.number(groups * (tables.SYMBOLS + 2)))
    frequencies = np.zeros((groups, tables.SYMBOLS), np.int64)
    if group[-1] >= groups or tables.from_levels(numbers, groups, frequencies) != numbers.size:
        raise damaged("a frequency table makes no sense")
    slots = np.empty((groups, tables.TOTAL), np.uint32)
    rans.slots(frequencies.astype(np.uint32), slots)
    return group, slots


def _write_words(
    writer: Writer, code: Any, symbols: Any, numbers: Any, last: int, frequencies: NDArray[np.int64]
) -> None:
    """Range-code symbols and write states and words. `last` is the coder's width or number of states."""
    starts = np.zeros(frequencies.shape, np.uint32)
    reciprocals = np.zeros(frequencies.shape, np.uint64)
    counts = frequencies.astype(np.uint32)
    rans.prepare(counts, starts, reciprocals)
    words = np.empty(symbols.size, np.uint16)
    states = np.zeros(rans.STATES, np.uint32)
    begin = code(symbols, numbers, last, counts, starts, reciprocals, words, states)
    used = last if code is rans.encode else rans.STATES
    writer.data += states[:used].astype("<u4").tobytes()
    writer.sized(words[begin:].astype("<u2").tobytes())


def read_words(reader: Reader, states: int = rans.STATES) -> tuple[NDArray[np.uint16], NDArray[np.uint32]]:
    """Return the words with spare ones at the end, and the states."""
    initial = np.frombuffer(reader.take(4 * states), "<u4").astype(np.uint32)
    data = reader.sized()
    if len(data) % 2:
        raise damaged("half a word")
    spare = np.zeros(max(states, rans.STATES), np.uint16)
    return np.concatenate([np.frombuffer(data, "<u2").astype(np.uint16), spare]), initial


def write_numbers(writer: Writer, numbers: NDArray[np.int64]) -> None:
    """Write signed numbers after their count."""
    writer.number(len(numbers))
    if len(numbers):
        _write_bits(writer, numbers)


def read_numbers(reader: Reader, most: int) -> NDArray[np.int64]:
    """Read at most so many signed numbers."""
    count = reader.number(most)
    return _read_bits(reader, count) if count else np.zeros(0, np.int64)


def _write_bits(writer: Writer, numbers: NDArray[np.int64]) -> None:
    bits = np.empty(72 * len(numbers), np.uint8)
    writer.sized(np.packbits(bits[: golomb.write(numbers, bits)], bitorder="little").tobytes())


def _read_bits(reader: Reader, count: int) -> NDArray[np.int64]:
    data = np.frombuffer(reader.sized(), np.uint8)
    if count > 8 * len(data):
        raise damaged("a list of numbers ends too soon")
    bits = np.unpackbits(data, bitorder="little")
    numbers = np.empty(count, np.int64)
    used = golomb.read(bits, numbers)
    if used < 0 or -(-used // 8) != len(data):
        raise damaged("a list of numbers does not end where it should")
    return numbers
