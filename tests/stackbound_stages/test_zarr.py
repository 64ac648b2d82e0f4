from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import zarr
from ome_zarr_models.v05 import Image
from stackbound.errors import SourceError
from stackbound.sources import open_source
from stackbound.stages import StackInfo
from stackbound_stages.save_zarr import ZarrSave, chunk_shape

RNG = np.random.default_rng(17)
FIVE = RNG.integers(0, 4000, (2, 3, 5, 24, 32)).astype(np.uint16)


def loaded(source: object, axes: str | None = None) -> tuple[StackInfo, np.ndarray]:
    with open_source(source, axes=axes) as opened:
        info = opened.info
        return info, opened.read((0,) * len(info.shape), info.shape)


def write_ome(path: Path, version: str, array: np.ndarray, axes: list[dict[str, str]], scale: list[float]) -> None:
    """Write an image of two levels by plain Zarr calls."""
    zarr_format: Any = 2 if version == "0.4" else 3
    group = zarr.create_group(str(path), zarr_format=zarr_format)
    datasets = []
    for level, data in enumerate((array, array[..., ::2, ::2])):
        group.create_array(str(level), data=data, chunks=(1,) * (data.ndim - 2) + (16, 16))
        factors = [n * (2**level if place >= array.ndim - 2 else 1) for place, n in enumerate(scale)]
        datasets.append({"path": str(level), "coordinateTransformations": [{"type": "scale", "scale": factors}]})
    said: dict[str, Any] = {"multiscales": [{"axes": axes, "datasets": datasets, "name": "made up"}]}
    said["omero"] = {"channels": [{"label": name, "color": "FFFFFF"} for name in ("one", "two", "three")]}
    if version == "0.4":
        said["multiscales"][0]["version"] = "0.4"
        group.attrs.update(said)
    else:
        group.attrs["ome"] = {"version": "0.5", **said}


AXES = [
    {"name": "t", "type": "time", "unit": "second"},
    {"name": "c", "type": "channel"},
    {"name": "z", "type": "space", "unit": "micrometer"},
    {"name": "y", "type": "space", "unit": "micrometer"},
    {"name": "x", "type": "space", "unit": "micrometer"},
]


@pytest.mark.parametrize("version", ["0.4", "0.5"])
def test_ome_zarr_images(tmp_path: Path, version: str) -> None:
    """The full resolution of an OME-Zarr image comes with axes, scale, units and channel names."""
    write_ome(tmp_path / "a.ome.zarr", version, FIVE, AXES, [1.5, 1.0, 2.0, 0.5, 0.25])

    info, pixels = loaded(tmp_path / "a.ome.zarr")

    assert ("OME-Zarr", "tczyx") == (info.kind, info.axes)
    assert np.array_equal(FIVE, pixels)
    assert (1.5, None, 2.0, 0.5, 0.25) == info.scale
    assert ("second", None, "micrometer", "micrometer", "micrometer") == info.units
    assert ("one", "two", "three") == info.channel_names
    assert any("1 smaller levels" in note for note in info.notes)


def test_scales_of_image_and_level_multiply(tmp_path: Path) -> None:
    """A scale that version 0.4 gives for all levels multiplies that of the level."""
    write_ome(tmp_path / "a.zarr", "0.4", FIVE, AXES, [1.5, 1.0, 2.0, 0.5, 0.25])
    group = zarr.open_group(str(tmp_path / "a.zarr"), mode="r+")
    said: Any = group.attrs["multiscales"]
    said[0]["coordinateTransformations"] = [{"type": "scale", "scale": [2.0, 1.0, 1.0, 3.0, 1.0]}]
    group.attrs["multiscales"] = said

    assert (3.0, None, 2.0, 1.5, 0.25) == loaded(tmp_path / "a.zarr")[0].scale


def test_a_path_that_leads_out_of_the_image(tmp_path: Path) -> None:
    """Metadata that name an array outside the image are refused."""
    zarr.create_array(str(tmp_path / "other.zarr"), data=FIVE)
    for path in ("../other.zarr", str(tmp_path / "other.zarr")):
        datasets = [{"path": path, "coordinateTransformations": [{"type": "scale", "scale": [1.0] * 5}]}]
        said = {"version": "0.5", "multiscales": [{"axes": AXES, "datasets": datasets}]}
        zarr.create_group(str(tmp_path / "a.zarr"), attributes={"ome": said}, overwrite=True)

        with pytest.raises(SourceError, match="is not there"):
            loaded(tmp_path / "a.zarr")


