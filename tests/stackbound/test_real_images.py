"""The main job from end to end on images that scikit-image and pydicom carry in their packages."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pydicom
import pytest
import skimage.data
import stackbound
import tifffile
import zarr
from pydicom.data import get_testdata_file


def stored_values(name: str) -> np.ndarray:
    """Return the stored pixel values of one of pydicom's own images."""
    return pydicom.dcmread(get_testdata_file(name, download=False)).pixel_array


def colour(image: np.ndarray) -> np.ndarray:
    """Return colour samples as planes, the order in which a store has them."""
    return np.moveaxis(image, -1, 0)


IMAGES: dict[str, Callable[[], np.ndarray]] = {
    "camera": skimage.data.camera,
    "coins": skimage.data.coins,
    "cell": skimage.data.cell,
    "microaneurysms": skimage.data.microaneurysms,
    "immunohistochemistry": skimage.data.immunohistochemistry,
    "CT_small.dcm": lambda: stored_values("CT_small.dcm"),
    "MR_small.dcm": lambda: stored_values("MR_small.dcm"),
    "examples_overlay.dcm": lambda: stored_values("examples_overlay.dcm"),
    "rtdose.dcm": lambda: stored_values("rtdose.dcm"),
}


@pytest.mark.parametrize("tolerance", [0, 1, 4, 30])
@pytest.mark.parametrize("name", IMAGES)
def test_no_pixel_moves_further_than_the_tolerance(name: str, tolerance: int, tmp_path: Path) -> None:
    """What plain zarr and the restored file give differs from the image by at most the tolerance, and reaches it."""
    image = IMAGES[name]()
    samples = image.ndim == 3 and image.shape[-1] == 3
    source, store = tmp_path / "source.tif", tmp_path / "store.ome.zarr"
    tifffile.imwrite(source, image, photometric="rgb" if samples else "minisblack")

    report = stackbound.compress(source, store, tolerance=tolerance)
    stackbound.restore(store, tmp_path / "restored.tif")

    expected = colour(image) if samples else image
    decoded = np.asarray(zarr.open(store, mode="r")["0"])
    errors = np.abs(expected.astype(np.int64) - decoded)
    assert expected.dtype == decoded.dtype
    assert tolerance == errors.max() == int(report.largest_error)
    restored = tifffile.imread(tmp_path / "restored.tif")
    assert np.array_equal(decoded, colour(restored) if samples else restored)
    assert stackbound.verify(store, against=source, root=report.root).ok
