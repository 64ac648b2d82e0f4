"""Quantize every frequency with one step."""

from __future__ import annotations

from typing import TYPE_CHECKING

from stackbound import hookimpl
from stackbound.stages import Options, Quantize, Stage

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray


class UniformOptions(Options):
    """No options."""


class Uniform(Quantize):
    """Round every coefficient to the nearest multiple of the tile's step."""

    name = "uniform"
    Options = UniformOptions

    def indices(
        self, coefficients: NDArray[np.float32], steps: NDArray[np.float64], tolerance: int
    ) -> NDArray[np.int32]:
        """Return the nearest index of every coefficient."""
        from stackbound.kernels.quantize import nearest

        return nearest(coefficients, steps)


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [Uniform]
