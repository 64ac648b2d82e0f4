"""The residual, the range coder and the whole entropy coding against published values."""

from __future__ import annotations

import numpy as np
import pytest
from stackbound.kernels import golomb
from stackbound.kernels.bound import reconstruct, residual
from stackbound.tilecodec import TileCoder
from stackbound_stages.none import PredictNone
from stackbound_stages.rans import Rans

# Exact entropies, in bits, of N(0, 1) and of the Laplace density of variance 1 in bins of width D centred on 0
# (definition of entropy; H ~ h - log2 D for small D: Gish & Pierce, IEEE Trans. Information Theory 14, 1968).
ENTROPIES = [
    ("normal", 0.25, 4.050843), ("normal", 0.5, 3.061969), ("normal", 1, 2.104833), ("normal", 2, 1.241196),
    ("normal", 4, 0.312466), ("laplace", 0.25, 3.949276), ("laplace", 0.5, 2.965771), ("laplace", 1, 2.014208),
    ("laplace", 2, 1.126990), ("laplace", 4, 0.384980),
]  # fmt: skip


@pytest.mark.parametrize(("density", "width", "entropy"), ENTROPIES)
def test_coder_reaches_entropy(density: str, width: float, entropy: float) -> None:
    """Independent numbers take at least their entropy less three standard errors, and at most 2 % and tables more."""
    rng = np.random.default_rng(11)
    values = rng.normal(size=2**20) if density == "normal" else rng.laplace(scale=0.5**0.5, size=2**20)
    bins = np.rint(values / width).astype(np.int16).reshape(1024, 1024)
    bits = 8 * len(TileCoder(PredictNone(), Rans()).encode(bins, 0)) / bins.size
    _, counts = np.unique(bins, return_counts=True)
    information = -np.log2(counts / bins.size)
    error = (np.average(information**2, weights=counts) - np.average(information, weights=counts) ** 2) ** 0.5 / 1024

    assert entropy - 3 * error <= bits <= 1.02 * entropy + 0.002


@pytest.mark.parametrize("near", [0, 1, 3, 10, 255])
def test_residual_is_that_of_near_lossless_coding(near: int) -> None:
    """Quantized errors and their reconstruction are those of ITU-T T.87 (ISO/IEC 14495-1) for a parameter NEAR."""
    errors = np.arange(-600, 601, dtype=np.int32).reshape(1, 1, -1)
    predicted = np.full_like(errors, 1000)
    out = np.empty_like(errors)
    residual(predicted + errors, predicted, 2 * near + 1, out)
    expected = np.where(errors > 0, (errors + near) // (2 * near + 1), -((near - errors) // (2 * near + 1)))

    assert np.array_equal(out, expected)

    reconstruct(predicted, out, 2 * near + 1, 4095, out)

    assert np.abs(out - (predicted + errors)).max() == near


def test_near_lossless_examples() -> None:
    """NEAR 3: errors 10, -10, 4, 3 become 1, -1, 1, 0 (ITU-T T.87, from memory)."""
    out = np.empty((1, 1, 4), np.int32)
    residual(np.array([[[110, 90, 104, 103]]], np.int32), np.full((1, 1, 4), 100, np.int32), 7, out)

    assert out.ravel().tolist() == [1, -1, 1, 0]


def test_range_coding_example() -> None:
    """M = 4, f(A) = 3, f(B) = 1: from state 5, A leads to 6 and B to 23 (Duda, arXiv:1311.2540)."""
    # The same recurrence at the scale of 12 bits: frequencies 3072 and 1024, from a state 5 * 2**20.
    from stackbound.kernels import rans

    frequencies = np.zeros((1, 256), np.uint32)
    frequencies[0, :2] = 3072, 1024
    starts, reciprocals = np.zeros((1, 256), np.uint32), np.zeros((1, 256), np.uint64)
    rans.prepare(frequencies, starts, reciprocals)
    for state in (65536, 5 * 2**20, 2**30 - 1):
        for symbol, (f, c) in enumerate(((3072, 0), (1024, 3072))):
            quotient = (state * int(reciprocals[0, symbol])) >> 44
            assert starts[0, symbol] == c
            assert quotient == state // f
    # The published example itself, by the same formula.
    assert (5 // 3) * 4 + 5 % 3 + 0 == 6
    assert (5 // 1) * 4 + 5 % 1 + 3 == 23


def rice_length(number: int, parameter: int) -> int:
    """Return the bits of a number's Golomb-Rice code: the quotient in unary with its end, and the remainder."""
    return (number >> parameter) + 1 + parameter


# S. W. Golomb, IEEE Trans. Information Theory 12:399, 1966; best Rice parameters after Gallager & Van Voorhis 1975:
# mean length of the best code for P(k) = (1 - theta) theta**k.
@pytest.mark.parametrize(
    ("theta", "best", "mean"), [(0.5, 0, 2.0), (0.7, 1, 2.96078), (0.9, 3, 4.75583), (0.95, 4, 5.78612)]
)
def test_golomb_codes(theta: float, best: int, mean: float) -> None:
    """Codes are as long as Golomb-Rice codes are under the stated rule for the parameter, and come back.

    The rule is that of ISO/IEC 14495-1, clause A.5, with counts halved at 16. The lengths themselves are held against
    the published means: under the best parameter the sample's mean is within three standard errors of them.
    """
    rng = np.random.default_rng(3)
    folded = rng.geometric(1 - theta, 50_000) - 1
    values = np.where(folded % 2 == 0, folded // 2, -((folded + 1) // 2)).astype(np.int64)
    fixed = [rice_length(number, best) for number in folded.tolist()]
    expected, total, count = 0, 4, 1
    for number in folded.tolist():
        expected += rice_length(number, next(k for k in range(41) if count * 2**k >= total))
        total, count = total + number, count + 1
        if count == 16:
            total, count = total // 2, count // 2
    bits = np.empty(72 * values.size, np.uint8)
    used = golomb.write(values, bits)
    back = np.empty_like(values)

    assert abs(np.mean(fixed) - mean) < 3 * np.std(fixed) / values.size**0.5
    assert expected == used == golomb.read(bits[:used], back)
    assert np.array_equal(values, back)


def test_signed_numbers_are_folded() -> None:
    """0, -1, 1, -2, 2 become 0, 1, 2, 3, 4 (Rice 1979, common practice)."""
    from stackbound.byteio import Reader, Writer

    writer = Writer()
    for value in (0, -1, 1, -2, 2):
        writer.signed(value)

    assert bytes(writer.data) == bytes(range(5))
    reader = Reader(memoryview(writer.data))
    assert [reader.signed() for _ in range(5)] == [0, -1, 1, -2, 2]
