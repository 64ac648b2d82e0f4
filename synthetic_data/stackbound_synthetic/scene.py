"""An invented tissue under a light sheet: nuclei, fibres and vessels in a body with dark gaps, one plane at a time.

The tissue fills all space and is made of cells of a lattice, each with its own random numbers: a stack of any size is a
window into it, and a plane needs only the cells that it cuts. All lengths are in micrometres.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from stackbound_synthetic.seeds import generator
from stackbound_synthetic.smooth import smooth

Plane = NDArray[np.float32]

NUCLEI, FIBRES, VESSELS, BODY, STRIPES = 2, 3, 4, 5, 6
"""Purposes of random numbers (see `generator`)."""

NUCLEUS_CELL = 17.0
FIBRE_CELL = 40.0
VESSEL_SPACING = (32.0, 75.0)
"""Distance of neighbouring vessels along z and y; they run along x."""


@dataclass(frozen=True)
class LightSheetScene:
    """Expected electrons of each pixel of an invented light-sheet stack.

    Channel 0 shows nuclei, channel 1 fibres and vessel walls; both lie on the faint light of the tissue itself. The
    sheet is thinnest in the middle of the picture, light is lost with depth, and what the sheet met on its way throws
    stripes along x, as in real instruments.

    Attributes
    ----------
    seed : int
        Everything follows from it.
    size : tuple of int
        Rows and columns of a plane.
    pixel : tuple of float
        Distance between pixels along z, y and x.
    blur : tuple of float
        Standard deviation of the point spread function along z and sideways.
    brightness : float
        Multiplies all light.
    """

    seed: int
    size: tuple[int, int] = (1024, 1024)
    pixel: tuple[float, float, float] = (1.0, 0.325, 0.325)
    blur: tuple[float, float] = (0.9, 0.38)
    brightness: float = 1.0
    channel_names: tuple[str, ...] = field(default=("nuclei", "fibres and vessels"), init=False)

    def plane(self, channel: int, z: int) -> Plane:
        """Return the expected electrons of one plane, float32 of `size`."""
        depth = z * self.pixel[0]
        y, x = (np.arange(n, dtype=np.float32) * np.float32(p) for n, p in zip(self.size, self.pixel[1:], strict=True))
        light = self._nuclei(depth) if channel == 0 else self._fibres(depth) + self._vessels(depth, x)
        light = smooth(light, [self.blur[1] / p for p in self.pixel[1:]])
        body = self._body(depth, y, x)
        light += np.float32(14.0 if channel == 0 else 24.0)
        light *= body
        light += np.float32(3.0)
        light *= self._illumination(z, depth, y, x)
        return light

    def _nuclei(self, depth: float) -> Plane:
        """Draw the nuclei cut at `depth`: ellipsoids with a soft border and a grain of chromatin."""
        light = np.zeros(self.size, np.float32)
        layer = int(depth // NUCLEUS_CELL)
        rows, columns = (int(n * p // NUCLEUS_CELL) for n, p in zip(self.size, self.pixel[1:], strict=True))
        for cz in (layer - 1, layer, layer + 1):
            for cy in range(-1, rows + 2):
                for cx in range(-1, columns + 2):
                    for nucleus in _nuclei_of_cell(self.seed, cz, cy, cx):
                        nucleus.draw(light, depth, self.pixel, self.blur[0])
        return light

    def _fibres(self, depth: float) -> Plane:
        """Draw the fibres near `depth` as points along their curves; the lateral blur joins them."""
        rows, columns = (int(n * p // FIBRE_CELL) for n, p in zip(self.size, self.pixel[1:], strict=True))
        layer = int(depth // FIBRE_CELL)
        cells = [
            _fibres_of_cell(self.seed, cz, cy, cx)
            for cz in (layer - 1, layer, layer + 1)
            for cy in range(-1, rows + 2)
            for cx in range(-1, columns + 2)
        ]
        z, y, x, light = np.concatenate(cells, axis=1)
        weight = light * np.exp(-0.5 * ((z - depth) / self.blur[0]) ** 2)
        row, column = np.rint(y / self.pixel[1]).astype(np.int64), np.rint(x / self.pixel[2]).astype(np.int64)
        inside = (weight > 0.5) & (row >= 0) & (row < self.size[0]) & (column >= 0) & (column < self.size[1])
        places = row[inside] * self.size[1] + column[inside]
        drawn = np.bincount(places, weights=weight[inside], minlength=self.size[0] * self.size[1])
        return drawn.astype(np.float32).reshape(self.size)

    def _vessels(self, depth: float, x: Plane) -> Plane:
        """Draw the walls of tubes that wander along x."""
        light = np.zeros(self.size, np.float32)
        layer = int(depth // VESSEL_SPACING[0])
        last = int(self.size[0] * self.pixel[1] // VESSEL_SPACING[1])
        columns = np.arange(self.size[1])
        for cz in range(layer - 1, layer + 2):
            for cy in range(-1, last + 2):
                random = generator(self.seed, VESSELS, cz, cy)
                radius = random.uniform(4.0, 10.0)
                strength = np.float32(random.lognormal(5.3, 0.5))
                centre_z, centre_y = (
                    (c + random.uniform(0.3, 0.7)) * s + wander * _wander(random, x)
                    for c, s, wander in zip((cz, cy), VESSEL_SPACING, (0.25, 1.0), strict=True)
                )
                reach = int((radius + 3.0) / self.pixel[1])
                rows = np.rint(centre_y / self.pixel[1]).astype(np.int64) + np.arange(-reach, reach + 1)[:, None]
                distance = np.hypot(rows * np.float32(self.pixel[1]) - centre_y, depth - centre_z)
                wall = strength * np.exp(-0.5 * ((distance - radius) / self.blur[0]) ** 2)
                inside = (rows >= 0) & (rows < self.size[0]) & (wall > 0.5)
                light[rows[inside], np.broadcast_to(columns, rows.shape)[inside]] += wall[inside].astype(np.float32)
        return light

    def _body(self, depth: float, y: Plane, x: Plane) -> Plane:
        """Return where there is tissue (1) and where a gap (0), with soft borders: a sum of long waves, squashed."""
        random = generator(self.seed, BODY)
        total, wave = np.full(self.size, 1.3, np.float32), np.empty(self.size, np.float32)
        for _ in range(5):
            waves = random.normal(size=3) / random.uniform(12.0, 40.0)
            a = (waves[1] * y + (random.uniform(0.0, 2 * np.pi) + waves[0] * depth)).astype(np.float32)
            b = np.float32(waves[2]) * x
            # cos(a + b) as two products; a matrix product would round differently with the threads of its library.
            total += np.multiply(np.cos(a)[:, None], np.cos(b), out=wave)
            total -= np.multiply(np.sin(a)[:, None], np.sin(b), out=wave)
        return np.asarray(1 / (1 + np.exp(np.clip(-4 * total, -30, 30))), np.float32)

    def _illumination(self, z: int, depth: float, y: Plane, x: Plane) -> Plane:
        """Return the brightness of the sheet: its waist, the loss with depth, and stripes that grow along x."""
        width = max(float(x[-1]), 1.0)
        waist = 1 / np.sqrt(1 + ((x - 0.45 * width) / (0.9 * width)) ** 2)
        stripes = np.zeros(len(y), np.float32)
        for below, share in ((z // 8, 1 - z % 8 / 8), (z // 8 + 1, z % 8 / 8)):
            noise = generator(self.seed, STRIPES, below).standard_normal(len(y), np.float32)
            stripes += np.float32(share) * smooth(noise, 3.0)
        shadow = np.clip(1 - 0.45 * np.clip(stripes, 0, None)[:, None] * (0.3 + x / width), 0.2, 1)
        return np.asarray(self.brightness * np.exp(-depth / 400.0) * waist * shadow, np.float32)


@dataclass(frozen=True)
class _Nucleus:
    centre: NDArray[np.float64]
    """z, y, x."""
    radii: NDArray[np.float64]
    """Along z and along two axes of the plane."""
    angle: float
    light: float
    grain: NDArray[np.float64]
    """Two wave vectors and a phase each: 2 x 4."""

    def draw(self, light: Plane, depth: float, pixel: tuple[float, float, float], soft: float) -> None:
        """Add the cut at `depth` to `light`."""
        above = depth - self.centre[0]
        blur = soft / float(self.radii.min())
        reach = float(self.radii[1:].max()) * (1 + blur)
        if abs(above) > self.radii[0] * (1 + blur):
            return
        bounds = [
            (max(0, int((c - reach) / p)), min(n, int((c + reach) / p) + 1))
            for c, p, n in zip(self.centre[1:], pixel[1:], light.shape, strict=True)
        ]
        if any(low >= high for low, high in bounds):
            return
        y, x = (
            np.arange(low, high, dtype=np.float32) * np.float32(p) - np.float32(c)
            for (low, high), p, c in zip(bounds, pixel[1:], self.centre[1:], strict=True)
        )
        y = y[:, None]
        cos, sin = np.float32(np.cos(self.angle)), np.float32(np.sin(self.angle))
        u, v = (y * cos + x * sin) / np.float32(self.radii[1]), (x * cos - y * sin) / np.float32(self.radii[2])
        distance = np.sqrt(u * u + v * v + np.float32((above / self.radii[0]) ** 2))
        inside = np.clip((np.float32(1 + blur) - distance) / np.float32(2 * blur), 0, 1)
        density = inside * inside * (3 - 2 * inside)
        waves = [np.cos(g[1] * y + g[2] * x + (g[0] * above + g[3])) for g in self.grain.astype(np.float32)]
        part = light[bounds[0][0] : bounds[0][1], bounds[1][0] : bounds[1][1]]
        part += np.float32(self.light) * density * (1 + np.float32(0.35) * waves[0] * waves[1])


@lru_cache(maxsize=20_000)
def _nuclei_of_cell(seed: int, cz: int, cy: int, cx: int) -> tuple[_Nucleus, ...]:
    random = generator(seed, NUCLEI, cz, cy, cx)
    found = []
    for _ in range(random.integers(1, 4)):
        centre = (np.array([cz, cy, cx]) + random.uniform(0, 1, 3)) * NUCLEUS_CELL
        radii = random.uniform([2.5, 2.6, 3.4], [4.5, 4.2, 6.5])
        grain = np.column_stack([random.normal(0, 1.1, (2, 3)), random.uniform(0, 2 * np.pi, 2)])
        found.append(_Nucleus(centre, radii, random.uniform(0, np.pi), random.lognormal(5.8, 0.5), grain))
    return tuple(found)


@lru_cache(maxsize=2_000)
def _fibres_of_cell(seed: int, cz: int, cy: int, cx: int) -> NDArray[np.float32]:
    """Return z, y, x and light of points along the fibres that start in one cell, 0.25 apart, 60 in all."""
    random = generator(seed, FIBRES, cz, cy, cx)
    curves = [np.zeros((4, 0))]
    for _ in range(random.integers(3, 9)):
        start = (np.array([cz, cy, cx]) + random.uniform(0, 1, 3)) * FIBRE_CELL
        turn = np.cumsum(random.normal(0, 0.05, 240)) + random.uniform(0, 2 * np.pi)
        tilt = random.normal(0, 0.06) + np.cumsum(random.normal(0, 0.005, 240))
        steps = 0.25 * np.stack([np.sin(tilt), np.cos(tilt) * np.sin(turn), np.cos(tilt) * np.cos(turn)])
        light = np.full((1, 240), random.lognormal(6.9, 0.4))
        curves.append(np.vstack([start[:, None] + np.cumsum(steps, axis=1), light]))
    return np.concatenate(curves, axis=1).astype(np.float32)


def _wander(random: np.random.Generator, x: Plane) -> Plane:
    """Return a smooth offset along x: three waves of falling size."""
    offset = np.zeros(len(x), np.float32)
    for length, size in ((150.0, 10.0), (60.0, 4.0), (25.0, 1.0)):
        phase = np.float32(random.uniform(0, 2 * np.pi))
        offset += np.float32(size) * np.sin(x * np.float32(2 * np.pi / length) + phase)
    return offset
