"""The exact comparison."""

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from stackbound import compare

INTEGERS = [np.dtype(name) for name in ("i1", "u1", "i2", "u2", "i4", "u4", "i8", "u8")]
FLOATS = [np.dtype(name) for name in ("f2", "f4", "f8")]


def pairs(dtypes, **options):
    """Strategy of two arrays of the same shape and type."""
    return st.sampled_from(dtypes).flatmap(
        lambda dtype: hnp.array_shapes(max_dims=3, max_side=6).flatmap(
            lambda shape: st.tuples(*[hnp.arrays(dtype, shape, elements=hnp.from_dtype(dtype, **options))] * 2)
        )
    )


@settings(deadline=None, max_examples=150)
@given(pairs(INTEGERS), st.integers(0, 2**65))
def test_integers(pair, tolerance):
    """Errors of integers are those of Python's whole numbers, at the ends of every type too."""
    original, decoded = pair
    differences = [int(d) - int(o) for o, d in zip(original.ravel(), decoded.ravel(), strict=True)]
    found = compare.errors(original, decoded)

    assert len(differences) == found.pixels
    assert sum(d != 0 for d in differences) == found.changed
    assert max(map(abs, differences)) == found.largest
    assert sum(differences) == found.total
    assert sum(d * d for d in differences) == found.squares
    assert (original.min(), original.max()) == (found.lowest, found.highest)
    assert sum(abs(d) > tolerance for d in differences) == compare.over(original, decoded, tolerance)
    assert compare.over(original, decoded, tolerance) == compare.over(
        original, decoded, tolerance, compare.errors(original, decoded)
    )


@settings(deadline=None, max_examples=150)
@given(pairs(FLOATS, allow_nan=False, allow_infinity=False), st.floats(min_value=5e-324, max_value=1.7e308))
def test_floats_refuse_exactly(pair, tolerance):
    """A float pixel counts as inside only where the exact difference is; a rounding never excuses it."""
    original, decoded = pair
    exact = [
        abs(Fraction(float(d)) - Fraction(float(o))) for o, d in zip(original.ravel(), decoded.ravel(), strict=True)
    ]
    inside = [d <= Fraction(tolerance) for d in exact]

    assert sum(not within for within in inside) == compare.over(original, decoded, tolerance)
    assert compare.over(original, decoded, tolerance) == compare.over(
        original, decoded, tolerance, compare.errors(original, decoded)
    )


def test_a_rounded_difference_does_not_excuse():
    """A difference that rounds to the tolerance but is larger is refused; one that is smaller is not."""
    original = np.array([-(2.0**-60), 2.0**-60])
    decoded = np.array([1.0, 1.0])

    assert 1 == compare.over(original[:1], decoded[:1], 1.0)
    assert 0 == compare.over(original[1:], decoded[1:], 1.0)


def test_what_is_not_finite_must_keep_its_bits():
    """NaN and infinities are inside only bit for bit, under any tolerance."""
    quiet, other = np.array([0x7FC00000, 0x7FC00001], dtype="u4").view("f4")
    original = np.array([quiet, quiet, np.inf, np.inf, 1.0, -np.inf], dtype="f4")
    decoded = np.array([quiet, other, np.inf, 3e38, np.nan, np.inf], dtype="f4")

    assert 4 == compare.over(original, decoded, 1e308)
    assert 4 == compare.errors(original, decoded).changed
    assert float("inf") == compare.errors(original, decoded).largest


def test_tolerance_zero_is_bit_for_bit():
    """Under tolerance 0 a negative zero may not become a positive one."""
    original, decoded = np.array([-0.0, 1.0]), np.array([0.0, 1.0])

    assert (
        1 == compare.over(original, decoded, 0) == compare.over(original, decoded, 0, compare.errors(original, decoded))
    )
    assert 0 == compare.over(original, decoded, 0.5)


@settings(deadline=None, max_examples=60)
@given(pairs(FLOATS[2:], allow_nan=False, allow_infinity=False, min_value=-1e6, max_value=1e6))
def test_float_sums(pair):
    """Sums of float errors are right to 2**-31 of the largest error per pixel."""
    original, decoded = pair
    exact = [Fraction(float(d)) - Fraction(float(o)) for o, d in zip(original.ravel(), decoded.ravel(), strict=True)]
    found = compare.errors(original, decoded)
    slack = len(exact) * Fraction(found.largest) / 2**30

    assert abs(sum(exact) - found.total) <= slack
    assert abs(sum(d * d for d in exact) - found.squares) <= 4 * slack * Fraction(found.largest)


@pytest.mark.parametrize("dtype", ["u2", "i4", "f4", "f8"])
def test_blocks_and_layout_change_nothing(dtype):
    """Arrays larger than one block, and arrays that are not contiguous, give the same as their parts."""
    rng = np.random.default_rng(1)
    original = (rng.normal(500, 90, (3, 200, 300))).astype(dtype)
    decoded = original + rng.integers(-3, 4, original.shape).astype(dtype)
    whole = compare.errors(original, decoded)
    reference = decoded.astype(np.float64) - original.astype(np.float64)
    strided = compare.errors(original[:, ::2, 1::3], decoded[:, ::2, 1::3])

    assert np.abs(reference).max() == whole.largest
    assert np.count_nonzero(reference) == whole.changed
    assert float(whole.total) == pytest.approx(reference.sum(), abs=1e-3)
    assert float(whole.squares) == pytest.approx((reference**2).sum(), rel=1e-6)
    assert np.abs(reference[:, ::2, 1::3]).max() == strided.largest


def test_errors_of_read_only_arrays_are_kept_for_the_next_figure():
    """Several figures of one region cost one comparison; arrays that can change are always compared again."""
    original, decoded = np.zeros(9, "u2"), np.ones(9, "u2")
    changeable = compare.errors(original, decoded)
    decoded[0] = 5

    assert 1 == changeable.largest
    assert 5 == compare.errors(original, decoded).largest
    for array in (original, decoded):
        array.flags.writeable = False
    assert compare.errors(original, decoded) is compare.errors(original, decoded)
    assert compare.errors(original, original) is not compare.errors(original, decoded)
