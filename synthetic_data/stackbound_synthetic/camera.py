"""A camera whose noise is known exactly: photons, gain, offset, read noise, hot pixels, saturation."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln, ndtr, xlogy  # type: ignore[import-untyped]  # scipy ships no types

from stackbound_synthetic.seeds import generator

HOT_PIXELS = 1
"""Purpose of the random numbers (see `generator`) that place hot pixels."""


@dataclass(frozen=True)
class Camera:
    """A scientific camera after the linear model of EMVA 1288.

    A pixel that expects e electrons reads ``round(gain * Poisson(e) + offset + Normal(0, read_noise))``, held between 0
    and `saturation`. Away from the ends its mean is ``offset + gain * e`` and its variance
    ``gain**2 * e + read_noise**2 + 1/12``; the last term is the rounding.

    Attributes
    ----------
    gain : float
        Grey levels per electron.
    offset : float
        Grey level without light.
    read_noise : float
        Standard deviation of the electronics, in grey levels.
    saturation : int
        Largest grey level.
    hot_fraction : float
        Share of pixels that leak electrons; always the same pixels of a camera.
    hot_electrons : float
        Mean leakage of a hot pixel, in electrons per exposure.
    """

    gain: float = 0.46
    offset: float = 100.0
    read_noise: float = 1.6
    saturation: int = 65535
    hot_fraction: float = 2e-5
    hot_electrons: float = 900.0

    @property
    def dtype(self) -> np.dtype[Any]:
        """uint8 or uint16, whichever holds `saturation`."""
        return np.dtype(np.uint8 if self.saturation < 256 else np.uint16)

    def leakage(self, shape: tuple[int, int], seed: int) -> NDArray[np.float32]:
        """Return the electrons that each pixel of a sensor leaks per exposure, float32 of `shape`."""
        electrons = np.zeros(shape, np.float32)
        count = round(self.hot_fraction * shape[0] * shape[1])
        if count:
            random = generator(seed, HOT_PIXELS)
            places = random.choice(electrons.size, count, replace=False)
            electrons.flat[places] = random.exponential(self.hot_electrons, count)
        return electrons

    def expected(self, electrons: NDArray[np.float32]) -> NDArray[np.float32]:
        """Return the noiseless signal in grey levels, before rounding and saturation."""
        return np.float32(self.gain) * electrons + np.float32(self.offset)

    def variance(self, electrons: NDArray[np.float32]) -> NDArray[np.float32]:
        """Return the variance of the grey levels away from the ends of the range, rounding included."""
        constant = self.read_noise**2 + 1 / 12
        return np.float32(self.gain**2) * electrons + np.float32(constant)

    def expose(self, electrons: NDArray[np.float32], random: np.random.Generator) -> NDArray[Any]:
        """Return one exposure as `dtype`.

        Parameters
        ----------
        electrons : ndarray of float32
            Expected electrons per pixel, 0 or more.
        random : numpy.random.Generator
            Drawn from in a fixed order: all photon numbers, then all read noise.
        """
        grey = random.poisson(electrons).astype(np.float32)
        grey *= np.float32(self.gain)
        grey += np.float32(self.offset)
        grey += random.standard_normal(electrons.shape, np.float32) * np.float32(self.read_noise)
        return np.clip(np.rint(grey, out=grey), 0, self.saturation, out=grey).astype(self.dtype)

    def probabilities(self, electrons: float) -> tuple[int, NDArray[np.float64]]:
        """Return the exact distribution of the grey level of a pixel.

        Returns
        -------
        first : int
            The lowest grey level listed.
        probabilities : ndarray of float64
            One per grey level from `first` on; what is left out is below 1e-12.
        """
        spread = 8 * np.sqrt(electrons) + 30
        photons = np.arange(max(0, int(electrons - spread)), int(electrons + spread) + 1)
        weights = np.exp(xlogy(photons, electrons) - electrons - gammaln(photons + 1))
        centres = self.gain * photons + self.offset
        margin = 8 * self.read_noise + 1
        first = min(self.saturation, max(0, int(centres[0] - margin)))
        last = min(self.saturation, int(centres[-1] + margin) + 1)
        edges = np.arange(first, last + 2) - 0.5
        below = ndtr((edges[:, None] - centres) / self.read_noise) if self.read_noise else edges[:, None] > centres
        below = np.where(edges[:, None] < 0, 0.0, below)
        below[edges > self.saturation] = 1.0
        return first, np.diff(below, axis=0) @ weights

    def bits(self, electrons: float, tolerance: int = 0) -> float:
        """Return the entropy of a pixel, in bits, in bins of ``2 * tolerance + 1`` levels centred on its signal.

        No coder that knows the signal exactly, and nothing of the noise, spends fewer bits on average when it keeps the
        bin of each pixel.
        """
        first, probabilities = self.probabilities(electrons)
        width = 2 * tolerance + 1
        centre = round(self.gain * electrons + self.offset)
        bins = (first + np.arange(len(probabilities)) - centre + tolerance) // width
        mass = np.bincount(bins - bins[0], weights=probabilities)
        mass = mass[mass > 0]
        return float(-(mass * np.log2(mass)).sum())
