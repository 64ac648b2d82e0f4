"""The one image filter that the scenes use."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter  # type: ignore[import-untyped]  # scipy ships no types


def smooth(image: NDArray[np.float32], sigma: float | Sequence[float], mode: str = "reflect") -> NDArray[np.float32]:
    """Return `image` convolved with a Gaussian of standard deviation `sigma` (pixels, one or one per axis)."""
    return np.asarray(gaussian_filter(image, sigma, mode=mode, truncate=3.0), np.float32)
