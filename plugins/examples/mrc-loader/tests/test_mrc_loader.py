"""The loader keeps its contract and reads what the format's paper describes."""

import struct

import numpy as np
import pytest
from mrc_loader import MODES, Mrc
from stackbound.errors import SourceError
from stackbound.testing import assert_conforms


def write_mrc(path, pixels, order="<", extended=b"", stamp=True):
    """Write an MRC2014 file by hand, with a pixel size of 2, 3 and 4 angstrom along x, y and z."""
    sections, rows, columns = pixels.shape
    mode = {np.dtype(code): mode for mode, code in MODES.items()}[pixels.dtype]
    header = bytearray(1024)
    struct.pack_into(f"{order}10i", header, 0, columns, rows, sections, mode, 0, 0, 0, columns, rows, sections)
    struct.pack_into(f"{order}6f", header, 40, columns * 2.0, rows * 3.0, sections * 4.0, 90, 90, 90)
    struct.pack_into(f"{order}3i", header, 64, 1, 2, 3)
    struct.pack_into(f"{order}i", header, 92, len(extended))
    header[208:212] = b"MAP "
    if stamp:
        header[212:214] = b"\x44\x44" if order == "<" else b"\x11\x11"
    path.write_bytes(bytes(header) + extended + pixels.astype(pixels.dtype.newbyteorder(order)).tobytes())
    return path


PIXELS = np.random.default_rng(1).normal(0, 50, (3, 8, 10))


def test_the_contract_is_kept(tmp_path):
    """The conformance suite of stackbound finds nothing."""
    assert_conforms(Mrc, example=write_mrc(tmp_path / "a.mrc", PIXELS.astype(np.int16)))


@pytest.mark.parametrize("order", "<>")
@pytest.mark.parametrize("code", MODES.values())
@pytest.mark.parametrize("stamp", [True, False])
def test_every_mode_is_read(tmp_path, code, order, stamp):
    """Every mode is read in both byte orders, with the pixel size, behind an extended header."""
    pixels = np.abs(PIXELS).astype(code)
    path = write_mrc(tmp_path / "a.mrc", pixels, order, b"x" * 80, stamp)
    with Mrc().open(path) as source:
        read = source.read((0, 0, 0), source.info.shape)

    assert (pixels == read).all()
    assert pixels.dtype == read.dtype
    assert source.info.scale == (4.0, 3.0, 2.0)
    assert source.info.units == ("angstrom",) * 3


@pytest.mark.parametrize(("at", "value"), [(12, 4), (64, 3), (0, -1), (92, 2**20)])
def test_what_cannot_be_read_is_refused(tmp_path, at, value):
    """Complex pixels, turned axes, senseless sizes and files that are too short are refused with the file's name."""
    path = write_mrc(tmp_path / "a.mrc", PIXELS.astype(np.float32))
    data = bytearray(path.read_bytes())
    struct.pack_into("<i", data, at, value)
    path.write_bytes(data)

    with pytest.raises(SourceError, match=r"a\.mrc"):
        Mrc().open(path)
