from __future__ import annotations

import xml.etree.ElementTree as ET
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import tifffile
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from stackbound.errors import SourceError, UsageError
from stackbound.sources import open_source
from stackbound.stages import Index, OpenSource, Save, StackInfo
from stackbound_stages.save_npy import NpySave
from stackbound_stages.save_ome_tiff import OmeTiffSave
from stackbound_stages.save_tiff import TiffSave

RNG = np.random.default_rng(13)
FIVE = RNG.integers(0, 4000, (2, 3, 5, 24, 32)).astype(np.uint16)
RGB = RNG.integers(0, 255, (33, 48, 3)).astype(np.uint8)


class Decoded(OpenSource):
    """A stack in memory that counts the pixels that are asked of it."""

    def __init__(self, pixels: NDArray[Any], axes: str, **more: Any) -> None:
        self.pixels = pixels
        self.asked = 0
        self.info = StackInfo(kind="array", axes=axes, shape=pixels.shape, dtype=pixels.dtype, **more)

    def read(self, start: Index, stop: Index) -> NDArray[Any]:
        """Return one box."""
        box = self.pixels[tuple(slice(low, high) for low, high in zip(start, stop, strict=True))].copy()
        self.asked += box.size
        return box


def loaded(source: object, axes: str | None = None) -> tuple[StackInfo, np.ndarray]:
    with open_source(source, axes=axes) as opened:
        info = opened.info
        return info, opened.read((0,) * len(info.shape), info.shape)


def saved_again(saver: Save, path: Path, target: Path) -> tuple[StackInfo, StackInfo]:
    """Save a file anew and return what is known of both; the pixels must be equal."""
    with open_source(path) as source:
        saver.check(source.info)
        saver.write(target, source)
        before, pixels = source.info, source.read((0,) * len(source.info.shape), source.info.shape)
    after, again = loaded(target)
    assert np.array_equal(pixels, again)
    assert (before.axes, before.dtype) == (after.axes, after.dtype)
    return before, after


SUBSETS = ["yx", "zyx", "cyx", "tyx", "czyx", "tzyx", "tcyx", "tczyx"]


@pytest.mark.parametrize("axes", SUBSETS)
@pytest.mark.parametrize(("saver", "name"), [(TiffSave(), "a.tif"), (OmeTiffSave(), "a.ome.tif")])
def test_axes_scale_and_names_come_back(tmp_path: Path, saver: Save, name: str, axes: str) -> None:
    """A stack of any axes comes back from a TIFF with pixels, axes, scale, units and channel names."""
    pixels = FIVE[tuple(slice(None) if axis in axes else 0 for axis in "tczyx")]
    scale = {"t": 1.5, "c": None, "z": 2.0, "y": 0.25, "x": 0.125}
    units = {"t": "second", "c": None, "z": "micrometer", "y": "micrometer", "x": "micrometer"}
    names = ("one", "two", "three") if "c" in axes else ()
    source = Decoded(
        pixels,
        axes,
        scale=tuple(scale[axis] for axis in axes),
        units=tuple(units[axis] for axis in axes),
        channel_names=names,
    )

    saver.write(tmp_path / name, source)
    info, again = loaded(tmp_path / name)

    assert (axes, source.info.scale, source.info.units, names) == (
        info.axes,
        info.scale,
        info.units,
        info.channel_names,
    )
    assert np.array_equal(pixels, again)
    assert np.array_equal(np.squeeze(pixels), tifffile.imread(tmp_path / name))


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    shape=st.lists(st.integers(1, 5), min_size=5, max_size=5),
    axes=st.sampled_from(SUBSETS),
    dtype=st.sampled_from(["i1", "u1", "i2", "u2", "i4", "u4", "f4", "f8", "f2", "i8", "u8"]),
)
def test_every_shape_and_pixel_type(tmp_path: Path, shape: list[int], axes: str, dtype: str) -> None:
    """Stacks down to one pixel, of every pixel type that a format holds, come back unchanged; others are refused."""
    lengths = [n for n, axis in zip(shape, "tczyx", strict=True) if axis in axes]
    pixels = RNG.integers(0, 100, lengths).astype(dtype)
    for saver, name in ((TiffSave(), "a.tif"), (OmeTiffSave(), "a.ome.tif"), (NpySave(), "a.npy")):
        source = Decoded(pixels, axes)
        try:
            saver.check(source.info)
        except UsageError:
            assert (saver.name, pixels.dtype.str[1:]) in {("ome-tiff", kind) for kind in ("f2", "i8", "u8")}
            continue
        saver.write(tmp_path / name, source)
        if saver.name == "npy":
            assert np.array_equal(pixels, np.load(tmp_path / name))
        else:
            found, again = loaded(tmp_path / name)
            assert np.array_equal(pixels.squeeze(), again.squeeze()) and pixels.dtype == again.dtype
            assert saver.name == "ome-tiff" or axes == found.axes
        assert source.asked == pixels.size


