from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import tifffile
from hypothesis import given
from hypothesis import strategies as st
from stackbound.errors import SourceError
from stackbound.sources import open_source
from stackbound.stages import StackInfo
from stackbound_stages._descriptions import pack, unpack

RNG = np.random.default_rng(7)
FIVE = RNG.integers(0, 4000, (2, 3, 5, 24, 32)).astype(np.uint16)
PLANES = FIVE[0, 0]
RGB = RNG.integers(0, 255, (33, 48, 3)).astype(np.uint8)


def loaded(source: object, axes: str | None = None) -> tuple[StackInfo, np.ndarray]:
    with open_source(source, axes=axes) as opened:
        info = opened.info
        return info, opened.read((0,) * len(info.shape), info.shape)


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
        assert [f"plane {number} µ" for number in range(5)] == unpack(info.headers["plane-descriptions.jsonl"])


@given(st.lists(st.text("ab; \n\u2028é", max_size=30), max_size=5))
def test_packed_descriptions_come_back(texts: list[str]) -> None:
    """Descriptions come back letter by letter, whatever they repeat of the plane before."""
    assert texts == unpack(pack(texts))


def test_repeated_settings_are_kept_once() -> None:
    """A plane that repeats the settings of the one before costs little more than what differs."""
    settings = "exposure 15 ms; binning 4; " * 100

    packed = pack([settings + f"z {number}; end" for number in range(10)])

    assert len(packed) < 1.2 * len(settings)
