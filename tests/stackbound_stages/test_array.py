from __future__ import annotations

from pathlib import Path
from typing import Any

import dask.array as da
import numpy as np
import pytest
import zarr
from stackbound.errors import SourceError
from stackbound.sources import open_source
from stackbound.stages import StackInfo

FIVE = np.random.default_rng(19).integers(0, 4000, (2, 3, 5, 24, 32)).astype(np.uint16)


def loaded(source: object, axes: str | None = None) -> tuple[StackInfo, np.ndarray]:
    with open_source(source, axes=axes) as opened:
        info = opened.info
        return info, opened.read((0,) * len(info.shape), info.shape)


@pytest.mark.parametrize("how", ["C", "F", "strided", "big-endian", "read-only"])
def test_numpy_arrays(how: str) -> None:
    """Arrays of any memory layout and byte order give their pixels in the byte order of the machine."""
    array = {
        "C": FIVE,
        "F": np.asfortranarray(FIVE),
        "strided": np.repeat(FIVE, 2, axis=-1)[..., ::2],
        "big-endian": FIVE.astype(">u2"),
        "read-only": FIVE.copy(),
    }[how]
    array.flags.writeable = how != "read-only" and array is not FIVE

    info, pixels = loaded(array)

    assert ("tczyx", "numpy array", True) == (info.axes, info.kind, info.dtype.isnative)
    assert np.array_equal(FIVE, pixels)
    assert not np.shares_memory(pixels, array)


def test_the_users_axes_decide() -> None:
    """--axes (here: axes=) says what the axes are, in the stored order."""
    info, pixels = loaded(FIVE[0, 0], "cyx")
    turned, other = loaded(FIVE[0, 0], "yxz")

    assert ("cyx", ()) == (info.axes, info.notes)
    assert ("zyx", (32, 5, 24)) == (turned.axes, turned.shape)
    assert np.array_equal(FIVE[0, 0].transpose(2, 0, 1), other)
    assert np.array_equal(FIVE[0, 0], pixels)


def test_dask_arrays_are_read_box_by_box() -> None:
    """Of a dask array only the blocks that a box touches are computed."""
    touched: list[int] = []

    def block(block_info: Any) -> np.ndarray:
        touched.append(block_info[None]["chunk-location"][0])
        return np.full((1, 8, 8), block_info[None]["chunk-location"][0], np.int16)

    array = da.map_blocks(block, chunks=((1,) * 6, (8,), (8,)), dtype=np.int16, meta=np.empty((0, 0, 0), np.int16))
    with open_source(array) as source:
        touched.clear()
        box = source.read((2, 0, 0), (4, 8, 8))

    assert [2, 3] == sorted(touched)
    assert [2, 3] == box[:, 0, 0].tolist()


@pytest.mark.parametrize("limit", [1, 5_000, 40_000])
def test_large_boxes_are_read_in_pieces(monkeypatch: pytest.MonkeyPatch, limit: int) -> None:
    """A box beyond the limit is read in pieces of whole chunks, whatever the shape; the pixels are the same."""
    from stackbound_stages import _lazy

    monkeypatch.setattr(_lazy, "PIECE", limit)
    asked: list[int] = []

    class Chunked:
        shape, dtype, chunks = FIVE.shape, FIVE.dtype, (1, 2, 2, 16, 16)

        def __getitem__(self, box: tuple[slice, ...]) -> np.ndarray:
            asked.append(FIVE[box].nbytes)
            return FIVE[box]

    with open_source(Chunked()) as source:
        box = source.read((0, 1, 1, 3, 0), (2, 3, 5, 20, 32))

    assert np.array_equal(FIVE[:, 1:, 1:, 3:20], box)
    assert max(asked) <= max(limit, 2)
    assert sum(asked) == box.nbytes


def test_zarr_arrays_bring_their_names(tmp_path: Path) -> None:
    """A Zarr array object brings its dimension names."""
    array = zarr.create_array(str(tmp_path / "a.zarr"), data=FIVE, dimension_names=list("ctzyx"))

    info, pixels = loaded(array)

    assert (3, 2, 5, 24, 32) == info.shape
    assert np.array_equal(FIVE.swapaxes(0, 1), pixels)


@pytest.mark.parametrize(
    ("array", "said"),
    [
        (FIVE > 3, "boolean"),
        (FIVE.astype(complex), "complex"),
        (FIVE.astype(object), "object"),
        (np.ma.masked_array(FIVE[0, 0], FIVE[0, 0] > 3), "masked"),
        (FIVE[None], "two to five"),
        (FIVE[0, 0, 0, 0], "two to five"),
        (FIVE[:0], "no pixels"),
    ],
)
def test_arrays_that_are_no_stacks(array: np.ndarray, said: str) -> None:
    """Arrays of other pixels, of masked pixels, or of too many or no axes are refused."""
    with pytest.raises(SourceError, match=said):
        loaded(array)


def test_unknown_lengths() -> None:
    """A dask array whose lengths are not computed yet is refused with what to call."""
    array = da.from_array(np.arange(100).reshape(10, 10), chunks=5)

    with pytest.raises(SourceError, match="compute_chunk_sizes"):
        loaded(array[array[:, 0] > 20])


def test_an_array_that_breaks_its_word() -> None:
    """An object that gives other shapes or types than it said, or that raises, is an error."""

    class Liar:
        shape = (4, 20, 20)
        dtype = np.dtype(np.uint8)
        give: Any = None

        def __getitem__(self, box: object) -> Any:
            if isinstance(self.give, Exception):
                raise self.give
            return self.give

    flat, other = np.zeros((2, 2)), np.zeros((4, 20, 20))
    for give, said in ((flat, "came back as"), (other, "float64"), (OSError("gone"), "gone")):
        liar = Liar()
        liar.give = give
        with pytest.raises(SourceError, match=said):
            loaded(liar)
