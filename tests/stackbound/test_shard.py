"""Shards by the Zarr sharding specification."""

import numpy as np
import pytest
import zarr
from stackbound.errors import IntegrityError
from stackbound.shard import read_shard, shard_parts
from zarr.codecs import BytesCodec, ShardingCodec


def test_zarr_reads_our_shard(tmp_path):
    """Zarr's own sharding codec reads what we write, tile by tile."""
    pixels = np.arange(8 * 12, dtype="<u2").reshape(8, 12)
    sharding = ShardingCodec(chunk_shape=(4, 4), codecs=[BytesCodec(endian="little")])
    array = zarr.create_array(
        tmp_path / "a", shape=(8, 12), dtype="u2", chunks=(8, 12), serializer=sharding, compressors=None, fill_value=9
    )
    tiles = [pixels[y : y + 4, x : x + 4].tobytes() for y in (0, 4) for x in (0, 4, 8)]
    (tmp_path / "a" / "c" / "0").mkdir(parents=True)
    (tmp_path / "a" / "c" / "0" / "0").write_bytes(b"".join(shard_parts(tiles)))

    np.testing.assert_array_equal(pixels, array[...])
    np.testing.assert_array_equal(pixels[5:6, 3:9], array[5:6, 3:9])


def test_we_read_our_shard():
    """Payloads come back in order; an absent tile is None."""
    payloads = [b"abc", None, b"", b"defgh"]
    data = b"".join(shard_parts(payloads))

    assert payloads == [None if p is None else bytes(p) for p in read_shard(data, 4)]
    assert b"abcdefgh" == data[:8]


def test_same_tiles_same_bytes():
    """One set of tiles has one file."""
    assert shard_parts([b"1", None, b"23"]) == shard_parts([b"1", None, b"23"])


@pytest.mark.parametrize("bit", [0, 5])
def test_a_damaged_index_is_found(bit):
    """Every changed byte of the index or its checksum is found."""
    data = b"".join(shard_parts([b"abc", b"de"]))
    for place in range(5, len(data)):
        changed = bytearray(data)
        changed[place] ^= 1 << bit
        with pytest.raises(IntegrityError):
            read_shard(bytes(changed), 2)


def test_a_short_file_is_found():
    """A file shorter than its index is refused."""
    with pytest.raises(IntegrityError, match="index alone"):
        read_shard(b"abc", 2)


def test_an_index_that_points_outside_is_found():
    """An entry beyond the tiles' bytes is refused, even under a right checksum."""
    data = b"".join(shard_parts([b"abcdef", b"gh"]))
    with pytest.raises(IntegrityError, match="outside"):
        read_shard(data[3:], 2)
