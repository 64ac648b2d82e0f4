from __future__ import annotations

import contextlib
import struct
from collections.abc import Callable
from pathlib import Path
from typing import Any

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


# --------------------------------------------------------------------------------------------------------- metadata


def test_ome_metadata(tmp_path: Path) -> None:
    """Scale, units, channel names and the OME-XML itself come from an OME-TIFF."""
    words: dict[str, Any] = {
        "axes": "TCZYX",
        "PhysicalSizeX": 0.5,
        "PhysicalSizeXUnit": "µm",
        "PhysicalSizeY": 250.0,
        "PhysicalSizeYUnit": "nm",
        "PhysicalSizeZ": 2.0,
        "TimeIncrement": 3.0,
        "TimeIncrementUnit": "min",
        "Channel": {"Name": ["nuclei", "actin", "tubulin"]},
    }
    tifffile.imwrite(tmp_path / "a.ome.tif", FIVE, ome=True, metadata=words)

    info, _ = loaded(tmp_path / "a.ome.tif")

    assert (3.0, None, 2.0, 250.0, 0.5) == info.scale
    assert ("minute", None, "micrometer", "nanometer", "micrometer") == info.units
    assert ("nuclei", "actin", "tubulin") == info.channel_names
    with tifffile.TiffFile(tmp_path / "a.ome.tif") as tiff:
        assert tiff.ome_metadata is not None
        assert tiff.ome_metadata.encode() == info.ome_xml
    assert "OME-TIFF" == info.kind


def test_imagej_metadata(tmp_path: Path) -> None:
    """Scale and units come from ImageJ's description and the resolution fields."""
    tifffile.imwrite(
        tmp_path / "a.tif",
        FIVE,
        imagej=True,
        byteorder="<",
        resolution=(4.0, 2.0),
        metadata={"axes": "TZCYX", "unit": "um", "spacing": 1.5, "finterval": 0.25, "Info": "made up"},
    )

    info, _ = loaded(tmp_path / "a.tif")

    assert (0.25, None, 1.5, 0.5, 0.25) == info.scale
    assert ("second", None, "micrometer", "micrometer", "micrometer") == info.units
    assert info.headers["description.txt"].startswith(b"ImageJ=")
    assert "made up".encode("utf-16-le") in info.headers["imagej-metadata.bin"]


def test_resolution_fields_are_a_scale_unless_they_are_a_habit(tmp_path: Path) -> None:
    """Pixels per centimetre become micrometers; the 72 and 300 dots per inch of printers mean nothing."""
    tifffile.imwrite(tmp_path / "a.tif", PLANES[0], resolution=(20_000, 10_000), resolutionunit=3, metadata=None)
    tifffile.imwrite(tmp_path / "b.tif", PLANES[0], resolution=(300, 300), resolutionunit=2, metadata=None)

    assert (1.0, 0.5) == loaded(tmp_path / "a.tif")[0].scale
    assert (None, None) == loaded(tmp_path / "b.tif")[0].scale


def test_what_goes_into_the_log_names_no_file(tmp_path: Path) -> None:
    """Kind and notes hold neither file nor folder names."""
    folder = tmp_path / "secret"
    folder.mkdir()
    for number in range(3):
        tifffile.imwrite(folder / f"hidden{number}.tif", PLANES[number], metadata=None)
    (folder / "private.csv").write_text("x", encoding="utf-8")

    info, _ = loaded(folder)

    told = " ".join((info.kind, *info.notes))
    assert "secret" not in told and "hidden" not in told and "private" not in told
    assert any(".csv" in note for note in info.notes)
    assert b"private.csv" in info.headers["files.json"]


def test_attributes_hold_no_floats(tmp_path: Path) -> None:
    """Attributes are whole numbers, texts, lists and mappings, as the log's JSON wants them."""
    tifffile.imwrite(tmp_path / "a.tif", PLANES, imagej=True, resolution=(4.33, 2.2), metadata={"spacing": 0.7})

    info, _ = loaded(tmp_path / "a.tif")

    def floats(value: object) -> bool:
        if isinstance(value, dict):
            return any(floats(item) for item in value.values())
        return any(floats(item) for item in value) if isinstance(value, list | tuple) else isinstance(value, float)

    assert not floats(dict(info.attributes))


# ----------------------------------------------------------------------------------------------------------- damage

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


