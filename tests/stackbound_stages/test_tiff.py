from __future__ import annotations

import contextlib
import struct
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import skimage
import tifffile
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from stackbound.errors import SourceError
from stackbound.sources import open_source
from stackbound.stages import StackInfo

RNG = np.random.default_rng(7)
FIVE = RNG.integers(0, 4000, (2, 3, 5, 24, 32)).astype(np.uint16)
PLANES = FIVE[0, 0]
RGB = RNG.integers(0, 255, (33, 48, 3)).astype(np.uint8)

Write = Callable[[Path], object]


def loaded(source: object, axes: str | None = None) -> tuple[StackInfo, np.ndarray]:
    with open_source(source, axes=axes) as opened:
        info = opened.info
        return info, opened.read((0,) * len(info.shape), info.shape)


def write_planar(path: Path) -> None:
    tifffile.imwrite(path, RGB.transpose(2, 0, 1), photometric="rgb", planarconfig="separate", tile=(16, 16))


def write_pages_one_by_one(path: Path) -> None:
    for plane in PLANES:
        tifffile.imwrite(path, plane, metadata=None, append=True, description=b"x" * 50)


KINDS: dict[str, tuple[Write, str, np.ndarray]] = {
    "pages": (lambda p: tifffile.imwrite(p, PLANES, metadata=None), "zyx", PLANES),
    "pages apart": (write_pages_one_by_one, "zyx", PLANES),
    "deflate": (lambda p: tifffile.imwrite(p, PLANES, metadata=None, compression="zlib"), "zyx", PLANES),
    "predictor": (lambda p: tifffile.imwrite(p, PLANES, compression="zlib", predictor=True), "zyx", PLANES),
    "lzw": (lambda p: tifffile.imwrite(p, PLANES, metadata=None, compression="lzw", rowsperstrip=7), "zyx", PLANES),
    "packbits": (lambda p: tifffile.imwrite(p, PLANES, metadata=None, compression="packbits"), "zyx", PLANES),
    "tiles": (lambda p: tifffile.imwrite(p, PLANES, metadata=None, tile=(16, 16)), "zyx", PLANES),
    "coded tiles": (lambda p: tifffile.imwrite(p, PLANES, tile=(16, 32), compression="lzw"), "zyx", PLANES),
    "big-endian": (lambda p: tifffile.imwrite(p, PLANES, byteorder=">", metadata=None), "zyx", PLANES),
    "big-endian lzw": (lambda p: tifffile.imwrite(p, PLANES, byteorder=">", compression="lzw"), "zyx", PLANES),
    "bigtiff": (lambda p: tifffile.imwrite(p, PLANES, bigtiff=True, byteorder=">"), "zyx", PLANES),
    "truncated pages": (lambda p: tifffile.imwrite(p, PLANES, truncate=True), "zyx", PLANES),
    "imagej": (lambda p: tifffile.imwrite(p, FIVE, imagej=True), "tczyx", FIVE.swapaxes(1, 2)),
    "ome": (lambda p: tifffile.imwrite(p, FIVE, ome=True, metadata={"axes": "TCZYX"}), "tczyx", FIVE),
    "volume tiles": (lambda p: tifffile.imwrite(p, PLANES, tile=(2, 16, 16), volumetric=True), "zyx", PLANES),
    "float16": (lambda p: tifffile.imwrite(p, PLANES.astype(np.float16)), "zyx", PLANES.astype(np.float16)),
    "float64 deflate": (
        lambda p: tifffile.imwrite(p, PLANES / 7, compression="zlib", predictor=True),
        "zyx",
        PLANES / 7,
    ),
    "int64": (lambda p: tifffile.imwrite(p, PLANES.astype(np.int64) - 2**40), "zyx", PLANES.astype(np.int64) - 2**40),
    "rgb": (lambda p: tifffile.imwrite(p, RGB, photometric="rgb"), "cyx", RGB.transpose(2, 0, 1)),
    "rgb strips": (
        lambda p: tifffile.imwrite(p, RGB, photometric="rgb", compression="lzw", rowsperstrip=5),
        "cyx",
        RGB.transpose(2, 0, 1),
    ),
    "rgb planar": (
        write_planar,
        "cyx",
        RGB.transpose(2, 0, 1),
    ),
    "rgb pages": (
        lambda p: tifffile.imwrite(p, np.stack([RGB, RGB[::-1]]), photometric="rgb", metadata=None),
        "czyx",
        np.stack([RGB, RGB[::-1]]).transpose(3, 0, 1, 2),
    ),
    "12 bits packed": (lambda p: write_twelve_bits(p, PLANES[0]), "yx", PLANES[0]),
}


