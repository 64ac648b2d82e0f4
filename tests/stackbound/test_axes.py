from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from stackbound.axes import Layout, apply_axes, guess_axes
from stackbound.errors import SourceError, UsageError


def read(array: np.ndarray, layout: Layout, start: tuple[int, ...], stop: tuple[int, ...]) -> np.ndarray:
    def fill(low: tuple[int, ...], high: tuple[int, ...], out: np.ndarray) -> None:
        out[...] = array[tuple(slice(a, b) for a, b in zip(low, high, strict=True))]

    return layout.read(start, stop, array.dtype, fill)


@st.composite
def stored_arrays(draw: st.DrawFn) -> tuple[str, np.ndarray]:
    others = draw(st.lists(st.sampled_from("tcz"), unique=True, max_size=3))
    letters = draw(st.permutations([*others, "y", "x", *draw(st.sampled_from([[], ["s"]]))]))
    shape = [draw(st.integers(1, 4)) for _ in letters]
    for _ in range(draw(st.integers(0, 2))):
        place = draw(st.integers(0, len(letters)))
        letters.insert(place, "-")
        shape.insert(place, 1)
    return "".join(letters), np.arange(np.prod(shape), dtype=np.int32).reshape(shape)


def canonical(letters: str, array: np.ndarray) -> np.ndarray:
    kept = array.reshape([n for n, letter in zip(array.shape, letters, strict=True) if letter != "-"])
    kept_letters = letters.replace("-", "")
    order = sorted(kept_letters, key="tcszyx".index)
    turned = kept.transpose([kept_letters.index(letter) for letter in order])
    if "c" in order and "s" in order:
        place = order.index("c")
        turned = turned.reshape((*turned.shape[:place], -1, *turned.shape[place + 2 :]))
    return turned


@settings(max_examples=150, deadline=None)
@given(stored_arrays(), st.data())
def test_any_stored_order_gives_the_same_stack(stored: tuple[str, np.ndarray], data: st.DataObject) -> None:
    """Any box of a layout holds the pixels of the stored array with its axes in the order t, c, z, y, x."""
    letters, array = stored
    layout = Layout(letters, array.shape)
    expected = canonical(letters, array)
    start = tuple(data.draw(st.integers(0, n - 1)) for n in layout.lengths)
    stop = tuple(data.draw(st.integers(low + 1, n)) for low, n in zip(start, layout.lengths, strict=True))

    found = read(array, layout, start, stop)

    assert expected.shape == layout.lengths
    assert found.flags.c_contiguous
    assert np.array_equal(expected[tuple(slice(a, b) for a, b in zip(start, stop, strict=True))], found)


@pytest.mark.parametrize(
    ("shape", "letters"),
    [
        ((20, 30), "yx"),
        ((5, 20, 30), "zyx"),
        ((20, 30, 3), "yxc"),
        ((16, 16, 4), "yxc"),
        ((15, 16, 3), "zyx"),
        ((3, 20, 30), "zyx"),
        ((5, 20, 30, 3), "zyxc"),
        ((2, 5, 20, 30), "tzyx"),
        ((2, 3, 5, 20, 30), "tczyx"),
    ],
)
def test_nameless_axes(shape: tuple[int, ...], letters: str) -> None:
    """A last axis of 3 or 4 behind two of at least 16 is colour; else the last axes are t, c, z, y, x."""
    assert letters == guess_axes(shape)[0]


@pytest.mark.parametrize("shape", [(), (7,), (2, 2, 2, 2, 20, 20)])
def test_too_few_or_too_many_axes(shape: tuple[int, ...]) -> None:
    """Fewer than two or more than five axes are refused."""
    with pytest.raises(SourceError, match="two to five"):
        guess_axes(shape)


def test_axes_of_length_one_may_be_left_out() -> None:
    """The user may name all stored axes, or only those longer than 1."""
    assert "-zyx" == apply_axes("zyx", (1, 5, 6, 7))
    assert "tzyx" == apply_axes("TZYX", (1, 5, 6, 7))
    with pytest.raises(UsageError, match="names 2 axes"):
        apply_axes("yx", (1, 5, 6, 7))


def test_a_stack_needs_pixels() -> None:
    """An axis without length is refused."""
    with pytest.raises(SourceError, match="no pixels"):
        Layout("zyx", (0, 5, 5))
