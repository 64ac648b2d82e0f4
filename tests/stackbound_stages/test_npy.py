from __future__ import annotations

import io
from pathlib import Path

import numpy as np
import pytest
import skimage
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.lib import format as npy_format
from stackbound.errors import SourceError
from stackbound.sources import open_source
from stackbound.stages import StackInfo
from stackbound_stages import _flat

RNG = np.random.default_rng(9)
CUBE = RNG.integers(-3000, 3000, (5, 20, 31)).astype(np.int16)


def loaded(source: object, axes: str | None = None) -> tuple[StackInfo, np.ndarray]:
    with open_source(source, axes=axes) as opened:
        info = opened.info
        return info, opened.read((0,) * len(info.shape), info.shape)


@pytest.mark.parametrize("order", ["C", "F"])
@pytest.mark.parametrize("dtype", ["<i2", ">i2", "u1", ">u8", "<f2", ">f4", "<f8"])
def test_memory_and_byte_orders(tmp_path: Path, order: str, dtype: str) -> None:
    """Either memory order and any byte order give the same pixels in the byte order of the machine."""
    array = np.asarray(CUBE.astype(dtype), order=order)  # type: ignore[call-overload]
    np.save(tmp_path / "a.npy", array)

    info, pixels = loaded(tmp_path / "a.npy")
    with open_source(tmp_path / "a.npy") as source:
        box = source.read((1, 3, 2), (4, 17, 30))

    assert ("zyx", array.shape) == (info.axes, info.shape)
    assert info.dtype.isnative
    assert np.array_equal(array, pixels)
    assert np.array_equal(array[1:4, 3:17, 2:30], box)
    assert box.flags.c_contiguous


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data(), piece=st.sampled_from([8, 64, 1000]), dtype=st.sampled_from(["<u2", ">u2"]))
def test_any_box_through_small_pieces(tmp_path: Path, data: st.DataObject, piece: int, dtype: str) -> None:
    """However small the pieces that a box is read in, its pixels are the same."""
    shape = tuple(data.draw(st.integers(1, 6)) for _ in range(4))
    array = np.arange(np.prod(shape)).astype(dtype).reshape(shape)
    (tmp_path / "a.bin").write_bytes(b"xyz" + array.tobytes())
    start = tuple(data.draw(st.integers(0, n - 1)) for n in shape)
    stop = tuple(data.draw(st.integers(low + 1, n)) for low, n in zip(start, shape, strict=True))
    turn = data.draw(st.permutations(range(4)))
    box = tuple(high - low for low, high in zip(start, stop, strict=True))
    out = np.empty([box[axis] for axis in turn], np.uint16).transpose(np.argsort(turn))

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(_flat, "PIECE", piece)
        pixels = _flat.FlatPixels(tmp_path / "a.bin", 3, shape, np.dtype(dtype), "a.bin")
        pixels.fill(start, stop, out)
        pixels.close()

    assert np.array_equal(array[tuple(slice(low, high) for low, high in zip(start, stop, strict=True))], out)


@pytest.mark.parametrize("version", [(1, 0), (2, 0), (3, 0)])
def test_format_versions(tmp_path: Path, version: tuple[int, int]) -> None:
    """All three versions of the format are read."""
    with (tmp_path / "a.npy").open("wb") as file:
        npy_format.write_array(file, CUBE, version=version)

    assert np.array_equal(CUBE, loaded(tmp_path / "a.npy")[1])


def test_colour_samples(tmp_path: Path) -> None:
    """A last axis of 3 is colour samples, which become c; --axes decides."""
    picture = RNG.integers(0, 255, (20, 30, 3)).astype(np.uint8)
    np.save(tmp_path / "a.npy", picture)

    info, pixels = loaded(tmp_path / "a.npy")
    said, turned = loaded(tmp_path / "a.npy", "zyx")

    assert "cyx" == info.axes and np.array_equal(picture.transpose(2, 0, 1), pixels)
    assert any("taken as y, x, c" in note for note in info.notes)
    assert "zyx" == said.axes and np.array_equal(picture, turned)


def test_a_file_of_others() -> None:
    """The array that scikit-image ships opens as it was saved."""
    path = Path(skimage.__file__).parent / "data" / "lfw_subset.npy"

    assert np.array_equal(np.load(path), loaded(path)[1])


@pytest.mark.parametrize("end", [0, 3, 6, 9, 40, 127, 128, 500, -1])
def test_a_cut_file_is_an_error(tmp_path: Path, end: int) -> None:
    """A file that ends too early is refused when it is opened."""
    np.save(tmp_path / "a.npy", CUBE)
    (tmp_path / "a.npy").write_bytes((tmp_path / "a.npy").read_bytes()[:end])

    with pytest.raises(SourceError, match=r"a\.npy"):
        open_source(tmp_path / "a.npy")


@pytest.mark.parametrize(
    ("array", "said"),
    [
        (CUBE > 0, "boolean"),
        (CUBE.astype(np.complex128), "complex"),
        (np.array([["a"]]), "<U1"),
        (np.zeros((20, 20), np.dtype([("a", "u1")])), "cannot be compressed"),
        (np.zeros((4, 0, 20), np.uint8), "no pixels"),
        (np.zeros(20, np.uint8), "two to five"),
        (np.zeros((1, 1, 2, 2, 20, 20), np.uint8), "two to five"),
    ],
)
def test_arrays_that_are_no_stacks(tmp_path: Path, array: np.ndarray, said: str) -> None:
    """Boolean, complex, text and record arrays, and arrays of no, one or six axes, are refused."""
    np.save(tmp_path / "a.npy", array)

    with pytest.raises(SourceError, match=said):
        open_source(tmp_path / "a.npy")


def test_objects_are_never_unpickled(tmp_path: Path) -> None:
    """An array of Python objects is refused without reading them."""
    np.save(tmp_path / "a.npy", np.array([[object()]], dtype=object), allow_pickle=True)

    with pytest.raises(SourceError, match="run code"):
        open_source(tmp_path / "a.npy")


def test_bytes_behind_the_array_are_told(tmp_path: Path) -> None:
    """Bytes that follow the array are left out, and the user is told."""
    held = io.BytesIO()
    np.save(held, CUBE)
    (tmp_path / "a.npy").write_bytes(held.getvalue() + b"more")

    info, pixels = loaded(tmp_path / "a.npy")

    assert np.array_equal(CUBE, pixels)
    assert any("4 bytes" in note for note in info.notes)