def write_twelve_bits(path: Path, plane: np.ndarray) -> None:
    """Write a classic TIFF of one strip whose samples are packed most significant bit first (TIFF 6.0, section 3)."""
    bits = np.unpackbits(plane.astype(">u2").view(np.uint8).reshape(*plane.shape, 2), axis=-1)[..., 4:]
    data = np.packbits(bits.reshape(plane.shape[0], -1), axis=1).tobytes()
    height, width = plane.shape
    fields = [(256, width), (257, height), (258, 12), (259, 1), (262, 1), (273, 8), (277, 1), (278, height)]
    fields += [(279, len(data))]
    table = struct.pack("<H", len(fields)) + b"".join(struct.pack("<HHII", code, 4, 1, v) for code, v in fields)
    path.write_bytes(struct.pack("<2sHI", b"II", 42, 8 + len(data)) + data + table + struct.pack("<I", 0))


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_gives_its_pixels(tmp_path: Path, kind: str) -> None:
    """Each way to write a TIFF gives the same pixels, in the order t, c, z, y, x and the machine's byte order."""
    write, axes, expected = KINDS[kind]
    write(tmp_path / "a.tif")

    info, pixels = loaded(tmp_path / "a.tif")

    assert (axes, expected.shape, expected.dtype) == (info.axes, info.shape, info.dtype)
    assert info.dtype.isnative
    assert np.array_equal(expected, pixels)


@pytest.mark.parametrize("kind", KINDS)
def test_any_box_can_be_read(tmp_path: Path, kind: str) -> None:
    """A box gives the same pixels as the whole stack does there, in C order and owned by the caller."""
    write, _, expected = KINDS[kind]
    write(tmp_path / "a.tif")
    rng = np.random.default_rng(3)

    with open_source(tmp_path / "a.tif") as source:
        for _ in range(12):
            start = tuple(int(rng.integers(0, n)) for n in source.info.shape)
            stop = tuple(int(rng.integers(low + 1, n + 1)) for low, n in zip(start, source.info.shape, strict=True))
            box = source.read(start, stop)
            place = tuple(slice(low, high) for low, high in zip(start, stop, strict=True))
            assert np.array_equal(expected[place], box)
            assert box.flags.c_contiguous and box.flags.owndata and box.flags.writeable


