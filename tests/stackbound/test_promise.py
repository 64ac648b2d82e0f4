"""The promise in words and numbers."""

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from stackbound.config import Tolerance
from stackbound.errors import IntegrityError
from stackbound.geometry import Box
from stackbound.promise import Promise, resolve, stored_number
from stackbound.stages import StackInfo

PER_CHANNEL = Promise("0.001", "range", ("4", "0.5", "7.9"), "czyx", floats=False)


@given(st.decimals(min_value=0, max_value=10**9, allow_nan=False, places=6))
def test_a_number_is_never_above_its_decimal(value):
    """The number that is compared is the whole part for integers and the nearest float at or below for floats."""
    whole, number = stored_number(str(value), floats=False), stored_number(str(value), floats=True)

    assert whole <= value < whole + 1
    assert Fraction(number) <= Fraction(value) < Fraction(np.nextafter(number, np.inf))


def test_a_decimal_beyond_all_floats():
    """A tolerance beyond the largest float64 means the largest."""
    assert np.finfo(np.float64).max == stored_number("1e400", floats=True)
    assert 10**400 == stored_number("1e400", floats=False)


def test_stored_values():
    """A tolerance in stored values is taken as it was written."""
    info = StackInfo("NPY", "yx", (4, 4), np.dtype("u2"))
    promise = resolve(Tolerance(value="4.5", unit="stored"), info)

    assert (("4.5",), (4,)) == (promise.stored, promise.numbers)
    assert "abs(original - decoded) <= 4.5" in promise.words


def test_lossless_is_said():
    """A tolerance that allows no change is called so, whatever its unit."""
    info = StackInfo("NPY", "yx", (4, 4), np.dtype("u2"))

    assert "bit for bit" in resolve(Tolerance(value="0.9", unit="stored"), info).words
    assert "bit for bit" not in resolve(Tolerance(value="1", unit="stored"), info).words


def test_a_tile_of_one_channel_has_one_number():
    """Tiles that lie in one channel get its number, whole tiles beyond the last channel too."""
    assert 0 == PER_CHANNEL.for_tile((1, 0, 0, 0), (1, 2, 8, 8))
    assert 7 == PER_CHANNEL.for_tile((2, 0, 0, 0), (4, 2, 8, 8))


def test_a_tile_of_several_channels_has_one_number_each():
    """The array that the coder gets broadcasts over the tile."""
    tolerance = PER_CHANNEL.for_tile((0, 0, 0, 0), (3, 2, 8, 8))

    assert (3, 1, 1, 1) == tolerance.shape
    assert [4, 0, 7] == tolerance.ravel().tolist()


def test_pieces_of_a_region():
    """A region is compared channel by channel where channels differ."""
    box = Box((1, 0, 0, 0), (3, 2, 8, 8))
    pieces = list(PER_CHANNEL.pieces(box))

    assert [0, 7] == [number for _, number in pieces]
    assert [(1, 2), (2, 3)] == [(piece.start[0], piece.stop[0]) for piece, _ in pieces]
    assert box.pixels == sum(piece.pixels for piece, _ in pieces)


def test_record():
    """A promise comes back from its record; a damaged record is refused."""
    assert PER_CHANNEL == Promise.from_record(PER_CHANNEL.record(), "czyx", np.dtype("u2"))
    for damaged in ({}, {**PER_CHANNEL.record(), "stored": []}, {**PER_CHANNEL.record(), "stored": ["x"]}):
        with pytest.raises(IntegrityError):
            Promise.from_record(damaged, "czyx", np.dtype("u2"))
