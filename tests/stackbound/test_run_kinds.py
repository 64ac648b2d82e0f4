"""Whole runs over every kind of number, source and tolerance."""

import json

import numpy as np
import pytest
import stackbound
from stackbound.errors import PromiseError, UsageError

from .conftest import contents, records


def difficult_floats(dtype):
    """Return a stack with everything that floats can be."""
    rng = np.random.default_rng(8)
    stack = rng.normal(0, 10, (4, 40, 50)).cumsum(axis=2).astype(dtype)
    info = np.finfo(dtype)
    nasty = [np.nan, np.inf, -np.inf, -0.0, 0.0, info.tiny, info.smallest_subnormal, info.max, info.min]
    stack[0, 0, : len(nasty)] = nasty
    bits = stack.view(f"u{stack.itemsize}")
    bits[0, 1, 0] = bits[0, 0, 0] | 1  # a NaN with a payload of its own
    return stack


@pytest.mark.parametrize("dtype", ["f2", "f4", "f8"])
@pytest.mark.parametrize("tolerance", ["0", "0.05", "3"])
def test_floats(tmp_path, dtype, tolerance):
    """Float pixels stay within the tolerance; what is not finite keeps its bits; the store verifies."""
    stack = difficult_floats(dtype)
    report = stackbound.compress(stack, tmp_path / "s", tolerance=tolerance)
    decoded = np.asarray(stackbound.open(report.store))
    finite = np.isfinite(stack)
    errors = np.abs(decoded[finite].astype("f8") - stack[finite].astype("f8"))

    assert errors.max() <= float(tolerance)
    assert float(report.largest_error) == errors.max()
    assert decoded[~finite].tobytes() == stack[~finite].tobytes()
    if tolerance == "0":
        assert stack.tobytes() == decoded.tobytes()
    assert stackbound.verify(report.store, against=stack).ok


@pytest.mark.parametrize("dtype", ["i8", "u8"])
def test_wide_integers(tmp_path, dtype):
    """64-bit integers keep the promise over their whole span."""
    limits = np.iinfo(dtype)
    rng = np.random.default_rng(9)
    stack = rng.integers(limits.min, limits.max, (2, 30, 40), dtype=dtype, endpoint=True)
    stack[0, 0, :2] = limits.min, limits.max
    narrow = rng.integers(10**15, 10**15 + 5000, (2, 30, 40)).astype(dtype)
    for pixels, tolerance in ((stack, 0), (stack, 10), (narrow, 3)):
        report = stackbound.compress(pixels, tmp_path / "s", tolerance=tolerance, overwrite=True)

        assert int(report.largest_error) <= tolerance
        assert stackbound.verify(report.store, against=pixels).ok


@pytest.fixture
def channels():
    """Return three channels of very different ranges."""
    rng = np.random.default_rng(10)
    stack = rng.integers(0, 4000, (3, 2, 40, 50), dtype=np.uint16)
    stack[1] //= 100
    stack[2] = 7
    return stack


def test_ranges(tmp_path, channels):
    """A tolerance as a share of the range means each channel's own, in coder, log, check and reader."""
    report = stackbound.compress(channels, tmp_path / "s", tolerance="0.01", unit="range", axes="czyx")
    decoded = np.asarray(stackbound.open(report.store)).astype(int)
    expected = [(int(c.max()) - int(c.min())) / 100 for c in channels]
    header, *regions, _, _ = records(report.store)

    assert [int(e) for e in expected] == [np.abs(d - c).max() for d, c in zip(decoded, channels, strict=True)]
    assert expected == [float(text) for text in header["promise"]["stored"]] == pytest.approx(expected)
    assert tuple(int(e) for e in expected) == stackbound.open(report.store).tolerance
    assert all(float(region["max_error_share"]) <= 1 for region in regions)
    assert stackbound.verify(report.store, against=channels, axes="czyx").ok


def test_a_tile_over_several_channels(tmp_path):
    """Colour samples in one tile have one tolerance each."""
    rng = np.random.default_rng(11)
    colours = rng.integers(0, 200, (60, 70, 3), dtype=np.uint8)
    colours[..., 2] //= 10
    report = stackbound.compress(colours, tmp_path / "s", tolerance="0.05", unit="range")
    decoded = np.asarray(stackbound.open(report.store)).astype(int)
    planes = np.moveaxis(colours, -1, 0)
    allowed = [int((int(plane.max()) - int(plane.min())) * 0.05) for plane in planes]

    assert report.tile[report.axes.index("c")] == 3
    assert allowed == [np.abs(d - p).max() for d, p in zip(decoded.reshape(planes.shape), planes, strict=True)]


