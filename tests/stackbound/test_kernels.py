"""Kernels against plain arithmetic: widths, exactness at the extremes, generated code."""

from __future__ import annotations

import tracemalloc
from itertools import product
from math import prod
from pathlib import Path

import numpy as np
import pytest
from codec_strategies import neighbour_coder, plain_coder
from hypothesis import given, settings
from hypothesis import strategies as st
from stackbound.kernels import flatten
from stackbound.kernels.basis import COEFFICIENT_LIMIT, LENGTHS, SCALE_BITS, cosine, fraction_bits, unit, widest
from stackbound.kernels.bound import reconstruct, residual
from stackbound.kernels.frequencies import scan
from stackbound.kernels.inverse import predict
from stackbound.kernels.tables import FRACTIONS, levels, rescale, share
from stackbound.lattice import SPAN_LIMIT

BLOCKS = [(bz, by, bx) for bz, by, bx in product(LENGTHS, repeat=3) if bz <= 16]


@pytest.mark.parametrize("kind", ["forward", "inverse"])
def test_flat_kernels_are_what_their_generator_writes(kind: str) -> None:
    """The generated modules in the package are those that `flatten` writes."""
    path = Path(flatten.__file__).with_name(f"{kind}_flat.py")

    assert path.read_text(encoding="utf-8") == flatten.source(kind)


def test_every_partial_sum_is_exact() -> None:
    """For every block shape no coefficients within the limit can cause a sum of 2**53 or more."""
    assert all(widest([cosine(side) for side in block]) < 2**53 for block in BLOCKS)
    assert widest([cosine(side) for side in (16, 32, 32)]) > 2**52


def test_limit_holds_every_honest_coefficient() -> None:
    """The largest coefficient of the widest span of each kind lies within the limit."""
    for span in (255, 65535, 2**20 - 1, SPAN_LIMIT):
        for block in BLOCKS:
            # Half the span on every pixel: the mean's coefficient is span / 2 * sqrt(pixels).
            assert span / 2 * prod(block) ** 0.5 * unit(block, span) <= COEFFICIENT_LIMIT


@pytest.mark.parametrize("block", [(1, 1, 2), (1, 8, 8), (2, 4, 16), (16, 2, 2), (1, 32, 4), (4, 8, 8)])
@pytest.mark.parametrize("kind", ["extreme", "random", "small"])
def test_inverse_equals_whole_number_arithmetic(block: tuple[int, int, int], kind: str) -> None:
    """The inverse in float64 is the inverse in Python's whole numbers, rounded half to even, at the extremes too."""
    rng = np.random.default_rng(prod(block))
    limits = {"extreme": COEFFICIENT_LIMIT, "random": COEFFICIENT_LIMIT, "small": 4000}
    indices = rng.integers(-limits[kind], limits[kind], (prod(block), 3), endpoint=True).astype(np.int32)
    if kind == "extreme":
        indices = (np.sign(indices) * COEFFICIENT_LIMIT).astype(np.int32)
    shape = (block[0], block[1], 3 * block[2])
    found = predict(indices, np.ones(prod(block), np.int64), block, ("dct", "dct", "dct"), 65535, shape)
    data = indices.astype(object).reshape(*block, 3)
    for axis, side in enumerate(block):
        if side > 1:
            sums = np.tensordot(cosine(side).astype(object), data, ([0], [axis]))
            data = np.moveaxis(_half_even(sums, SCALE_BITS), 0, axis)
    expected = np.clip(_half_even(data, fraction_bits(65535)) + 32768, 0, 65535)

    assert np.array_equal(found.reshape(block[0], block[1], 3, block[2]), expected.transpose(0, 1, 3, 2).astype(int))


def _half_even(values: np.ndarray, bits: int) -> np.ndarray:
    """Divide whole numbers by 2**bits and round half to even."""
    down, rest = values // 2**bits, values % 2**bits
    half = 2 ** (bits - 1)
    return np.where((rest > half) | ((rest == half) & (down % 2 == 1)), down + 1, down)


@settings(max_examples=200, deadline=None)
@given(st.integers(0, 2**23), st.integers(0, 2**32))
def test_residual_is_the_nearest_whole_number(tolerance: int, seed: int) -> None:
    """Residual and reconstruction are those of whole-number division for every odd width and the widest spans."""
    rng = np.random.default_rng(seed)
    values, predicted = rng.integers(0, SPAN_LIMIT, (2, 1, 1, 64), endpoint=True).astype(np.int32)
    out = np.empty_like(values)
    wide = 2 * tolerance + 1
    residual(values, predicted, wide, out)

    assert np.array_equal(out, (values.astype(np.int64) - predicted + tolerance) // wide)

    reconstruct(predicted, out, wide, SPAN_LIMIT, out)

    assert np.abs(out.astype(np.int64) - values).max() <= tolerance


@pytest.mark.parametrize("block", [(1, 1, 1), (1, 8, 8), (4, 16, 16), (16, 1, 2)])
def test_scan_foretells_from_what_is_known(block: tuple[int, int, int]) -> None:
    """Every frequency comes once, after all lower frequencies that foretell it; bands go up one by one."""
    found = scan(block)
    place_of = np.argsort(found.order)

    assert sorted(found.order) == list(range(prod(block)))
    for place in range(prod(block)):
        known = found.neighbours[place][found.weights[place] > 0]
        assert (place_of[known] < place).all()
    assert set(np.diff(found.bands)) <= {0, 1}


@settings(max_examples=100, deadline=None)
@given(st.integers(0, 2**32), st.integers(1, 33))
def test_tables_are_whole(seed: int, tables: int) -> None:
    """Shared tables code every counted symbol, add up to 4096, and go over into levels and back."""
    rng = np.random.default_rng(seed)
    histogram = np.where(rng.random((tables, 256)) < 0.1, rng.integers(0, 10**6, (tables, 256)), 0).astype(np.uint32)
    group = np.zeros(tables, np.uint8)
    counted = histogram.copy()
    groups = share(histogram, group, FRACTIONS, 12)
    frequencies = histogram[:groups].astype(np.int64)
    levels(frequencies, groups, np.empty(groups * 258, np.int64))

    assert groups <= 12
    assert (frequencies.sum(1) == 4096).all()
    assert (frequencies[group][counted > 0] > 0).all()


def test_scaling_keeps_rare_symbols() -> None:
    """A symbol that occurs once among millions keeps a frequency of 1, paid for by the most frequent."""
    frequencies = np.full(256, 1, np.int64)
    frequencies[7] = 10**7
    rescale(frequencies)

    assert frequencies.sum() == 4096
    assert frequencies[7] == 4096 - 255


@pytest.mark.parametrize("tolerance", [0, 4])
def test_memory_stays_within_the_promise(tolerance: int) -> None:
    """Encoding takes at most 24 bytes per pixel beyond the tile (arrays of numpy; kernels hold some rows besides)."""
    rng = np.random.default_rng(6)
    pixels = rng.normal(900, 9, (8, 192, 192)).astype(np.uint16)
    for coder in (plain_coder(block=[1, 16, 16], step=6), neighbour_coder(base=True), neighbour_coder(base=False)):
        planned = coder.planned([pixels], [tolerance])
        planned.encode(pixels, tolerance)
        tracemalloc.start()
        planned.encode(pixels, tolerance)
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()

        assert peak <= 24 * pixels.size
