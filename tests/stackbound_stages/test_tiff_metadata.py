from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import tifffile
from stackbound.sources import open_source
from stackbound.stages import StackInfo

RNG = np.random.default_rng(7)
FIVE = RNG.integers(0, 4000, (2, 3, 5, 24, 32)).astype(np.uint16)
PLANES = FIVE[0, 0]


def loaded(source: object, axes: str | None = None) -> tuple[StackInfo, np.ndarray]:
    with open_source(source, axes=axes) as opened:
        info = opened.info
        return info, opened.read((0,) * len(info.shape), info.shape)


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