def test_axes_with_other_names(tmp_path: Path) -> None:
    """Axes with names of their own are told by their types and their order."""
    axes = [{"name": "frame", "type": "time"}, *({"name": name, "type": "space"} for name in ("d", "v", "u"))]
    write_ome(tmp_path / "a.ome.zarr", "0.5", FIVE[:, 0], axes, [1.0, 1.0, 1.0, 1.0])

    assert "tzyx" == loaded(tmp_path / "a.ome.zarr")[0].axes


@pytest.mark.parametrize("zarr_format", [2, 3])
@pytest.mark.parametrize("dtype", ["<u2", ">u2", "<f4", "<i8"])
def test_bare_arrays(tmp_path: Path, zarr_format: Any, dtype: str) -> None:
    """Arrays of both formats are read; without names the last axes are z, y, x, with a note."""
    data = FIVE[0, 0].astype(dtype)
    zarr.create_array(str(tmp_path / "a.zarr"), data=data, chunks=(2, 10, 10), zarr_format=zarr_format)

    info, pixels = loaded(tmp_path / "a.zarr")
    with open_source(tmp_path / "a.zarr") as source:
        box = source.read((1, 3, 4), (4, 20, 30))

    assert ("zyx", f"Zarr {zarr_format}") == (info.axes, info.kind)
    assert info.dtype.isnative
    assert np.array_equal(data, pixels)
    assert np.array_equal(data[1:4, 3:20, 4:30], box)
    assert any("no names" in note for note in info.notes)


def test_dimension_names_are_axes(tmp_path: Path) -> None:
    """An array's own dimension names decide, in any stored order; --axes overrules them."""
    zarr.create_array(str(tmp_path / "a.zarr"), data=FIVE, dimension_names=list("ctzyx"))

    info, pixels = loaded(tmp_path / "a.zarr")
    said, _ = loaded(tmp_path / "a.zarr", "tczyx")

    assert ("tczyx", (3, 2, 5, 24, 32), ()) == (info.axes, info.shape, info.notes)
    assert np.array_equal(FIVE.swapaxes(0, 1), pixels)
    assert FIVE.shape == said.shape


def test_a_group_with_one_image_or_array(tmp_path: Path) -> None:
    """A group of one image, as some converters write it, or of one array, is opened like it."""
    zarr.create_group(str(tmp_path / "a.zarr"), attributes={"ome": {"version": "0.5", "bioformats2raw.layout": 3}})
    zarr.create_group(str(tmp_path / "a.zarr" / "OME"))
    write_ome(tmp_path / "a.zarr" / "0", "0.5", FIVE, AXES, [1.0] * 5)
    (tmp_path / "a.zarr" / "OME" / "METADATA.ome.xml").write_bytes(b"<OME/>")
    zarr.create_group(str(tmp_path / "b.zarr"))
    zarr.create_array(str(tmp_path / "b.zarr" / "only"), data=FIVE[0, 0])

    info, pixels = loaded(tmp_path / "a.zarr")

    assert b"<OME/>" == info.ome_xml and np.array_equal(FIVE, pixels)
    assert np.array_equal(FIVE[0, 0], loaded(tmp_path / "b.zarr")[1])


def test_several_images_are_listed(tmp_path: Path) -> None:
    """A group of several arrays or images, an empty one and a plate are refused with what is in them."""
    for name in "ab":
        zarr.create_array(str(tmp_path / "g.zarr" / name), data=FIVE[0, 0])
        write_ome(tmp_path / "i.zarr" / name, "0.5", FIVE, AXES, [1.0] * 5)
    zarr.create_group(str(tmp_path / "g.zarr"))
    zarr.create_group(str(tmp_path / "i.zarr"))
    zarr.create_group(str(tmp_path / "e.zarr"))
    zarr.create_group(str(tmp_path / "p.zarr"), attributes={"ome": {"version": "0.5", "plate": {}}})

    for name, said in {
        "g.zarr": r"2 arrays: a \(5 x 24 x 32 uint16\), b",
        "i.zarr": "2 images: a, b",
        "e.zarr": "holds nothing",
        "p.zarr": "plate of many images",
    }.items():
        with pytest.raises(SourceError, match=said):
            loaded(tmp_path / name)


def test_broken_metadata(tmp_path: Path) -> None:
    """Broken multiscales, a missing array and broken JSON are errors that name the place."""
    zarr.create_group(str(tmp_path / "a.zarr"), attributes={"ome": {"version": "0.5", "multiscales": [{}]}})
    write_ome(tmp_path / "b.zarr", "0.5", FIVE, AXES, [1.0] * 5)
    (tmp_path / "b.zarr" / "0" / "zarr.json").unlink()
    zarr.create_array(str(tmp_path / "c.zarr"), data=FIVE)
    (tmp_path / "c.zarr" / "zarr.json").write_text("{", encoding="utf-8")
    (tmp_path / "d.zarr").mkdir()
    (tmp_path / "d.zarr" / "x").write_text("x", encoding="utf-8")

    for name, said in {
        "a.zarr": "multiscales metadata are broken",
        "b.zarr": "'0' that the metadata name is not there",
        "c.zarr": "cannot be used",
        "d.zarr": "no Zarr metadata",
    }.items():
        with pytest.raises(SourceError, match=said):
            loaded(tmp_path / name)


