"""Synthetic stacks are the same whenever and in whatever order they are made, and say the truth about their noise."""

import hashlib
from pathlib import Path

import numpy as np
import pytest
import tifffile
from stackbound_synthetic import (
    PADDING,
    Camera,
    LightSheetScene,
    SyntheticStack,
    confocal,
    ct_phantom,
    electron_micrograph,
    light_sheet,
    stained_tissue,
    write_ome_tiff,
)

SMALL = (4, 96, 128)


def test_planes_do_not_depend_on_the_order_of_asking() -> None:
    """A plane asked for first, last or alone has the same pixels."""
    stack = light_sheet(SMALL)
    forwards = {place: stack.plane(*place) for place in np.ndindex(2, 4)}
    backwards = {place: light_sheet(SMALL).plane(*place) for place in reversed(list(forwards))}

    assert all(np.array_equal(forwards[place], backwards[place]) for place in forwards)


@pytest.mark.parametrize("workers", [1, 3])
def test_planes_do_not_depend_on_the_workers(workers: int) -> None:
    """Threads that work ahead give the planes of one thread, in order."""
    stack = confocal(SMALL)

    assert np.array_equal(np.stack(list(stack.planes(workers))).reshape(stack.shape), stack.pixels())


def test_planes_differ_and_seeds_matter() -> None:
    """No two planes share their noise, and another seed gives another stack."""
    stack = light_sheet(SMALL)

    assert not np.array_equal(stack.plane(0, 0), stack.plane(0, 1))
    assert not np.array_equal(stack.plane(0, 0), light_sheet(SMALL, seed=99).plane(0, 0))
    noise = [stack.plane(0, z).astype(np.float64) - stack.signal(0, z) for z in (0, 1)]
    assert abs(np.corrcoef(noise[0].ravel(), noise[1].ravel())[0, 1]) < 0.05


def test_a_stack_is_a_window_of_a_larger_one() -> None:
    """Structures do not depend on the size of the picture: the deeper stack begins with the same planes."""
    assert np.array_equal(light_sheet((9, *SMALL[1:])).plane(1, 3), light_sheet(SMALL).plane(1, 3))


def test_noise_around_the_signal_has_the_stated_variance() -> None:
    """Recorded minus noiseless, over the stated standard deviation, has mean 0 and variance 1."""
    stack = light_sheet(SMALL)
    electrons = np.stack([stack.electrons(1, z) for z in range(4)])
    recorded = np.stack([stack.plane(1, z) for z in range(4)]).astype(np.float64)
    scaled = (recorded - stack.camera.expected(electrons)) / np.sqrt(stack.camera.variance(electrons))

    assert abs(scaled.mean()) < 5 / np.sqrt(scaled.size)
    assert scaled.var() == pytest.approx(1, abs=5 * np.sqrt(2.5 / scaled.size))


def test_the_scene_has_structure_in_both_channels() -> None:
    """Each channel shows structures far above the noise, on a ground that is not dark."""
    stack = light_sheet((2, 256, 256))
    for channel in (0, 1):
        electrons = stack.scene.plane(channel, 1)
        assert electrons.min() > 0
        assert np.percentile(electrons, 99.5) - np.median(electrons) > 10 * np.sqrt(np.median(electrons))


def test_illumination_leaves_stripes_and_is_dimmer_at_the_end() -> None:
    """The sheet's shadows differ from row to row but hardly along a row."""
    scene = LightSheetScene(1, (128, 512))
    y, x = (np.arange(n, dtype=np.float32) * np.float32(0.325) for n in scene.size)
    light = scene._illumination(0, 0.0, y, x)

    assert np.abs(np.diff(light, axis=0)).mean() > 3 * np.abs(np.diff(light, axis=1)).mean()
    assert light[:, -1].mean() < light[:, 230].mean()