# ------------------------------------------------------------------------------------------------------------ TIFF


def test_an_imagej_stack_stays_one(tmp_path: Path) -> None:
    """An ImageJ hyperstack comes back as one: description, metadata, byte order and resolution as they were."""
    tifffile.imwrite(
        tmp_path / "a.tif",
        FIVE,
        imagej=True,
        resolution=(4.0, 2.0),
        metadata={"axes": "TZCYX", "unit": "um", "spacing": 1.5, "Info": "made up", "Labels": ["first"], "min": 3.0},
    )

    before, after = saved_again(TiffSave(), tmp_path / "a.tif", tmp_path / "b.tif")

    with tifffile.TiffFile(tmp_path / "a.tif") as old, tifffile.TiffFile(tmp_path / "b.tif") as new:
        assert old.imagej_metadata == new.imagej_metadata
        assert (old.byteorder, old.series[0].axes) == (new.byteorder, new.series[0].axes)
        assert old.pages.first.tags[282].value == new.pages.first.tags[282].value
    assert before.headers["description.txt"] == after.headers["description.txt"]
    assert before.headers["imagej-metadata.bin"] == after.headers["imagej-metadata.bin"]
    assert (before.scale, before.units) == (after.scale, after.units)


def test_an_imagej_stack_beyond_the_limit_of_pages(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Beyond 4 GB an ImageJ hyperstack has one page, which all planes follow, and is read as such."""
    tifffile.imwrite(tmp_path / "a.tif", FIVE, imagej=True, metadata={"axes": "TZCYX"})
    monkeypatch.setattr("stackbound_stages.save_tiff.CLASSIC", 1000)

    saved_again(TiffSave(), tmp_path / "a.tif", tmp_path / "b.tif")

    with tifffile.TiffFile(tmp_path / "b.tif") as tiff:
        assert (1, False, "imagej") == (len(tiff.pages), tiff.is_bigtiff, tiff.series[0].kind)
    whole = (tmp_path / "b.tif").read_bytes()
    (tmp_path / "b.tif").write_bytes(whole[:-1])
    with pytest.raises(SourceError):
        loaded(tmp_path / "b.tif")


def test_an_imagej_stack_of_fewer_planes(tmp_path: Path) -> None:
    """A part of an ImageJ hyperstack gets a description that counts the planes that are there."""
    tifffile.imwrite(tmp_path / "a.tif", FIVE, imagej=True, metadata={"axes": "TZCYX"})
    info, pixels = loaded(tmp_path / "a.tif")
    part = Decoded(pixels[0], "czyx", attributes=dict(info.attributes, axes="zcyx"), headers=info.headers)

    TiffSave().write(tmp_path / "b.tif", part)

    assert np.array_equal(pixels[0].swapaxes(0, 1), tifffile.imread(tmp_path / "b.tif"))


@pytest.mark.parametrize("planar", ["contig", "separate"])
@pytest.mark.parametrize("alpha", [False, True])
def test_colour_stays_colour(tmp_path: Path, planar: str, alpha: bool) -> None:
    """RGB comes back as RGB, with its alpha and its planar configuration."""
    picture = np.dstack([RGB, RGB[..., :1]]) if alpha else RGB
    stored = picture if planar == "contig" else picture.transpose(2, 0, 1)
    extra = {"extrasamples": ["unassalpha"]} if alpha else {}
    tifffile.imwrite(tmp_path / "a.tif", stored, photometric="rgb", planarconfig=planar, **extra)

    saved_again(TiffSave(), tmp_path / "a.tif", tmp_path / "b.tif")

    with tifffile.TiffFile(tmp_path / "a.tif") as old, tifffile.TiffFile(tmp_path / "b.tif") as new:
        for code in (258, 262, 277, 284, 338):
            assert (code in old.pages.first.tags) == (code in new.pages.first.tags)
            if code in old.pages.first.tags:
                assert old.pages.first.tags[code].value == new.pages.first.tags[code].value


def test_colour_tables_white_zero_and_private_fields_stay(tmp_path: Path) -> None:
    """Photometric interpretation, colour table, texts and fields that nobody knows come back."""
    table = RNG.integers(0, 65535, (3, 256)).astype(np.uint16)
    tifffile.imwrite(
        tmp_path / "p.tif", RGB[..., 0], photometric="palette", colormap=table, metadata=None, software="made up 1.0"
    )
    tifffile.imwrite(
        tmp_path / "w.tif",
        RGB[..., 0],
        photometric="miniswhite",
        byteorder=">",
        metadata=None,
        description="an invented field",
        datetime="2001:02:03 04:05:06",
        extratags=[(65000, 12, 2, (1.5, 2.5), True), (315, 2, 0, "nobody", True), (274, 3, 1, 3, True)],
    )

    saved_again(TiffSave(), tmp_path / "p.tif", tmp_path / "p2.tif")
    saved_again(TiffSave(), tmp_path / "w.tif", tmp_path / "w2.tif")

    with tifffile.TiffFile(tmp_path / "p2.tif") as tiff:
        assert np.array_equal(table, tiff.pages.first.colormap)
        assert "made up 1.0" == tiff.pages.first.software
    with tifffile.TiffFile(tmp_path / "w2.tif") as tiff:
        page = tiff.pages.first
        assert (0, ">", "an invented field") == (int(page.photometric), tiff.byteorder, page.description)
        assert ("2001:02:03 04:05:06", "nobody") == (page.tags[306].value, page.tags[315].value)
        assert (1.5, 2.5) == page.tags[65000].value
        assert 3 == page.tags[274].value


@pytest.mark.parametrize("photometric", ["ycbcr", "separated", "cielab"])
def test_other_colour_spaces_stay(tmp_path: Path, photometric: str) -> None:
    """Samples of other colour spaces are kept as stored and labelled as they were."""
    samples = np.dstack([RGB, RGB[..., :1]]) if photometric == "separated" else RGB
    tifffile.imwrite(tmp_path / "a.tif", samples, photometric=photometric)

    saved_again(TiffSave(), tmp_path / "a.tif", tmp_path / "b.tif")

    with tifffile.TiffFile(tmp_path / "a.tif") as old, tifffile.TiffFile(tmp_path / "b.tif") as new:
        assert old.pages.first.photometric == new.pages.first.photometric


# --------------------------------------------------------------------------------------------------------- OME-TIFF


@pytest.mark.parametrize("order", ["TCZYX", "CTZYX", "ZTCYX"])
def test_the_original_ome_xml_comes_back(tmp_path: Path, order: str) -> None:
    """OME-XML and stored axis order come back; only identifiers and the places of the planes are new."""
    stored = FIVE.transpose(["TCZYX".index(axis) for axis in order])
    words = {"axes": order, "PhysicalSizeX": 0.5, "Channel": {"Name": ["a", "b", "µ"]}, "Description": "made up"}
    tifffile.imwrite(tmp_path / "a.ome.tif", stored, ome=True, metadata=words, compression="zlib")

    before, after = saved_again(OmeTiffSave(), tmp_path / "a.ome.tif", tmp_path / "b.ome.tif")

    assert before.ome_xml is not None and after.ome_xml is not None
    assert (before.scale, before.units, before.channel_names) == (after.scale, after.units, after.channel_names)
    old, new = ET.fromstring(before.ome_xml), ET.fromstring(after.ome_xml)
    assert old.get("UUID") != new.get("UUID")
    for root in (old, new):
        root.attrib.pop("UUID")
        for pixels in root.iter("{http://www.openmicroscopy.org/Schemas/OME/2016-06}Pixels"):
            pixels.attrib.pop("BigEndian", None)
            places = [child for child in pixels if child.tag.endswith("TiffData")]
            assert root is old or [{"IFD": "0", "PlaneCount": "30"}] == [place.attrib for place in places]
            for place in places:
                pixels.remove(place)
    assert ET.canonicalize(ET.tostring(old)) == ET.canonicalize(ET.tostring(new))
    with tifffile.TiffFile(tmp_path / "b.ome.tif") as tiff:
        assert order == tiff.series[0].axes
        assert np.array_equal(stored, tiff.asarray())


def test_ome_xml_of_another_stack_is_not_written(tmp_path: Path) -> None:
    """OME-XML that speaks of other lengths or another pixel type is left out, and fresh metadata are written."""
    tifffile.imwrite(tmp_path / "a.ome.tif", FIVE, ome=True, metadata={"axes": "TCZYX", "PhysicalSizeX": 0.5})
    info, pixels = loaded(tmp_path / "a.ome.tif")
    part = Decoded(pixels[:, :1, 2], "tcyx", ome_xml=info.ome_xml, scale=(None, None, 0.5, 0.5), units=(None,) * 4)

    OmeTiffSave().write(tmp_path / "b.ome.tif", part)

    assert np.array_equal(pixels[:, 0, 2], tifffile.imread(tmp_path / "b.ome.tif"))


def test_ome_colour(tmp_path: Path) -> None:
    """Colour of an OME-TIFF comes back as samples of one channel."""
    tifffile.imwrite(tmp_path / "a.ome.tif", RGB, ome=True, photometric="rgb", metadata={"axes": "YXS"})

    saved_again(OmeTiffSave(), tmp_path / "a.ome.tif", tmp_path / "b.ome.tif")

    with tifffile.TiffFile(tmp_path / "b.ome.tif") as tiff:
        assert ("YXS", 1) == (tiff.series[0].axes, len(tiff.pages))


def test_channels_that_each_have_samples(tmp_path: Path) -> None:
    """Channels of three samples each follow one another along c and come back as they were."""
    stack = RNG.integers(0, 255, (2, 33, 48, 3)).astype(np.uint8)
    tifffile.imwrite(tmp_path / "a.ome.tif", stack, ome=True, photometric="rgb", metadata={"axes": "CYXS"})

    before, _ = saved_again(OmeTiffSave(), tmp_path / "a.ome.tif", tmp_path / "b.ome.tif")

    assert ("cyx", (6, 33, 48)) == (before.axes, before.shape)
    assert np.array_equal(stack, tifffile.imread(tmp_path / "b.ome.tif"))


def test_large_stacks_become_bigtiff(tmp_path: Path) -> None:
    """A stack beyond 4 GB is written as BigTIFF."""
    from stackbound_stages._tiff_writing import needs_bigtiff

    shape = (1, 70_000, 40_000)
    info = StackInfo(kind="array", axes="zyx", shape=shape, dtype=np.dtype(np.uint16))

    assert needs_bigtiff(info)
    assert not needs_bigtiff(StackInfo(kind="array", axes="zyx", shape=(1, 9, 9), dtype=np.dtype(np.uint16)))


# -------------------------------------------------------------------------------------------------------------- NPY


def test_axes_of_length_one_come_back(tmp_path: Path) -> None:
    """Axes of length 1 that the user left out stand in the file again."""
    array = FIVE[:1, 0]
    np.save(tmp_path / "a.npy", array)

    with open_source(tmp_path / "a.npy", axes="zyx") as source:
        NpySave().write(tmp_path / "b.npy", source)

    assert (tmp_path / "a.npy").read_bytes() == (tmp_path / "b.npy").read_bytes()


@pytest.mark.parametrize("order", ["C", "F"])
@pytest.mark.parametrize("dtype", ["<u2", ">u2"])
@pytest.mark.parametrize("shape", [(5, 20, 31), (20, 30, 3), (2, 5, 20, 31)])
def test_an_npy_file_comes_back_byte_for_byte(tmp_path: Path, order: str, dtype: str, shape: Index) -> None:
    """An NPY file that lost nothing comes back with the same bytes: axis, memory and byte order included."""
    array = np.asarray(RNG.integers(0, 9999, shape).astype(dtype), order=order)  # type: ignore[call-overload]
    np.save(tmp_path / "a.npy", array)

    saved_again(NpySave(), tmp_path / "a.npy", tmp_path / "b.npy")

    assert (tmp_path / "a.npy").read_bytes() == (tmp_path / "b.npy").read_bytes()


# ----------------------------------------------------------------------------------------------------------- memory


@pytest.mark.parametrize("limit", [2, 100, 4096, 50_000])
@pytest.mark.parametrize("stored", ["tczyx", "ctzyx", "zctyx", "tczyxs", "tczsyx", "xyzct"])
def test_boxes_of_any_size_fill_the_file(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, limit: int, stored: str
) -> None:
    """However small the boxes, each pixel lands in its place of the stored order."""
    from stackbound_stages import _writing

    monkeypatch.setattr(_writing, "BOX", limit)
    stack = FIVE[:, :, :, :6, :7] if "s" not in stored else np.concatenate([FIVE, FIVE + 1], 1)[:, :, :, :6, :7]
    source = Decoded(stack, "tczyx", attributes={"samples": 3})
    (tmp_path / "a").write_bytes(b"x" * 5)

    _writing.write_pixels(tmp_path / "a", 5, stored, np.dtype(">u2"), source)

    shape = _writing.stored_shape(source.info, stored)
    found = np.frombuffer((tmp_path / "a").read_bytes()[5:], ">u2").reshape(shape)
    split = stack.reshape(2, -1, 3, 5, 6, 7) if "s" in stored else stack
    names = "tcszyx" if "s" in stored else "tczyx"
    assert np.array_equal(split.transpose([names.index(axis) for axis in stored]), found)
    assert source.asked == stack.size


def test_boxes_cover_a_stack_once_and_stay_small() -> None:
    """Boxes cover every pixel once, none is larger than the limit, whatever the shape."""
    from stackbound_stages._writing import BOX, boxes

    for shape in [(3, 60_000, 60_000), (10_000, 33, 21), (7, 2048, 2048), (1, 1, 1_000_000), (97, 101, 103)]:
        info = StackInfo(kind="array", axes="zyx", shape=shape, dtype=np.dtype(np.uint16))
        sizes = [np.prod([high - low for low, high in zip(*box, strict=True)]) for box in boxes(info, "zyx")]
        assert np.prod(shape, dtype=np.int64) == sum(int(size) for size in sizes)
        assert max(sizes) * 2 <= BOX