def test_a_damaged_chunk_is_named(tmp_path: Path) -> None:
    """Bytes of a chunk that cannot be decoded are an error that names the box."""
    zarr.create_array(str(tmp_path / "a.zarr"), data=FIVE[0, 0], chunks=(1, 24, 32))
    (tmp_path / "a.zarr" / "c" / "2" / "0" / "0").write_bytes(b"nonsense")

    with open_source(tmp_path / "a.zarr") as source:
        assert np.array_equal(FIVE[0, 0, :2], source.read((0, 0, 0), (2, 24, 32)))
        with pytest.raises(SourceError, match=r"\[2:3, 0:24, 0:32\]"):
            source.read((2, 0, 0), (3, 24, 32))


def test_missing_chunks_are_told(tmp_path: Path) -> None:
    """Chunks that were never written are read as the fill value, and the user is told how many."""
    zarr.create_array(str(tmp_path / "a.zarr"), data=FIVE[0, 0], chunks=(1, 24, 32))
    (tmp_path / "a.zarr" / "c" / "2" / "0" / "0").unlink()

    info, _ = loaded(tmp_path / "a.zarr")

    assert any("1 chunks are not stored" in note for note in info.notes)


def test_all_files_of_a_zarr_are_source_files(tmp_path: Path) -> None:
    """Metadata and chunks of the array that is read are all looked after, those of smaller levels are not."""
    write_ome(tmp_path / "a.zarr", "0.5", FIVE, AXES, [1.0] * 5)

    with open_source(tmp_path / "a.zarr") as source:
        names = {file.path.relative_to(tmp_path / "a.zarr").as_posix() for file in source.files}

    assert {"zarr.json", "0/zarr.json", "0/c/0/0/0/0/0"} < names
    assert not any(name.startswith("1/") for name in names)


# ------------------------------------------------------------------------------------------------------------- save


@pytest.mark.parametrize("axes", ["yx", "zyx", "cyx", "tczyx"])
@pytest.mark.parametrize("dtype", ["u1", "i2", "f4", "f8", "f2", "u8"])
def test_plain_ome_zarr(tmp_path: Path, axes: str, dtype: str) -> None:
    """What is saved is a valid OME-Zarr 0.5 image with core codecs alone, and comes back as it was."""
    pixels = FIVE[tuple(slice(None) if axis in axes else 0 for axis in "tczyx")].astype(dtype)
    scale = {"t": 2.0, "c": None, "z": 0.5, "y": 0.1, "x": 0.2}
    units = {"t": "second", "c": None, "z": "micrometer", "y": "micrometer", "x": "micrometer"}
    with open_source(pixels, axes=axes) as source:
        source.info = StackInfo(
            kind="array",
            axes=axes,
            shape=pixels.shape,
            dtype=pixels.dtype,
            scale=tuple(scale[axis] for axis in axes),
            units=tuple(units[axis] for axis in axes),
            channel_names=("a", "b", "c") if "c" in axes else (),
            ome_xml=b"<OME/>",
        )
        ZarrSave().write(tmp_path / "a.ome.zarr", source)
        before = source.info

    info, again = loaded(tmp_path / "a.ome.zarr")

    Image.from_zarr(zarr.open_group(str(tmp_path / "a.ome.zarr"), mode="r"))
    assert np.array_equal(pixels, again) and pixels.dtype == again.dtype
    for part in ("axes", "shape", "scale", "units", "channel_names", "ome_xml"):
        assert getattr(before, part) == getattr(info, part)
    codecs = zarr.open_array(str(tmp_path / "a.ome.zarr" / "0"), mode="r").metadata.to_dict()["codecs"]
    assert {"bytes", "blosc"} == {codec["name"] for codec in codecs}


def test_chunks_stay_sensible() -> None:
    """Chunks are pieces of planes of at most 1024 x 1024; tiny planes share one."""
    for shape, expected in {
        (40, 3000, 2000): (1, 1024, 1024),
        (10_000, 16, 16): (1024, 16, 16),
        (1, 1, 1): (1, 1, 1),
    }.items():
        info = StackInfo(kind="array", axes="zyx", shape=shape, dtype=np.dtype(np.uint16))
        assert expected == chunk_shape(info)
