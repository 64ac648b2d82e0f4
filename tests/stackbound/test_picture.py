"""The comparison picture shows true pixels and a symmetric scale."""

from pathlib import Path

import numpy as np
import pytest
from PIL import Image
from stackbound.picture import ABOVE, BELOW, GAP, LABEL, MARGIN, PANEL, draw_comparison

TOP = MARGIN + 40 + LABEL - 4


def _panel(path: Path, column: int, side: int = PANEL) -> np.ndarray:
    """Return the pixels of a panel of the upper row."""
    left = MARGIN + column * (PANEL + GAP)
    with Image.open(path) as picture:
        return np.asarray(picture)[TOP : TOP + side, left : left + side]


def _ramp(size: int = PANEL) -> np.ndarray:
    return (np.arange(size * size) % 1000).reshape(size, size).astype(np.uint16)


def test_equal_planes_give_a_white_difference(tmp_path: Path) -> None:
    """Where nothing changed, the third panel is white but for the frame of the enlarged part."""
    draw_comparison(tmp_path / "p.png", _ramp(), _ramp(), tolerance=3, title="t")
    shown = _panel(tmp_path / "p.png", 2)

    assert (shown == 255).all(axis=-1).mean() > 0.98


def test_the_scale_is_symmetric_and_ends_at_the_tolerance(tmp_path: Path) -> None:
    """A pixel raised by the tolerance is as far from white as one lowered by it: red here, blue there."""
    original = np.full((PANEL, PANEL), 100, np.int16)
    decoded = original.copy()
    decoded[0, 500], decoded[0, 510] = 103, 97
    draw_comparison(tmp_path / "p.png", original, decoded, tolerance=3, title="t")
    shown = _panel(tmp_path / "p.png", 2).astype(int)

    assert tuple(shown[0, 500]) == ABOVE
    assert tuple(shown[0, 510]) == BELOW
    assert (shown[0, 505] == 255).all()


def test_original_and_decoded_share_one_grey_window(tmp_path: Path) -> None:
    """The same grey level has the same shade in both panels."""
    draw_comparison(tmp_path / "p.png", _ramp(), np.roll(_ramp(), 3, axis=1), tolerance=3, title="t")
    left, right = _panel(tmp_path / "p.png", 0), _panel(tmp_path / "p.png", 1)

    assert np.array_equal(left[400:, :100], right[400:, 3:103])


@pytest.mark.parametrize("shape", [(1, 1), (5, 9), (40, 3000), (700, 600)])
@pytest.mark.parametrize("tolerance", [0, 2])
def test_planes_of_any_shape_can_be_drawn(tmp_path: Path, shape: tuple[int, int], tolerance: int) -> None:
    """Small, narrow and large planes give a picture of the same size."""
    plane = np.arange(shape[0] * shape[1], dtype=np.uint16).reshape(shape)
    draw_comparison(tmp_path / "p.png", plane, plane, tolerance=tolerance, title="t", pixel_size=0.3)

    with Image.open(tmp_path / "p.png") as picture:
        assert picture.width == 3 * PANEL + 2 * GAP + 2 * MARGIN
