"""Quantize with a dead zone: small coefficients become zero.

The machine asks for one whole number per coefficient; the decoder forms ``index * step``. Whatever the numbers are, the
residual pulls every pixel back inside the tolerance, so they decide the size of the store alone.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from stackbound import hookimpl
from stackbound.stages import Options, Quantize, Stage


class MyStageOptions(Options):
    """What a configuration may say under [quantize] beside the name."""

    zone: float = Field(default=0.6, ge=0.5, le=2.0)
    """Coefficients below this many steps become zero; 0.5 is plain rounding."""


class MyStage(Quantize):
    """Round to the nearest multiple of the step, but small coefficients to zero."""

    name = "my-stage"
    Options = MyStageOptions
    options: MyStageOptions

    def indices(
        self, coefficients: NDArray[np.float32], steps: NDArray[np.float64], tolerance: int
    ) -> NDArray[np.int32]:
        """Return one index per coefficient.

        `coefficients` has the shape (blocks, bz, by, bx) and is read-only, `steps` (bz, by, bx) holds the step of each
        frequency in the same unit, and `tolerance` is the tile's in steps of its lattice.
        """
        scaled = coefficients / steps
        kept = np.abs(scaled) >= self.options.zone
        return np.where(kept, np.clip(np.rint(scaled), -(2**30), 2**30), 0).astype(np.int32)


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stages of this plugin."""
    return [MyStage]