@settings(max_examples=30, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(order=st.permutations("TCZ"), compression=st.sampled_from([None, "zlib"]), data=st.data())
def test_ome_tiff_in_any_stored_order(
    tmp_path: Path, order: list[str], compression: str | None, data: st.DataObject
) -> None:
    """An OME-TIFF of any stored axis order comes out as t, c, z, y, x; axes of length 1 are left out."""
    lengths = {axis: data.draw(st.integers(1, 3), axis) for axis in "TCZ"}
    stored = RNG.integers(0, 255, [lengths[axis] for axis in order] + [9, 8]).astype(np.uint8)
    tifffile.imwrite(
        tmp_path / "a.ome.tif", stored, ome=True, compression=compression, metadata={"axes": "".join(order) + "YX"}
    )
    kept = [axis for axis in "TCZ" if lengths[axis] > 1]
    expected = stored.transpose(*[order.index(axis) for axis in "TCZ"], 3, 4).reshape(
        *[lengths[axis] for axis in kept], 9, 8
    )

    info, pixels = loaded(tmp_path / "a.ome.tif")

    assert "".join(kept).lower() + "yx" == info.axes
    assert np.array_equal(expected, pixels)


@pytest.mark.parametrize("name", ["multipage.tif", "multipage_rgb.tif"])
def test_files_of_others(name: str) -> None:
    """The multi-page files that scikit-image ships give the pixels that tifffile reads."""
    path = Path(skimage.__file__).parent / "data" / name
    expected = tifffile.imread(path)

    info, pixels = loaded(path)

    if "c" in info.axes:
        expected = np.moveaxis(expected, expected.shape.index(3), 0)
    assert expected.shape == info.shape
    assert np.array_equal(expected, pixels)


def test_an_axis_without_a_name_is_z_with_a_note(tmp_path: Path) -> None:
    """Pages that nothing explains are taken as z, and the user is told; --axes decides."""
    tifffile.imwrite(tmp_path / "a.tif", PLANES, metadata=None)

    info, _ = loaded(tmp_path / "a.tif")
    said, _ = loaded(tmp_path / "a.tif", "tyx")

    assert "zyx" == info.axes
    assert any("taken as z" in note for note in info.notes)
    assert ("tyx", ()) == (said.axes, said.notes)


def test_named_axes_of_length_one_stay(tmp_path: Path) -> None:
    """Axes of length 1 stay where the file names them one by one."""
    tifffile.imwrite(tmp_path / "a.tif", FIVE[:1, :, :1], metadata={"axes": "TCZYX"})

    info, _ = loaded(tmp_path / "a.tif")

    assert ("tczyx", (1, 3, 1, 24, 32)) == (info.axes, info.shape)


# --------------------------------------------------------------------------------------------------------------- damage

CUT_KINDS = ["pages", "pages apart", "deflate", "lzw", "tiles", "coded tiles", "bigtiff", "truncated pages", "imagej"]
CUT_KINDS += ["ome", "rgb", "rgb planar", "12 bits packed"]


@pytest.mark.parametrize("kind", CUT_KINDS)
def test_a_cut_file_is_an_error_when_it_is_opened(tmp_path: Path, kind: str) -> None:
    """A TIFF of any kind, cut anywhere, is refused at open; one that still opens has lost no pixel."""
    write, axes, expected = KINDS[kind]
    write(tmp_path / "a.tif")
    whole = (tmp_path / "a.tif").read_bytes()
    cut = tmp_path / "cut.tif"
    rng = np.random.default_rng(5)
    tail = rng.integers(len(whole) - 300, len(whole), 12)

    refused = 0
    for end in [1, 3, 7, 8, 12, len(whole) // 2, *rng.integers(1, len(whole), 12), *tail]:
        cut.write_bytes(whole[:end])
        try:
            source = open_source(cut)
        except SourceError as error:
            assert error.where is not None and "cut.tif" in error.where
            assert error.remedy
            refused += 1
            continue
        with source:
            pixels = source.read((0,) * len(source.info.shape), source.info.shape)
            assert axes == source.info.axes and np.array_equal(expected, pixels)

    assert refused >= 24


def test_an_imagej_stack_without_its_last_pages(tmp_path: Path) -> None:
    """An ImageJ hyperstack that was cut after its first plane is refused, though a library opens it as one page."""
    tifffile.imwrite(tmp_path / "a.tif", FIVE, imagej=True)
    whole = (tmp_path / "a.tif").read_bytes()
    (tmp_path / "a.tif").write_bytes(whole[: len(whole) // 2])

    with pytest.raises(SourceError):
        loaded(tmp_path / "a.tif")


def test_an_imagej_description_that_promises_more(tmp_path: Path) -> None:
    """Fewer planes than ImageJ's description counts are refused, with both numbers."""
    text = b"ImageJ=1.54f\nimages=12\nslices=12\n"
    tifffile.imwrite(tmp_path / "a.tif", PLANES, metadata=None, description=text)

    with pytest.raises(SourceError, match=r"damaged|5 of 12 planes"):
        loaded(tmp_path / "a.tif")


def test_a_compressed_imagej_stack_that_promises_more(tmp_path: Path) -> None:
    """The same holds where the planes are compressed, so that no library misses them."""
    text = b"ImageJ=1.54f\nimages=12\nslices=12\n"
    tifffile.imwrite(tmp_path / "a.tif", PLANES, metadata=None, description=text, compression="zlib")

    with pytest.raises(SourceError, match="5 of 12 planes"):
        loaded(tmp_path / "a.tif")


def test_what_a_library_only_logs_is_an_error(tmp_path: Path) -> None:
    """A description that the library cannot make sense of, and only logs, is an error."""
    text = b"ImageJ=1.54f\nimages=5\nslices=5\norder=abc\n"
    tifffile.imwrite(tmp_path / "a.tif", PLANES, metadata=None, description=text)

    with pytest.raises(SourceError, match="unknown order"):
        loaded(tmp_path / "a.tif")


def test_ome_xml_that_promises_more(tmp_path: Path) -> None:
    """Fewer planes than the OME-XML counts are refused."""
    tifffile.imwrite(tmp_path / "a.ome.tif", FIVE[0, 0], ome=True, metadata={"axes": "ZYX"})
    raw = (tmp_path / "a.ome.tif").read_bytes()
    (tmp_path / "a.ome.tif").write_bytes(raw.replace(b'SizeZ="5"', b'SizeZ="9"'))

    with pytest.raises(SourceError, match="not in the file"):
        loaded(tmp_path / "a.ome.tif")


def test_pages_of_different_kinds(tmp_path: Path) -> None:
    """A page unlike the others is refused, wherever it stands."""
    with tifffile.TiffWriter(tmp_path / "a.tif") as writer:
        for number in range(12):
            plane = PLANES[0] if number != 4 else PLANES[0, :20]
            writer.write(plane, metadata=None, contiguous=False)

    with pytest.raises(SourceError, match=r"images of different kinds|unlike the first"):
        loaded(tmp_path / "a.tif")


def test_several_images_are_listed(tmp_path: Path) -> None:
    """A file of several images is refused with a list of what is in it."""
    with tifffile.TiffWriter(tmp_path / "a.ome.tif", ome=True) as writer:
        writer.write(FIVE[0], metadata={"axes": "CZYX"})
        writer.write(PLANES[0, :10], metadata={"axes": "YX"})

    with pytest.raises(SourceError, match=r"2 images .*czyx 3 x 5 x 24 x 32 uint16; 2\. yx 10 x 32"):
        loaded(tmp_path / "a.ome.tif")


def test_a_pyramid_gives_its_full_resolution(tmp_path: Path) -> None:
    """Of a pyramid the full resolution is taken, and the user is told."""
    plane = np.tile(PLANES[0], (4, 4))
    with tifffile.TiffWriter(tmp_path / "a.ome.tif", ome=True) as writer:
        writer.write(plane, subifds=1, tile=(16, 16), metadata={"axes": "YX"})
        writer.write(plane[::2, ::2], subfiletype=1, tile=(16, 16))

    info, pixels = loaded(tmp_path / "a.ome.tif")

    assert np.array_equal(plane, pixels)
    assert any("smaller levels are left out" in note for note in info.notes)


def test_levels_and_thumbnails_that_are_pages(tmp_path: Path) -> None:
    """Smaller copies that stand among the pages are left out, and the user is told."""
    for number, step in enumerate((1, 2, 4)):
        tifffile.imwrite(tmp_path / "p.tif", RGB[:32:step, ::step], metadata=None, append=number > 0)
    tifffile.imwrite(tmp_path / "t.tif", PLANES[0], metadata=None)
    tifffile.imwrite(tmp_path / "t.tif", PLANES[0, ::5, ::5], metadata=None, append=True, subfiletype=1)

    for name, expected in (("p.tif", RGB[:32].transpose(2, 0, 1)), ("t.tif", PLANES[0])):
        info, pixels = loaded(tmp_path / name)
        assert np.array_equal(expected, pixels)
        assert any("left out" in note for note in info.notes)


def test_jpeg_is_read_as_rgb_with_a_note(tmp_path: Path) -> None:
    """JPEG in TIFF is read as RGB; the user is told that it had lost something before."""
    tifffile.imwrite(tmp_path / "a.tif", RGB, photometric="rgb", compression="jpeg", tile=(16, 16))

    info, pixels = loaded(tmp_path / "a.tif")

    assert np.array_equal(tifffile.imread(tmp_path / "a.tif").transpose(2, 0, 1), pixels)
    assert any("JPEG" in note and "lossy" in note for note in info.notes)
    assert 2 == info.attributes["photometric"]


@pytest.mark.parametrize(
    ("array", "said"),
    [(PLANES[0] > 100, "one-bit"), (PLANES[0].astype(np.complex64), "complex")],
)
def test_pixels_that_have_no_tolerance(tmp_path: Path, array: np.ndarray, said: str) -> None:
    """Boolean and complex pixels are refused by name."""
    tifffile.imwrite(tmp_path / "a.tif", array)

    with pytest.raises(SourceError, match=said):
        loaded(tmp_path / "a.tif")


def test_six_axes(tmp_path: Path) -> None:
    """More than five axes longer than 1 are refused."""
    tifffile.imwrite(tmp_path / "a.tif", np.zeros((2, 2, 2, 2, 8, 8), np.uint8), metadata={"axes": "RTCZYX"})

    with pytest.raises(SourceError, match="axes"):
        loaded(tmp_path / "a.tif")


def test_a_text_file_that_is_called_tiff(tmp_path: Path) -> None:
    """A file whose first bytes are no TIFF's is refused whatever its name."""
    (tmp_path / "a.tif").write_text("not an image, only words", encoding="utf-8")

    with pytest.raises(SourceError, match="not a TIFF"):
        loaded(tmp_path / "a.tif")


def test_damaged_bytes_give_an_error_of_our_own(tmp_path: Path) -> None:
    """Whatever byte of the tables is changed, the file opens or a SourceError says why not."""
    tifffile.imwrite(tmp_path / "a.tif", FIVE[0], compression="zlib", metadata={"axes": "CZYX"})
    whole = bytearray((tmp_path / "a.tif").read_bytes())
    with tifffile.TiffFile(tmp_path / "a.tif") as tiff:
        tables = [page.offset for page in tiff.pages][:2]
    rng = np.random.default_rng(11)
    for place in [*range(8), *(int(t + rng.integers(0, 200)) for t in tables for _ in range(60))]:
        changed = bytearray(whole)
        changed[place] ^= int(rng.integers(1, 256))
        (tmp_path / "b.tif").write_bytes(changed)
        with contextlib.suppress(SourceError):
            loaded(tmp_path / "b.tif")


def test_offsets_that_start_again() -> None:
    """LSM files beyond 4 GB, whose offsets wrap, are refused; others of any size are not."""
    from stackbound_stages._tiff_series import check_offsets

    check_offsets("lsm", 2**32 - 1, "a.lsm")
    check_offsets("ome", 2**40, "a.ome.tif")
    with pytest.raises(SourceError, match="beyond 4 GB"):
        check_offsets("lsm", 2**32, "a.lsm")


def test_a_chain_of_pages_that_turns_back(tmp_path: Path) -> None:
    """A page table that leads back to an earlier page is refused instead of read for ever."""
    tifffile.imwrite(tmp_path / "a.tif", PLANES[:2], metadata=None)
    raw = bytearray((tmp_path / "a.tif").read_bytes())
    with tifffile.TiffFile(tmp_path / "a.tif") as tiff:
        last = tiff.pages[1].offset
        count = struct.unpack_from("<H", raw, last)[0]
        struct.pack_into("<I", raw, last + 2 + 12 * count, tiff.pages[0].offset)
    (tmp_path / "a.tif").write_bytes(raw)

    with pytest.raises(SourceError, match="turns back"):
        loaded(tmp_path / "a.tif")


# ----------------------------------------------------------------------------------------------------------------- size


def test_a_box_of_a_huge_plane_is_read_alone(tmp_path: Path) -> None:
    """Of a plane far beyond the memory only the rows of the box are read, whatever its declared size."""
    path = tmp_path / "huge.tif"
    tifffile.memmap(path, shape=(60_000, 60_000), dtype=np.uint16, bigtiff=True).flush()
    with path.open("r+b") as file, tifffile.TiffFile(path) as tiff:
        offset = tiff.pages.first.dataoffsets[0]
        file.seek(offset + 2 * (50_000 * 60_000 + 40_000))
        file.write(np.uint16(777).tobytes())

    with open_source(path) as source:
        box = source.read((49_999, 39_999), (50_002, 40_002))

    assert (60_000, 60_000) == source.info.shape
    assert 777 == box[1, 1] and 777 == box.sum()


def test_a_declared_size_that_the_file_cannot_hold(tmp_path: Path) -> None:
    """A table that claims 10^12 pixels is refused at once."""
    fields = [(256, 10**6), (257, 10**6), (258, 8), (259, 5), (262, 1), (273, 8), (277, 1), (278, 1), (279, 4)]
    table = struct.pack("<H", len(fields)) + b"".join(struct.pack("<HHII", code, 4, 1, v) for code, v in fields)
    (tmp_path / "a.tif").write_bytes(struct.pack("<2sHI", b"II", 42, 16) + b"\0" * 8 + table + struct.pack("<I", 0))

    with pytest.raises(SourceError, match="1000000"):
        loaded(tmp_path / "a.tif")
