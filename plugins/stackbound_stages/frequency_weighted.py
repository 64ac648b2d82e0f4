"""Quantize fine structure more coarsely than coarse structure."""

from __future__ import annotations

from typing import TYPE_CHECKING

from pydantic import Field, PositiveFloat, model_validator
from stackbound import hookimpl
from stackbound.stages import Index, Options, Quantize, Stage

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray


class FrequencyWeightedOptions(Options):
    """How the step grows with spatial frequency."""

    slope: float = Field(default=1.0, ge=0.0, le=100.0)
    """The step is multiplied by 1 + slope * f, f being the frequency's distance from the mean, 1 at the highest."""

    matrix: list[list[PositiveFloat]] | None = None
    """Factors per frequency along y (rows) and x (columns) instead, brought to the block's shape in between."""

    @model_validator(mode="after")
    def _rectangular(self) -> FrequencyWeightedOptions:
        if self.matrix is not None and (not self.matrix or len({len(row) for row in self.matrix}) != 1):
            raise ValueError("the matrix needs rows of one length")
        if self.matrix is not None and not self.matrix[0]:
            raise ValueError("the matrix is empty")
        return self


class FrequencyWeighted(Quantize):
    """Spend the prediction's bits on coarse structure; the tolerance holds for every pixel all the same.

    What the transform leaves out of fine structure, the residual brings back wherever it is above the tolerance.
    """

    name = "frequency-weighted"
    Options = FrequencyWeightedOptions
    options: FrequencyWeightedOptions

    def weights(self, block: Index) -> NDArray[np.float64]:
        """Return the factor of the step for each frequency."""
        import numpy as np

        if self.options.matrix is None:
            lengths = [max(side - 1, 1) for side in block]
            squares = sum((axis / length) ** 2 for axis, length in zip(np.indices(block), lengths, strict=True))
            reached = max(1, sum(side > 1 for side in block))
            return np.asarray(1.0 + self.options.slope * np.sqrt(squares / reached), np.float64)
        rows = np.array(self.options.matrix, np.float64)
        rows = np.stack([np.interp(_places(block[2]), _places(rows.shape[1]), row) for row in rows])
        plane = np.stack([np.interp(_places(block[1]), _places(rows.shape[0]), row) for row in rows.T], 1)
        return np.broadcast_to(plane, block).copy()

    def indices(
        self, coefficients: NDArray[np.float32], steps: NDArray[np.float64], tolerance: int
    ) -> NDArray[np.int32]:
        """Return the nearest index of every coefficient."""
        from stackbound.kernels.quantize import nearest

        return nearest(coefficients, steps)


def _places(length: int) -> NDArray[np.float64]:
    """Return where the entries of a row lie between 0 and 1."""
    import numpy as np

    return np.linspace(0.0, 1.0, length) if length > 1 else np.zeros(1)


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [FrequencyWeighted]
