"""How noisy a stack is: a robust estimate for real stacks, the exact entropy for stacks of a known camera."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray
from stackbound_synthetic import Camera

GAUSSIAN_MAD = 1.482602218505602
"""1 / Phi^-1(3/4): turns the median absolute deviation of a Gaussian into its standard deviation."""


def measured_noise(stack: NDArray[Any], *, planes: int = 64) -> float:
    """Return a robust standard deviation of the pixel noise of a stack.

    The diagonal detail of the Haar wavelet, (a - b - c + d) / 2 over every 2x2 neighbourhood, holds little but noise;
    its median absolute deviation over 0.6745 estimates the noise (Donoho & Johnstone, Biometrika 81:425, 1994). Details
    of exactly zero are left out: padding, saturation and areas that the scanner set to a constant carry no noise.

    Parameters
    ----------
    stack : ndarray, shape (..., y, x)
        Pixel values of any real dtype.
    planes : int
        At most this many planes, evenly spaced, are looked at.

    Returns
    -------
    float
        In stored pixel values; 0.0 where nothing varies.
    """
    flat = stack.reshape(-1, *stack.shape[-2:])
    chosen = np.unique(np.linspace(0, len(flat) - 1, min(planes, len(flat))).round().astype(int))
    details = []
    for index in chosen:
        p = flat[index].astype(np.float64)
        detail = (p[1:, 1:] - p[:-1, 1:] - p[1:, :-1] + p[:-1, :-1]) / 2
        details.append(np.abs(detail[detail != 0]))
    pooled = np.concatenate(details)
    return GAUSSIAN_MAD * float(np.median(pooled)) if pooled.size else 0.0


def tolerance_for(noise: float, multiple: float, dtype: np.dtype[Any]) -> int | float:
    """Return `multiple` times the noise as a tolerance; for integers a whole number, at least 1 unless lossless."""
    if multiple == 0:
        return 0
    if dtype.kind == "f":
        return multiple * noise
    return max(1, math.floor(multiple * noise + 0.5))


def entropy(camera: Camera, electrons: NDArray[np.float32], *, pixels: int = 500) -> Callable[[int], float]:
    """Return a function that gives the mean entropy of the camera's noise, in bits per pixel, at a tolerance.

    Each pixel's grey level falls into bins of ``2 * tolerance + 1`` levels centred on its own noiseless signal; a coder
    that knew that signal and the camera could not spend less on average. The mean is taken over `pixels` pixels evenly
    spaced in the order of their brightness, on which the entropy depends smoothly.
    """
    order = np.sort(electrons, axis=None)
    chosen = order[((np.arange(pixels) + 0.5) / pixels * len(order)).astype(np.int64)]

    def floor(tolerance: int) -> float:
        return float(np.mean([camera.bits(float(e), tolerance) for e in chosen]))

    return floor