def test_zarr_does_not_write_under_several_numbers(tmp_path, channels):
    """The codec of a store with one tolerance per channel reads through zarr and refuses to write."""
    import zarr

    report = stackbound.compress(channels, tmp_path / "s", tolerance="0.01", unit="range", axes="czyx")
    array = json.loads((report.store / "0" / "zarr.json").read_bytes())
    codec = array["codecs"][0]["configuration"]["codecs"][0]
    other = zarr.create_array(
        tmp_path / "a", shape=(8, 8), dtype="u2", chunks=(8, 8), serializer=codec, compressors=None
    )
    with pytest.raises(PromiseError):
        other[...] = np.ones((8, 8), "u2")


def test_a_share_above_one_is_refused(tmp_path, channels):
    """More than the whole range is a mistake about the unit."""
    with pytest.raises(UsageError, match="range"):
        stackbound.compress(channels, tmp_path / "s", tolerance=4, unit="range", axes="czyx")
    assert [] == list(tmp_path.iterdir())


def test_arrays_give_the_bytes_of_files(tmp_path, channels):
    """An array from Python, from dask or from zarr is the same stack."""
    dask_array = pytest.importorskip("dask.array")
    zarr = pytest.importorskip("zarr")
    options = {"tolerance": 3, "axes": "czyx", "scale": (1, 2, 0.5, 0.5)}
    plain = stackbound.compress(channels, tmp_path / "numpy", **options)
    stored = zarr.create_array(tmp_path / "z", data=channels, chunks=(1, 1, 40, 50))
    lazy = stackbound.compress(dask_array.from_array(channels, chunks=(1, 2, 20, 50)), tmp_path / "dask", **options)
    other = stackbound.compress(stored, tmp_path / "zarr", **options)
    shards = {name: data for name, data in contents(plain.store).items() if name.startswith("0/")}

    assert (1, 2, 0.5, 0.5) == stackbound.open(plain.store).scale
    for report in (lazy, other):
        assert shards == {name: data for name, data in contents(report.store).items() if name.startswith("0/")}
        assert stackbound.verify(report.store, against=channels, axes="czyx").ok


def test_an_interrupted_array_is_resumed(tmp_path, channels, monkeypatch):
    """A run over an array resumes by its pixels: it has no files that could tell whether it is the same."""
    config = {"tile": {"name": "grid", "tile": [1, 1, 40, 50], "region": [1, 1, 40, 50]}}
    options = {"tolerance": 3, "axes": "czyx", "config": config}
    real = stackbound.regions.RegionWorker.work
    with monkeypatch.context() as patch:

        def failing(self, index, kept=None):
            if index == 3:
                raise KeyboardInterrupt
            return real(self, index, kept)

        patch.setattr(stackbound.regions.RegionWorker, "work", failing)
        with pytest.raises(KeyboardInterrupt):
            stackbound.compress(channels, tmp_path / "s", workers=1, **options)
    report = stackbound.compress(channels, tmp_path / "s", resume=True, **options)

    assert 3 == report.resumed
    assert contents(stackbound.compress(channels, tmp_path / "t", **options).store) == contents(report.store)


def test_store_of_a_store(tmp_path, channels):
    """A store is a source like any OME-Zarr: compressing it again without loss keeps its pixels."""
    first = stackbound.compress(channels, tmp_path / "a.ome.zarr", tolerance=3, axes="czyx")
    second = stackbound.compress(first.store, tmp_path / "b.ome.zarr", tolerance=0)

    np.testing.assert_array_equal(np.asarray(stackbound.open(first.store)), np.asarray(stackbound.open(second.store)))


def test_restore_to_zarr(tmp_path, channels):
    """A store becomes a plain OME-Zarr that needs no plugin."""
    import zarr

    report = stackbound.compress(channels, tmp_path / "s", tolerance=3, axes="czyx")
    stackbound.restore(report.store, tmp_path / "plain.ome.zarr")
    plain = zarr.open_group(tmp_path / "plain.ome.zarr", mode="r")["0"]

    np.testing.assert_array_equal(np.asarray(stackbound.open(report.store)), plain[...])
    assert "stackbound" not in json.dumps(plain.metadata.to_dict(), default=str)


@pytest.mark.parametrize("shape", [(1, 1), (1, 100_003), (997, 13), (700, 3, 5)])
def test_odd_shapes(tmp_path, shape):
    """One pixel, one long line, prime sides and many tiny planes are stacks like others."""
    stack = np.random.default_rng(12).integers(0, 500, shape, dtype=np.uint16)
    report = stackbound.compress(stack, tmp_path / "s", tolerance=2)

    assert np.abs(np.asarray(stackbound.open(report.store)).astype(int) - stack).max() <= 2
    assert stackbound.verify(report.store, against=stack).ok