# ---------------------------------------------------------------------------------------------------------- folders


def write_planes(folder: Path, names: list[str], **how: Any) -> np.ndarray:
    folder.mkdir(exist_ok=True)
    planes = RNG.integers(0, 4000, (len(names), 24, 32)).astype(np.uint16)
    for name, plane in zip(names, planes, strict=True):
        tifffile.imwrite(folder / name, plane, **({"metadata": None} | how))
    return planes


@pytest.mark.parametrize("compression", [None, "lzw"])
def test_a_folder_of_planes(tmp_path: Path, compression: str | None) -> None:
    """A folder of single planes is a stack along z in natural order."""
    planes = write_planes(tmp_path / "f", ["p1.tif", "p2.tif", "p10.tif"], compression=compression)

    info, pixels = loaded(tmp_path / "f")

    assert ("zyx", "TIFF planes") == (info.axes, info.kind)
    assert np.array_equal(planes, pixels)
    assert any("natural order" in note and "taken as z" in note for note in info.notes)


def test_planes_that_are_coded_differently(tmp_path: Path) -> None:
    """Byte order and compression may differ from file to file of a folder."""
    (tmp_path / "f").mkdir()
    for number, how in enumerate(
        ({}, {"byteorder": ">"}, {"compression": "lzw"}, {"byteorder": ">", "tile": (16, 16)})
    ):
        tifffile.imwrite(tmp_path / "f" / f"{number}.tif", PLANES[number], metadata=None, **how)

    assert np.array_equal(PLANES[:4], loaded(tmp_path / "f")[1])


def test_a_list_of_planes_with_the_users_axes(tmp_path: Path) -> None:
    """A list of files is one stack along the axis that the user names."""
    planes = write_planes(tmp_path / "f", ["a.tif", "b.tif"])

    info, pixels = loaded([tmp_path / "f" / "a.tif", tmp_path / "f" / "b.tif"], "cyx")

    assert "cyx" == info.axes
    assert np.array_equal(planes, pixels)


def test_names_that_count_channels_and_depth(tmp_path: Path) -> None:
    """Names that clearly count along two axes give both, and the user is told; --axes with one axis overrules."""
    names = [f"s_w{c}_z{z:02}.tif" for c in (1, 2) for z in range(3)]
    planes = write_planes(tmp_path / "f", names)

    info, pixels = loaded(tmp_path / "f")
    plain, _ = loaded(tmp_path / "f", "zyx")

    assert ("czyx", (2, 3, 24, 32)) == (info.axes, info.shape)
    assert np.array_equal(planes.reshape(2, 3, 24, 32), pixels)
    assert any("c (2) and z (3)" in note for note in info.notes)
    assert (6, 24, 32) == plain.shape


def test_a_missing_plane_is_named(tmp_path: Path) -> None:
    """A gap in what the names count is an error that names the place of the missing plane."""
    write_planes(tmp_path / "f", [f"t{t}_c{c}.tif" for t in range(3) for c in range(2) if (t, c) != (1, 1)])

    with pytest.raises(SourceError, match="t 1, c 1"):
        loaded(tmp_path / "f")


def test_rgb_planes(tmp_path: Path) -> None:
    """Colour samples of the planes of a folder become c."""
    (tmp_path / "f").mkdir()
    for number in range(2):
        tifffile.imwrite(tmp_path / "f" / f"{number}.tif", RGB + number, photometric="rgb", metadata=None)

    info, pixels = loaded(tmp_path / "f")

    assert ("czyx", (3, 2, 33, 48)) == (info.axes, info.shape)
    assert np.array_equal(np.stack([RGB, RGB + 1]).transpose(3, 0, 1, 2), pixels)


@pytest.mark.parametrize("odd", [PLANES[0, :20], PLANES[0].astype(np.int16), PLANES[:2]])
def test_an_odd_plane_is_named(tmp_path: Path, odd: np.ndarray) -> None:
    """A file of another size, pixel type or number of pages is an error that names it."""
    write_planes(tmp_path / "f", ["a.tif", "b.tif", "d.tif"])
    tifffile.imwrite(tmp_path / "f" / "c.tif", odd, metadata=None)

    with pytest.raises(SourceError, match="unlike the first") as caught:
        loaded(tmp_path / "f")

    assert str(caught.value.where).endswith("c.tif")


