"""Checksums against published values."""

import hashlib

import google_crc32c
import numpy as np
import pytest
from stackbound.hashes import sha256_bytes, sha256_file, sha256_pixels


@pytest.mark.parametrize(
    ("data", "value"),
    [
        (b"123456789", 0xE3069283),  # the usual check value of CRC-32C (common practice)
        (bytes(32), 0x8A9136AA),  # RFC 3720 (iSCSI), appendix B.4
        (b"\xff" * 32, 0x62A8AB43),  # RFC 3720, appendix B.4
        (bytes(range(32)), 0x46DD794E),  # RFC 3720, appendix B.4
        (bytes(range(31, -1, -1)), 0x113FDB5C),  # RFC 3720, appendix B.4
    ],
)
def test_crc32c(data, value):
    """The checksum of a shard's index is CRC-32C."""
    assert value == google_crc32c.value(data)


@pytest.mark.parametrize(
    ("data", "value"),
    [
        # NIST FIPS 180-4 examples (SHA256.pdf of the Cryptographic Standards and Guidelines)
        (b"abc", "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"),
        (
            b"abcdbcdecdefdefgefghfghighijhijkijkljklmklmnlmnomnopnopq",
            "248d6a61d20638b8e5c026930c3e6039a33ce45964ff2167f6ecedd419db06c1",
        ),
        (b"a" * 10**6, "cdc76e5c9914fb9281a1c7e284d73e67f1809a48a497200e046d39ccc7112cd0"),
        (b"", "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855"),  # common practice
    ],
)
def test_sha256(data, value, tmp_path):
    """Bytes and files are hashed by SHA-256."""
    file = tmp_path / "data"
    file.write_bytes(data)

    assert value == sha256_bytes(data)
    assert value == sha256_file(file)


@pytest.mark.parametrize("dtype", ["u1", "i2", "<u4", "f4", "f8"])
def test_pixels_are_hashed_as_little_endian_c_order(dtype):
    """Anyone can repeat the hash of a region with numpy and hashlib."""
    pixels = np.arange(60).reshape(3, 4, 5).astype(dtype)
    expected = hashlib.sha256(pixels.astype(np.dtype(dtype).newbyteorder("<")).tobytes()).hexdigest()

    assert expected == sha256_pixels(pixels)
    assert expected == sha256_pixels(np.asfortranarray(pixels))
    assert expected == sha256_pixels(pixels.astype(np.dtype(dtype).newbyteorder(">")))
