"""What decoded neighbours say of a pixel: weights that fit a tile, and a tile's bytes coded with them, band by band."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound import entropy, memory
from stackbound.byteio import Reader, Writer, damaged
from stackbound.errors import PluginError
from stackbound.kernels import bandcode, bandfit, bands, rans, tables
from stackbound.kernels.bandcode import CLASSES
from stackbound.kernels.bandrows import LANES, SERIAL
from stackbound.lattice import LatticeTile
from stackbound.prediction import NeighbourPrediction, NoPrediction

memory.keep()

SHIFT = 12
"""Weights are in units of 2**-12."""

MOST_TAPS = 64
MOST_TABLES = 12
"""More save 0.1 %, and are slower to decode: fewer stay in the nearest cache."""
NOTHING = np.zeros((0, 0, 0), np.int32)
LEFT = [(0, 0, -1), (0, 0, -2), (0, 0, -3)]
ABOVE = [(0, -1, 0), (0, -1, -1), (0, -1, 1), (0, -2, 0), (0, -1, -2), (0, -1, 2), (0, -2, -1), (0, -2, 1), (0, -3, 0)]
FARTHER = [(0, -2, -2), (0, -2, 2), (0, -1, -3), (0, -1, 3), (0, -3, -1), (0, -3, 1), (0, -2, -3), (0, -2, 3)]
FARTHEST = [(0, -3, -2), (0, -3, 2), (0, -3, -3), (0, -3, 3)]
BEFORE = [
    (-1, 0, 0), (-1, 0, -1), (-1, 0, 1), (-1, -1, 0), (-1, 1, 0), (-1, -1, -1), (-1, -1, 1), (-1, 1, -1), (-1, 1, 1),
    (-1, 0, -2), (-1, 0, 2),
]  # fmt: skip
PLANE_TAPS = ABOVE + FARTHER + FARTHEST
STACK_TAPS = ABOVE + FARTHER + FARTHEST + BEFORE

FEWEST_RUNS, MOST_RUNS, PIXELS_PER_RUN = 192, 512, 4096
"""Runs of pixels on which weights are fitted: some hundred pixels per weight, and a small share of the tiles."""

ROUNDS = 3
"""More rounds of reweighting change less than 0.1 %."""


def possible(span: int, height: int) -> bool:
    """Return whether tiles of a lattice span and a number of rows can be coded in bands at all."""
    return 0 < span < 2**17 and height >= LANES


def plane_offsets(values: NDArray[np.int32]) -> NDArray[np.int64]:
    """Return a level for each plane of values (nz, ny, nx): its mean on every fourth row."""
    out = np.empty(len(values), np.int64)
    bands.plane_means(values, out)
    return out


def fit(
    tiles: Sequence[LatticeTile], bases: Sequence[NDArray[np.int32]], *, stack: bool
) -> tuple[NDArray[np.int64], NDArray[np.int32], NDArray[np.int32]]:
    """Return taps, weights and left weights that fit some tiles.

    Parameters
    ----------
    tiles : sequence of LatticeTile
    bases : sequence of ndarray
        What a transform predicts for each, or empty arrays; without it weights add up to 1, so that levels are kept.
    stack : bool
        Whether to use the plane before.
    """
    whole = not bases[0].size
    stack = stack and all(len(tile.values) > 1 for tile in tiles)
    taps = LEFT + (STACK_TAPS if stack else PLANE_TAPS)
    taps += [(0, -1, 0)] * (-(len(taps) - SERIAL) % 8)
    places = np.array(taps, np.int64)
    pixels = sum(tile.values.size for tile in tiles)
    each = -(-min(MOST_RUNS, max(FEWEST_RUNS, pixels // PIXELS_PER_RUN)) // len(tiles))
    gathered = np.empty((each * len(tiles), bandfit.RUN, len(taps) + 1))
    noises = np.empty(len(gathered))
    for number, (tile, base) in enumerate(zip(tiles, bases, strict=True)):
        nz, ny, nx = tile.values.shape
        runs = _spread_runs(each, nz - 1 if stack else nz, ny, max(1, nx - bandfit.RUN))
        runs[:, 0] += 1 if stack else 0
        offsets = np.zeros(nz, np.int64) if base.size else plane_offsets(tile.values)
        part = slice(number * each, number * each + each)
        bandfit.gather(tile.values, base, offsets, places, runs, gathered[part])
        noises[part] = tile.tolerance * (tile.tolerance + 1) / 3 + 0.03
    weights, errors = np.zeros(len(taps)), np.empty(len(gathered))
    weights[:SERIAL] = 1 / 3 if whole else 0
    products = np.empty((len(taps) + 1, len(taps) + 1))
    choices = [np.array([i for i, tap in enumerate(taps) if allowed(tap)], np.int64) for allowed in _KINDS]
    lost = 0.0
    for _ in range(ROUNDS):
        bandfit.squared_errors(gathered, weights, errors)
        busy = errors[errors > 0.01]
        # Runs far quieter than most would outweigh all others.
        floor = noises / 2 + 0.15 + 0.3 * (float(np.median(busy)) if busy.size else 0.0)
        run_weights = 1 / (errors + floor)
        bandfit.normal_equations(gathered, run_weights, products)
        lost = float((noises * run_weights).sum()) * bandfit.RUN
        bandfit.solve(products, choices[-1], lost, whole, weights)
    whole_numbers = np.zeros((len(choices), len(taps)), np.int32)
    for kind, chosen in enumerate(choices):
        bandfit.solve(products, chosen, lost, whole, weights)
        whole_numbers[kind] = np.clip(np.rint(weights * 2**SHIFT), -(2**15), 2**15)
        if whole:
            whole_numbers[kind, np.argmax(np.abs(whole_numbers[kind]))] += 2**SHIFT - whole_numbers[kind].sum()
    return places[SERIAL:], whole_numbers[:, SERIAL:].copy(), whole_numbers[:, :SERIAL].copy()


_KINDS = (
    lambda tap: tap[0] == 0 and tap[1] == 0,
    lambda tap: tap[0] == 0,
    lambda tap: tap[0] < 0 or tap[1] == 0,
    lambda tap: True,
)
"""Which neighbours there are in the first row and the others of the first plane, then of later planes."""


def _spread_runs(count: int, planes: int, rows: int, columns: int) -> NDArray[np.int64]:
    """Return places that cover a tile evenly whatever its shape: multiples of irrational numbers, modulo 1.

    The sequence of Roberts in three dimensions: the powers of the root of ``x**4 = x + 1``.
    """
    steps = np.array([0.8191725133961645, 0.6710436067037893, 0.5497004779019703])
    fractions = (0.5 + np.arange(1, count + 1)[:, None] * steps) % 1
    places: NDArray[np.int64] = (fractions * [planes, rows, columns]).astype(np.int64)
    return places


def encode(
    values: NDArray[np.int32], predicted: NDArray[np.int32], how: NeighbourPrediction, tolerance: int, span: int
) -> tuple[bytes, NDArray[np.int32]]:
    """Return the bytes of a tile and the values that the decoder will form.

    Parameters
    ----------
    values : ndarray of int32, shape (nz, ny, nx)
    predicted : ndarray of int32
        What a transform predicts, or an empty array.
    how : NeighbourPrediction
    tolerance, span : int
    """
    walked = _walk(values, predicted, how, tolerance, span)
    writer = Writer()
    _write_how(writer, walked.how)
    for offset in walked.offsets.tolist() if not predicted.size else []:
        writer.number(offset)
    writer.number(walked.first_class)
    present = _present(len(values), values.shape[1])
    _write_residuals(writer, walked.residuals, walked.classes, present, values.shape[2] * LANES)
    out = np.empty(values.shape, np.int32)
    bands.from_bands(walked.decoded, predicted, walked.offsets, span, out)
    return bytes(writer.data), out


def estimate(
    values: NDArray[np.int32], predicted: NDArray[np.int32], how: NeighbourPrediction, tolerance: int, span: int
) -> float:
    """Return about how many bits the residuals of a tile take: their entropy by class, without tables."""
    walked = _walk(values, predicted, how, tolerance, span)
    classes, residuals = walked.classes, walked.residuals
    counts = np.zeros((2, CLASSES * tables.SYMBOLS), np.uint32)
    symbols, present = np.empty(residuals.shape, np.uint8), _present(len(values), values.shape[1])
    wide = bandcode.split(residuals, classes, present, values.shape[2] * LANES, symbols, counts)
    histogram = (counts[0] + counts[1]).reshape(CLASSES, -1).astype(np.float64)
    seen = histogram[histogram.any(1)]
    shares = seen / seen.sum(1, keepdims=True)
    bits = -float((seen * np.log2(shares, where=shares > 0, out=np.zeros_like(shares))).sum())
    return bits + (bandcode.low_bits(classes) + 24 * float(histogram[:, 0].sum()) if wide else 0.0)


@dataclass(frozen=True)
class _Walked:
    """What walking through a tile gives the encoder."""

    how: NeighbourPrediction
    offsets: NDArray[np.int64]
    decoded: NDArray[np.int32]
    residuals: NDArray[np.int32]
    classes: NDArray[np.uint8]
    first_class: int


def _walk(
    values: NDArray[np.int32], predicted: NDArray[np.int32], how: NeighbourPrediction, tolerance: int, span: int
) -> _Walked:
    nz, ny, nx = values.shape
    offsets = np.zeros(nz, np.int64) if predicted.size else plane_offsets(values)
    banded = np.empty((nz, -(-ny // LANES), nx, LANES), np.int32)
    bands.to_bands(values, predicted, offsets, banded)
    bottom, top = _range(offsets, predicted, span)
    checked = check(how, bottom, top)
    residuals, classes = np.empty(banded.size, np.int32), np.empty(banded.size, np.uint8)
    first_class = bands.walk(
        banded, residuals, classes, _present(nz, ny), checked.taps, checked.weights, checked.left, SHIFT, checked.alone,
        checked.clamped, 2 * tolerance + 1, bottom, top, False, 0, *_NO_BYTES,
    )  # fmt: skip
    return _Walked(checked, offsets, banded, residuals, classes, first_class)


_NO_BYTES = (
    np.zeros(1, np.int64), np.zeros(1, np.uint32), np.zeros(1, np.uint16), np.zeros(1, np.uint32),
    np.zeros(0, np.uint8), np.zeros(0, np.int64),
)  # fmt: skip
"""What walking needs to decode, when it encodes."""


def decode(
    reader: Reader, predicted: NDArray[np.int32], shape: tuple[int, int, int], tolerance: int, span: int
) -> NDArray[np.int32]:
    """Return the values of a tile (nz, ny, nx)."""
    nz, ny, nx = shape
    if not possible(span, ny):
        raise damaged("a tile of this shape or range is not coded in bands")
    how = _read_how(reader)
    offsets = np.array([0 if predicted.size else reader.number(span) for _ in range(nz)], np.int64)
    first = reader.number(CLASSES - 1)
    bottom, top = _range(offsets, predicted, span)
    how = check(how, bottom, top, damaged)
    group, slots = entropy.read_tables(reader, CLASSES)
    words, states = entropy.read_words(reader, LANES)
    bits = np.unpackbits(np.frombuffer(reader.sized(), np.uint8), bitorder="little")
    listed = entropy.read_numbers(reader, nz * ny * nx)
    spare_bits = reader.number(7)
    bits = bits[: bits.size - spare_bits]
    rows = -(-ny // LANES)
    banded = np.empty((nz, rows, nx, LANES), np.int32)
    row = np.empty(nx * LANES, np.int32)
    used = bands.walk(
        banded, row, np.empty(row.size, np.uint8), _present(nz, ny), how.taps, how.weights, how.left, SHIFT, how.alone,
        how.clamped, 2 * tolerance + 1, bottom, top, True, first, group.astype(np.int64) * tables.TOTAL,
        slots.reshape(-1), words, states, bits, listed,
    )  # fmt: skip
    if used != words.size - LANES or np.any(states != rans.LOW):
        raise damaged("the range coder does not end where it should")
    out = np.empty(shape, np.int32)
    bands.from_bands(banded, predicted, offsets, span, out)
    return out


def _range(offsets: NDArray[np.int64], predicted: NDArray[np.int32], span: int) -> tuple[int, int]:
    """Return the smallest and largest number that there can be in the bands."""
    if predicted.size:
        return -span, span
    return -int(offsets.max()), span - int(offsets.min())


def check(how: NeighbourPrediction, bottom: int, top: int, error: Any = PluginError) -> NeighbourPrediction:
    """Return the numbers as decoders use them, if they can: places already decoded, sums within 32 bits."""
    taps, weights, left = how.taps, how.weights, how.left
    count = len(taps)
    if taps.shape != (count, 3) or weights.shape != (4, count) or left.shape != (4, SERIAL) or count % 8:
        raise error(f"weights of shape {weights.shape} and {left.shape} do not fit {taps.shape} neighbours")
    known = ((taps[:, 0] == 0) & (taps[:, 1] < 0)) | (taps[:, 0] == -1)
    if count > MOST_TAPS or not known.all() or np.abs(taps).max(initial=0) > bands.HALO:
        raise error("a neighbour is not decoded before the pixel, or too far away")
    largest = max(abs(bottom), abs(top), 1)
    sums = np.abs(weights.astype(np.int64)).sum(1) + np.abs(left.astype(np.int64)).sum(1)
    if bottom > top or int(sums.max()) * largest + 2**SHIFT >= 2**31:
        raise error("the weights of the neighbours are so large that sums would not be exact")
    return how


def _present(planes: int, height: int) -> NDArray[np.uint8]:
    """Return how many lanes each row of the bands codes."""
    rows = -(-height // LANES)
    lanes = np.full((planes, rows), LANES, np.uint8)
    lanes[:, -1] = height - LANES * (rows - 1)
    return lanes.reshape(-1)


def _write_how(writer: Writer, how: NeighbourPrediction) -> None:
    writer.number(2 * how.alone + how.clamped)
    writer.number(len(how.taps) // 8)
    entropy.write_numbers(writer, how.taps.reshape(-1))
    entropy.write_numbers(writer, np.concatenate([how.left, how.weights], 1).astype(np.int64).reshape(-1))


def _read_how(reader: Reader) -> NeighbourPrediction:
    flags, count = reader.number(3), 8 * reader.number(MOST_TAPS // 8)
    taps, weights = entropy.read_numbers(reader, 3 * count), entropy.read_numbers(reader, 4 * (count + SERIAL))
    if taps.size != 3 * count or weights.size != 4 * (count + SERIAL) or np.abs(weights).max() >= 2**31:
        raise damaged("neighbours or weights are missing")
    numbers = weights.reshape(4, -1).astype(np.int32)
    return NeighbourPrediction(
        NoPrediction(), taps.reshape(-1, 3).astype(np.int64), numbers[:, SERIAL:].copy(), numbers[:, :SERIAL].copy(),
        alone=flags >= 2, clamped=flags % 2 == 1,
    )  # fmt: skip


def _write_residuals(
    writer: Writer, residuals: NDArray[np.int32], classes: NDArray[np.uint8], present: NDArray[np.uint8], row: int
) -> None:
    symbols = np.empty(residuals.shape, np.uint8)
    counts = np.zeros((2, CLASSES * tables.SYMBOLS), np.uint32)
    wide = bandcode.split(residuals, classes, present, row, symbols, counts)
    histogram = (counts[0] + counts[1]).reshape(CLASSES, tables.SYMBOLS)
    far = int(histogram[:, 0].sum())
    group, frequencies = entropy.write_tables(writer, histogram, MOST_TABLES)
    starts, reciprocals = np.zeros(frequencies.shape, np.uint32), np.zeros(frequencies.shape, np.uint64)
    rans.prepare(frequencies.astype(np.uint32), starts, reciprocals)
    intervals = (frequencies.astype(np.uint64) << np.uint64(16)) | starts
    words, states = np.empty((symbols.size + 1,), np.uint16), np.empty(LANES, np.uint64)
    begin = bandcode.encode(
        symbols, classes, present, row, group.astype(np.int64) * tables.SYMBOLS, intervals.reshape(-1),
        reciprocals.reshape(-1), words, states,
    )  # fmt: skip
    writer.data += states.astype("<u4").tobytes()
    writer.sized(words[begin:].astype("<u2").tobytes())
    bits, listed = np.empty(0, np.uint8), np.empty(0, np.int64)
    if wide:
        bits = np.empty(bandcode.low_bits(classes), np.uint8)
        listed = np.empty(far, np.int64)
        bandcode.split_rest(residuals, classes, symbols, bits, listed)
    writer.sized(np.packbits(bits, bitorder="little").tobytes())
    entropy.write_numbers(writer, listed)
    writer.number(-bits.size % 8)
