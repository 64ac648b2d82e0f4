"""Smaller invented scenes: membranes in an electron microscope, stained tissue, a phantom in a CT scanner."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from stackbound_synthetic.seeds import generator
from stackbound_synthetic.smooth import smooth

MEMBRANES, STAINS, PHANTOM = 10, 11, 12
"""Purposes of random numbers (see `generator`)."""

PADDING = -2000
"""Grey level of the pixels that a CT scanner does not see."""


def _smooth_noise(random: np.random.Generator, size: tuple[int, int], scale: float) -> NDArray[np.float32]:
    """Return a random field of unit variance that varies over `scale` pixels."""
    field_ = smooth(random.standard_normal(size, np.float32), scale, mode="wrap")
    spread = float(field_.std())
    return field_ / np.float32(spread if spread > 0 else 1)


@dataclass(frozen=True)
class MembraneScene:
    """Membranes (where slow random fields cross zero) and vesicles on a grey ground; changes slowly from z to z."""

    seed: int
    size: tuple[int, int] = (256, 256)
    pixel: tuple[float, float, float] = (0.03, 0.005, 0.005)
    channel_names: tuple[str, ...] = field(default=("backscattered electrons",), init=False)

    def plane(self, channel: int, z: int) -> NDArray[np.float32]:
        """Return the expected electrons of one section."""
        fields = []
        for index, scale in enumerate((14.0, 7.0)):
            first, second = (_smooth_noise(generator(self.seed, MEMBRANES, index, k), self.size, scale) for k in (0, 1))
            turn = np.float32(0.15 * z)
            fields.append(first * np.cos(turn) + second * np.sin(turn))
        membranes = np.exp(-((fields[0] / np.float32(0.12)) ** 2))
        vesicles = 1 / (1 + np.exp(np.clip(-12 * (fields[1] - np.float32(1.6)), -30, 30)))
        return np.asarray(190.0 * (1 - 0.55 * membranes) * (1 - 0.35 * vesicles), np.float32)


@dataclass(frozen=True)
class StainScene:
    """Tissue in transmitted light: two stains that absorb red, green and blue by the Beer-Lambert law."""

    seed: int
    size: tuple[int, int] = (256, 256)
    pixel: tuple[float, float, float] = (1.0, 0.5, 0.5)
    channel_names: tuple[str, ...] = field(default=("red", "green", "blue"), init=False)

    def plane(self, channel: int, z: int) -> NDArray[np.float32]:
        """Return the expected electrons of one colour."""
        cells, ground = (
            _smooth_noise(generator(self.seed, STAINS, z, k), self.size, s) for k, s in ((0, 5.0), (1, 9.0))
        )
        nuclear = 0.9 / (1 + np.exp(np.clip(-6 * (cells - 0.9), -30, 30)))
        matrix = 0.35 / (1 + np.exp(np.clip(-2 * ground, -30, 30)))
        absorbed = (0.65, 0.70, 0.29)[channel] * nuclear + (0.07, 0.99, 0.11)[channel] * matrix
        return np.asarray(4800.0 * np.exp(-2.3 * absorbed), np.float32)


def ct_phantom(shape: tuple[int, int, int] = (4, 128, 128), seed: int = 24) -> NDArray[np.int16]:
    """Return slices like those of a CT scanner, int16, in Hounsfield units.

    A body of water with inserts of bone, fat and air; noise of about 12 units that is smooth over neighbouring pixels,
    as a reconstruction leaves it; outside the circle of the scanner every pixel is `PADDING`.

    Parameters
    ----------
    shape : tuple of int
        Slices, rows, columns.
    seed : int
        Everything follows from it.
    """
    _, rows, columns = shape
    y, x = np.mgrid[-1 : 1 : rows * 1j, -1 : 1 : columns * 1j].astype(np.float32)
    slices = []
    for z in range(shape[0]):
        level = np.full((rows, columns), -1000, np.float32)
        level[(x / 0.75) ** 2 + (y / 0.6) ** 2 < 1] = 20
        inserts = ((-0.35, -0.1, 0.16, 900), (0.3, 0.15, 0.2, -90), (0.05, -0.3, 0.1, -1000), (0.1, 0.35, 0.07, 300))
        for at_x, at_y, radius, value in inserts:
            level[(x - at_x - 0.01 * z) ** 2 + (y - at_y) ** 2 < radius**2] = value
        noise = _smooth_noise(generator(seed, PHANTOM, z), (rows, columns), 0.7) * 12
        slice_ = np.rint(smooth(level, 0.8) + noise)
        slice_[x**2 + y**2 > 1] = PADDING
        slices.append(slice_)
    return np.stack(slices).astype(np.int16)
