"""One picture that shows what a tolerance does: original, decoded and their difference, side by side.

No pixel is averaged or interpolated: the upper row shows pixels one to one, the lower row a part of it enlarged by
whole numbers, so that the difference of single pixels can be seen.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from PIL.ImageDraw import ImageDraw

PANEL = 512
"""Side of a panel in screen pixels."""
ZOOM = 4
GAP, LABEL, MARGIN = 14, 50, 20
"""Screen pixels between panels, above each for its caption, and around all."""
INK, FAINT, PAPER, FRAME = (20, 20, 20), (95, 95, 95), (255, 255, 255), (255, 196, 0)
BELOW, ABOVE = (33, 82, 178), (190, 40, 40)
"""Ends of the scale of differences: minus and plus the tolerance."""

Colours = NDArray[np.uint8]


@dataclass(frozen=True)
class Box:
    """A part of a plane: first row and column, number of rows and columns."""

    row: int
    column: int
    rows: int
    columns: int

    def of(self, plane: NDArray[Any]) -> NDArray[Any]:
        """Return the part."""
        return plane[self.row : self.row + self.rows, self.column : self.column + self.columns]


def draw_comparison(
    path: Path,
    original: NDArray[Any],
    decoded: NDArray[Any],
    *,
    tolerance: float,
    title: str,
    pixel_size: float | None = None,
) -> None:
    """Write a PNG of one plane before and after.

    Parameters
    ----------
    path : Path
        The new file.
    original, decoded : ndarray, shape (y, x)
        The plane before and after.
    tolerance : float
        Largest difference promised; the end of the scale of differences.
    title : str
        First line of the picture.
    pixel_size : float, optional
        Micrometres from pixel to pixel, for the scale bar.
    """
    from PIL import Image, ImageDraw

    outer = _busiest(original, Box(0, 0, *original.shape), PANEL)
    scale = max(1, PANEL // max(outer.rows, outer.columns))
    inner = _busiest(original, outer, max(1, min(outer.rows, outer.columns) // ZOOM))
    low, high = _window(outer.of(original))
    difference = decoded.astype(np.float64) - original.astype(np.float64)

    def grey(part: NDArray[Any]) -> Colours:
        shade = np.clip((part.astype(np.float64) - low) / (high - low), 0, 1) * 255
        return np.repeat(np.rint(shade).astype(np.uint8)[..., None], 3, axis=-1)

    def signed(part: NDArray[Any]) -> Colours:
        return _blue_white_red(part / (tolerance if tolerance > 0 else 1.0))

    size = (3 * PANEL + 2 * GAP + 2 * MARGIN, 2 * (PANEL + LABEL) + 40 + 62 + 2 * MARGIN)
    image = Image.new("RGB", size, PAPER)
    page = ImageDraw.Draw(image)
    _write(page, (MARGIN, MARGIN - 4), title, 22)
    changed = float(np.mean(difference != 0))
    panels: list[tuple[str, str, NDArray[Any], Callable[[NDArray[Any]], Colours]]] = [
        ("original", f"grey levels {low:g} (black) to {high:g} (white)", original, grey),
        ("decoded", "the same grey window", decoded, grey),
        ("decoded - original", f"{changed:.0%} of the plane's pixels changed", difference, signed),
    ]
    for row, (box, factor) in enumerate(((outer, scale), (inner, scale * ZOOM))):
        top = MARGIN + 40 + row * (PANEL + LABEL)
        for column, (name, detail, plane, paint) in enumerate(panels):
            left = MARGIN + column * (PANEL + GAP)
            caption = f"{name}, {factor}:1" if row == 0 else f"{name}, the framed part, {factor}:1"
            _write(page, (left, top), caption, 18)
            _write(page, (left, top + 23), detail, 15, FAINT)
            pixels = np.kron(paint(box.of(plane)), np.ones((factor, factor, 1), np.uint8))
            image.paste(Image.fromarray(pixels), (left, top + LABEL - 4))
            if row == 0:
                _frame(page, (left, top + LABEL - 4), outer, inner, scale)
    bottom = MARGIN + 40 + 2 * (PANEL + LABEL) + 8
    if pixel_size:
        _scale_bar(page, (MARGIN, bottom), pixel_size, scale)
    _colour_bar(image, page, (MARGIN + 2 * (PANEL + GAP), bottom), tolerance, float(np.abs(difference).max()))
    image.save(path, "PNG")


def _busiest(plane: NDArray[Any], within: Box, side: int) -> Box:
    """Return the square of `side` pixels, on a coarse raster, whose grey levels spread most."""
    rows, columns = min(side, within.rows), min(side, within.columns)
    step = max(1, side // 4)
    boxes = [
        Box(row, column, rows, columns)
        for row in range(within.row, within.row + within.rows - rows + 1, step)
        for column in range(within.column, within.column + within.columns - columns + 1, step)
    ]
    return max(boxes, key=lambda box: float(box.of(plane).std()))


def _window(part: NDArray[Any]) -> tuple[float, float]:
    """Return the grey levels shown black and white: all but the outermost pixels keep their shade."""
    low, high = np.percentile(part, (0.2, 99.6))
    return (float(np.floor(low)), float(np.ceil(high))) if high > low else (float(low), float(low) + 1)


def _blue_white_red(part: NDArray[np.float64]) -> Colours:
    """Return colours for -1 (blue) over 0 (white) to 1 (red); both ends are equally dark."""
    amount = np.clip(part, -1, 1)[..., None]
    ends = np.where(amount < 0, np.array(BELOW, float), np.array(ABOVE, float))
    return np.asarray(np.rint(255 + np.abs(amount) * (ends - 255)), np.uint8)


def _write(
    page: ImageDraw, at: tuple[int, int], text: str, size: int, colour: tuple[int, int, int] = INK, anchor: str = "la"
) -> None:
    from PIL import ImageFont

    # Pillow's own font, the only one that is there everywhere, has no micro and no minus sign: texts here are ASCII.
    page.text(at, text, fill=colour, font=ImageFont.load_default(size), anchor=anchor)


def _frame(page: ImageDraw, corner: tuple[int, int], outer: Box, inner: Box, scale: int) -> None:
    """Mark the part that the lower row enlarges."""
    left = corner[0] + (inner.column - outer.column) * scale
    top = corner[1] + (inner.row - outer.row) * scale
    page.rectangle((left, top, left + inner.columns * scale - 1, top + inner.rows * scale - 1), outline=FRAME, width=2)


def _scale_bar(page: ImageDraw, at: tuple[int, int], pixel_size: float, scale: int) -> None:
    """Draw one bar that stands for both rows: the lower one is enlarged by `ZOOM`."""
    fits = [m * 10.0**e for e in range(-3, 6) for m in (1, 2, 5)]
    length = max((n for n in fits if n / pixel_size * scale <= PANEL / 3), default=fits[0])
    width = round(length / pixel_size * scale)
    page.rectangle((at[0], at[1] + 4, at[0] + width, at[1] + 9), fill=INK)
    text = f"{length:g} micrometres in the upper row, {length / ZOOM:g} in the lower row"
    _write(page, (at[0], at[1] + 16), text, 16)


def _colour_bar(image: Any, page: ImageDraw, at: tuple[int, int], tolerance: float, largest: float) -> None:
    """Draw the scale of differences, from minus the tolerance to the tolerance."""
    from PIL import Image

    ramp = np.broadcast_to(np.linspace(-1, 1, PANEL), (14, PANEL))
    image.paste(Image.fromarray(_blue_white_red(ramp)), at)
    page.rectangle((at[0], at[1], at[0] + PANEL - 1, at[1] + 13), outline=FAINT)
    end = f"{tolerance:g}" if tolerance > 0 else "1"
    _write(page, (at[0], at[1] + 17), f"-{end}", 16)
    _write(page, (at[0] + PANEL // 2, at[1] + 17), "0", 16, anchor="ma")
    _write(page, (at[0] + PANEL, at[1] + 17), f"+{end}", 16, anchor="ra")
    words = f"tolerance {tolerance:g}; largest difference in this plane {largest:g}"
    _write(page, (at[0] + PANEL // 2, at[1] + 37), words, 16, anchor="ma")
