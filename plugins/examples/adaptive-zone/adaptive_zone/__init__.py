"""Quantize with a dead zone that is wider where a block is quiet."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from pydantic import Field
from stackbound import hookimpl
from stackbound.stages import Options, Quantize, Stage


class AdaptiveZoneOptions(Options):
    """How much the zone adapts."""

    widening: float = Field(default=0.3, ge=0.0, le=2.0)
    """What is added to half a step where a block is quiet; 0 is plain rounding."""

    quiet: float = Field(default=1.0, gt=0.0)
    """Mean magnitude of a block, in steps, at which the widening has fallen to about a third."""


class AdaptiveZone(Quantize):
    """Round to the nearest multiple of the step, but small coefficients of quiet blocks to zero."""

    name = "adaptive-zone"
    Options = AdaptiveZoneOptions
    options: AdaptiveZoneOptions

    def indices(
        self, coefficients: NDArray[np.float32], steps: NDArray[np.float64], tolerance: int
    ) -> NDArray[np.int32]:
        """Return one index per coefficient."""
        scaled = coefficients / steps
        magnitude = np.abs(scaled)
        activity = magnitude.mean(axis=(1, 2, 3), keepdims=True)
        zone = 0.5 + self.options.widening * np.exp(-activity / self.options.quiet)
        kept = np.clip(np.rint(scaled), -(2**30), 2**30)
        return np.where(magnitude >= zone, kept, 0).astype(np.int32)


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stages of this plugin."""
    return [AdaptiveZone]
