"""Tolerances as fractions of each channel's range."""

from __future__ import annotations

from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest
import stackbound
from hypothesis import given
from hypothesis import strategies as st
from stackbound.errors import UsageError
from stackbound.extent import channel_ranges
from stackbound.promise import shares
from stackbound.stages import Grid, OpenSource, StackInfo


class ArraySource(OpenSource):
    """An array in memory as a source, without the checks of a loader."""

    def __init__(self, array: np.ndarray, axes: str) -> None:
        self.array = array
        self.info = StackInfo("array", axes, array.shape, array.dtype)

    def read(self, start, stop):
        return self.array[tuple(map(slice, start, stop))].copy()


def ranges_of(array: np.ndarray, axes: str, region: tuple[int, ...]) -> tuple[Fraction, ...]:
    source = ArraySource(array, axes)
    return channel_ranges(source, source.info, Grid(region, region))


def test_each_channel_has_its_own_range():
    """The range of a channel is its own largest minus its own smallest value, over all regions."""
    stack = np.random.default_rng(1).integers(-500, 500, (3, 5, 20, 30), dtype=np.int16)
    stack *= np.array([1, 2, 3], np.int16)[:, None, None, None]
    expected = tuple(Fraction(int(channel.max()) - int(channel.min())) for channel in stack)

    assert expected == ranges_of(stack, "czyx", (2, 2, 16, 16))
    assert expected == ranges_of(stack, "czyx", (3, 5, 20, 30))


def test_a_range_does_not_wrap():
    """The full span of a type is its range, although the type itself cannot hold it."""
    stack = np.array([[-(2**31), 2**31 - 1]] * 2, np.int32)

    assert (Fraction(2**32 - 1),) == ranges_of(stack, "yx", (2, 2))


@pytest.mark.parametrize(
    ("values", "span"),
    [
        ([1.5, np.nan, -2.0, 0.0], Fraction(7, 2)),
        ([np.inf, -np.inf, 3.0, 4.0], Fraction(1)),
        ([np.nan, np.inf, np.nan, np.nan], Fraction(0)),
        ([0.1, 0.3, 0.1, 0.1], Fraction(0.3) - Fraction(0.1)),
    ],
)
def test_only_finite_values_make_a_range(values, span):
    """NaN and infinities have no part in the range, and the range is exact."""
    assert (span,) == ranges_of(np.array(values).reshape(2, 2), "yx", (1, 2))


@given(
    st.decimals(min_value=0, max_value=1, allow_nan=False, places=30),
    st.integers(min_value=0, max_value=2**64),
)
def test_a_fraction_of_whole_numbers_is_exact(value, span):
    """The tolerance of integer pixels is the exact product."""
    (text,) = shares(value, [Fraction(span)], floats=False)

    assert Fraction(value) * span == Fraction(Decimal(text))


@given(
    st.decimals(min_value=0, max_value=1, allow_nan=False, places=30),
    st.floats(min_value=0, max_value=1e308),
)
def test_a_fraction_of_floats_is_never_above(value, span):
    """The tolerance of float pixels is a float64 that is never above the exact product, and the largest such."""
    (text,) = shares(value, [Fraction(span)], floats=True)
    exact = Fraction(value) * Fraction(span)

    assert Fraction(float(text)) <= exact
    assert Fraction(float(np.nextafter(float(text), np.inf))) > exact


def test_every_channel_keeps_its_own_tolerance(tmp_path):
    """A store made with the unit "range" keeps each channel within its own tolerance, and says so."""
    rng = np.random.default_rng(4)
    stack = np.stack([rng.poisson(level, (6, 40, 50)) for level in (20, 4000)]).astype(np.uint16)
    spans = [int(channel.max()) - int(channel.min()) for channel in stack]
    np.save(tmp_path / "two.npy", stack)
    report = stackbound.compress(
        tmp_path / "two.npy", tmp_path / "two.ome.zarr", axes="czyx", tolerance="0.02", unit="range"
    )
    decoded = stackbound.open(tmp_path / "two.ome.zarr")[...]
    errors = np.abs(decoded.astype(int) - stack).max(axis=(1, 2, 3))

    assert tuple(Fraction(2, 100) * span for span in spans) == tuple(map(Fraction, report.promise["stored"]))
    assert [int(Fraction(2, 100) * span) for span in spans] == errors.tolist()
    assert "0.02 range" in report.promise["words"]
    assert stackbound.verify(tmp_path / "two.ome.zarr", against=tmp_path / "two.npy", axes="czyx").ok


def test_more_than_the_whole_range_is_refused():
    """A fraction above 1 is a number in another unit, most likely."""
    with pytest.raises(UsageError, match="whole range"):
        shares(Decimal(4), [Fraction(10)], floats=False)