def test_ome_tiff_tells_sizes_names_and_pixels(tmp_path: Path) -> None:
    """Tifffile reads back the axes, pixel sizes, channel names and every pixel."""
    stack = light_sheet(SMALL)
    done: list[int] = []
    write_ome_tiff(tmp_path / "made.ome.tif", stack, done.append)

    with tifffile.TiffFile(tmp_path / "made.ome.tif") as file:
        series, xml = file.series[0], file.ome_metadata
        assert (series.axes, series.shape, series.dtype) == ("CZYX", stack.shape, np.uint16)
        assert xml is not None
        assert np.array_equal(series.asarray(), stack.pixels())
    description = tifffile.xml2dict(xml)["OME"]["Image"]["Pixels"]
    assert (description["PhysicalSizeX"], description["PhysicalSizeZ"]) == (0.325, 1.0)
    assert description["PhysicalSizeXUnit"] == "µm"
    assert [channel["Name"] for channel in description["Channel"]] == ["nuclei", "fibres and vessels"]
    assert sum(done) == 8


def test_ome_tiff_is_the_same_file_each_time(tmp_path: Path) -> None:
    """The same stack gives the same bytes, identifiers included."""
    files = [tmp_path / name for name in ("a.ome.tif", "b.ome.tif")]
    for file in files:
        write_ome_tiff(file, electron_micrograph((2, 64, 64)))
    first, second = (hashlib.sha256(file.read_bytes()).hexdigest() for file in files)

    assert first == second


def test_ome_tiff_overwrites_nothing(tmp_path: Path) -> None:
    """A file that exists is refused and kept."""
    (tmp_path / "mine.ome.tif").write_text("mine", encoding="utf-8")
    with pytest.raises(FileExistsError):
        write_ome_tiff(tmp_path / "mine.ome.tif", confocal(SMALL))

    assert (tmp_path / "mine.ome.tif").read_text(encoding="utf-8") == "mine"


def test_confocal_counts_few_photons() -> None:
    """Grey levels of the confocal-like stack gather at multiples of the gain above the offset."""
    stack = confocal((2, 128, 128))
    assert stack.dtype == np.uint16
    assert stack.pixels().max() <= 4095
    assert np.median(np.stack([stack.electrons(0, z) for z in range(2)])) < 5


def test_electron_micrograph_is_grey_with_dark_membranes() -> None:
    """The sections are uint8, neither black nor saturated, with some dark pixels."""
    pixels = electron_micrograph().pixels()
    assert pixels.dtype == np.uint8
    assert 120 < np.median(pixels) < 220
    assert 0.02 < (pixels < 110).mean() < 0.3
    assert (pixels == 255).mean() < 0.001


def test_stained_tissue_has_three_channels_that_are_alike() -> None:
    """Red, green and blue of the stained tissue rise and fall together."""
    pixels = stained_tissue().pixels().reshape(3, -1).astype(np.float64)
    correlation = np.corrcoef(pixels)
    assert correlation[np.triu_indices(3, 1)].min() > 0.5


def test_ct_phantom_is_signed_and_padded() -> None:
    """Slices are int16 with water near 20, air near -1000 and padding outside the circle alone."""
    slices = ct_phantom()
    rows, columns = np.mgrid[-1:1:128j, -1:1:128j]
    assert slices.dtype == np.int16
    assert (slices[:, rows**2 + columns**2 > 1] == PADDING).all()
    assert (slices[:, rows**2 + columns**2 <= 1] != PADDING).all()
    assert np.median(slices[:, 60:68, 100:104]) == pytest.approx(20, abs=15)
    assert np.array_equal(slices, ct_phantom())


def test_a_stack_can_saturate() -> None:
    """A camera of few levels clips the brightest structures, and says so in its dtype."""
    stack = SyntheticStack(LightSheetScene(20, SMALL[1:]), Camera(saturation=255), 2, 1)
    assert stack.dtype == np.uint8
    assert stack.pixels().max() == 255