def test_a_folder_of_stacks_needs_axes(tmp_path: Path) -> None:
    """Files of several planes are several stacks, unless the user names the axes, that of the files first."""
    (tmp_path / "f").mkdir()
    for number in range(2):
        tifffile.imwrite(tmp_path / "f" / f"{number}.tif", FIVE[number, 0], metadata=None)

    with pytest.raises(SourceError, match="several stacks"):
        loaded(tmp_path / "f")
    info, pixels = loaded(tmp_path / "f", "tzyx")

    assert "tzyx" == info.axes
    assert np.array_equal(FIVE[:, 0], pixels)


def write_ome_set(folder: Path, names: list[str], stack: np.ndarray) -> None:
    """Write a stack as one OME-TIFF file per time point, each holding the XML of all."""
    folder.mkdir(exist_ok=True)
    uuids = [f"urn:uuid:00000000-0000-4000-8000-00000000000{number}" for number in range(len(names))]
    data = "".join(
        f'<TiffData FirstT="{t}" FirstZ="{z}" IFD="{z}" PlaneCount="1"><UUID FileName="{name}">{uuid}</UUID></TiffData>'
        for t, (name, uuid) in enumerate(zip(names, uuids, strict=True))
        for z in range(stack.shape[1])
    )
    size = dict(zip("TZYX", stack.shape, strict=True))
    for name, uuid, planes in zip(names, uuids, stack, strict=True):
        xml = (
            f'<OME xmlns="http://www.openmicroscopy.org/Schemas/OME/2016-06" UUID="{uuid}"><Image ID="Image:0">'
            f'<Pixels ID="Pixels:0" DimensionOrder="XYZCT" Type="uint16" SizeC="1" '
            + " ".join(f'Size{axis}="{length}"' for axis, length in size.items())
            + f'><Channel ID="Channel:0" SamplesPerPixel="1"/>{data}</Pixels></Image></OME>'
        )
        tifffile.imwrite(folder / name, planes, metadata=None, description=xml.encode())


@pytest.mark.parametrize("depth", [1, 5])
def test_an_ome_tiff_of_several_files(tmp_path: Path, depth: int) -> None:
    """A file of a multi-file OME-TIFF, or the folder of all, is the whole stack in the order of its XML."""
    stack = FIVE.reshape(6, 5, 24, 32)[:3, :depth]
    write_ome_set(tmp_path / "f", ["c.ome.tif", "a.ome.tif", "b.ome.tif"], stack)
    expected = stack if depth > 1 else stack[:, 0]

    for source in (tmp_path / "f" / "a.ome.tif", tmp_path / "f"):
        with open_source(source) as opened:
            info, pixels = opened.info, opened.read((0,) * expected.ndim, expected.shape)
            assert 3 == len(opened.files)
        assert ("tzyx" if depth > 1 else "tyx", "OME-TIFF") == (info.axes, info.kind)
        assert np.array_equal(expected, pixels)


def test_an_ome_tiff_that_lacks_a_file(tmp_path: Path) -> None:
    """A multi-file OME-TIFF without one of its files is refused, with what to do."""
    write_ome_set(tmp_path / "f", ["c.ome.tif", "a.ome.tif", "b.ome.tif"], FIVE.reshape(6, 5, 24, 32)[:3])
    (tmp_path / "f" / "b.ome.tif").unlink()

    with pytest.raises(SourceError, match=r"set of files.*one folder"):
        loaded(tmp_path / "f" / "a.ome.tif")


def test_descriptions_of_all_planes_are_kept(tmp_path: Path) -> None:
    """Where each plane has a description of its own, all are kept, in a folder as in a file of many pages."""
    (tmp_path / "f").mkdir()
    for number, plane in enumerate(PLANES):
        text = f"plane {number} µ".encode()
        tifffile.imwrite(tmp_path / "f" / f"{number}.tif", plane, metadata=None, description=text)
        tifffile.imwrite(tmp_path / "a.tif", plane, metadata=None, description=text, append=True)

    for source in (tmp_path / "f", tmp_path / "a.tif"):
        info, _ = loaded(source)
        lines = info.headers["plane-descriptions.jsonl"].decode().splitlines()
        assert [f'"plane {number} µ"' for number in range(5)] == lines


# ------------------------------------------------------------------------------------------------------------- size


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
