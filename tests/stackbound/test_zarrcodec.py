"""The tile codec inside zarr."""

import json
import subprocess
import sys

import numpy as np
import pytest
import zarr
from stackbound.errors import PromiseError, TileError, UsageError
from stackbound.zarrcodec import NAME, TileCodec


def configuration_of(store):
    """Return the codec's entry in a store's metadata."""
    array = json.loads((store / "0" / "zarr.json").read_bytes())
    return array["codecs"][0]["configuration"]["codecs"][0]


@pytest.fixture
def codec(kept):
    """Return the codec's entry of a store at tolerance 4."""
    return configuration_of(kept[1])


@pytest.mark.parametrize("shards", [None, (4, 64, 64)])
def test_plain_zarr_writes_under_the_same_promise(codec, tmp_path, shards):
    """Given a store's codec configuration, zarr writes another array within the same tolerance and reads it back."""
    rng = np.random.default_rng(2)
    other = rng.integers(0, 4000, (8, 64, 64), dtype=np.uint16)
    array = zarr.create_array(
        tmp_path / "a",
        shape=other.shape,
        dtype=other.dtype,
        chunks=(2, 32, 32),
        shards=shards,
        serializer=codec,
        compressors=None,
    )
    array[...] = other
    decoded = zarr.open_array(tmp_path / "a", mode="r")[...]

    assert 4 == np.abs(decoded.astype(int) - other).max()


def test_the_configuration_round_trips(codec, kept, tmp_path):
    """Zarr writes the codec's configuration as it read it."""
    zarr.create_array(tmp_path / "a", shape=(8, 8), dtype="u2", chunks=(8, 8), serializer=codec, compressors=None)
    written = json.loads((tmp_path / "a" / "zarr.json").read_bytes())["codecs"]

    assert [codec] == written
    assert TileCodec.from_dict(codec) == TileCodec.from_dict(written[0])
    assert hash(TileCodec.from_dict(codec)) == hash(TileCodec.from_dict(written[0]))


def test_writing_needs_a_uniform_promise(codec, tmp_path):
    """A promise of several numbers is refused: zarr does not say which channel a chunk is of."""
    codec["configuration"]["tolerance"] = ["4", "5"]
    array = zarr.create_array(
        tmp_path / "a", shape=(8, 8), dtype="u2", chunks=(8, 8), serializer=codec, compressors=None, fill_value=3
    )
    with pytest.raises(PromiseError, match="not one number"):
        array[...] = np.ones((8, 8), "u2")


@pytest.mark.parametrize("shards", [None, (16, 16)])
@pytest.mark.parametrize("dtype", ["bool", "complex64"])
def test_pixel_types_are_guarded(codec, tmp_path, shards, dtype):
    """A type that the codec does not hold is refused, inside shards too."""
    with pytest.raises(UsageError, match="integers and floats"):
        array = zarr.create_array(
            tmp_path / "a",
            shape=(16, 16),
            dtype=dtype,
            chunks=(8, 8),
            shards=shards,
            serializer=codec,
            compressors=None,
        )
        array[...] = np.ones((16, 16), dtype)


def test_a_newer_format_is_refused(codec):
    """A configuration of an unknown format names what to do."""
    codec["configuration"]["format"] = 99
    with pytest.raises(UsageError, match="newer stackbound"):
        TileCodec.from_dict(codec)


def test_damage_is_named(kept, tmp_path):
    """Bytes that are no tile raise a tile error through zarr, not wrong pixels and not another library's error."""
    array = zarr.create_array(
        tmp_path / "a",
        shape=(32, 32),
        dtype="u2",
        chunks=(32, 32),
        serializer=configuration_of(kept[1]),
        compressors=None,
    )
    array[...] = np.arange(1024, dtype="u2").reshape(32, 32)
    chunk = next(path for path in (tmp_path / "a" / "c").rglob("*") if path.is_file())
    good = chunk.read_bytes()
    for bad in (b"", b"x", good[:-1], good + b"\0", good[: len(good) // 2] + b"\xff" + good[len(good) // 2 + 1 :]):
        chunk.write_bytes(bad)
        with pytest.raises(TileError):
            array[...]


def test_an_independent_reader(kept, pixels):
    """A process that only knows zarr finds every pixel within the tolerance, stackbound merely being installed."""
    source, store, _ = kept
    script = (
        "import sys, numpy, zarr\n"
        "store, source = sys.argv[1:]\n"
        "decoded = zarr.open(store, mode='r')['0'][...].astype(int)\n"
        "print(abs(decoded - numpy.load(source)).max())\n"
        "assert 'stackbound.run' not in sys.modules\n"
    )
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", script, str(store), str(source)],
        capture_output=True,
        text=True,
        check=False,
    )

    assert ("4", "") == (done.stdout.strip(), done.stderr.strip())


def test_the_name_is_registered():
    """Zarr finds the codec by its name alone."""
    assert zarr.registry.get_codec_class(NAME) is TileCodec
