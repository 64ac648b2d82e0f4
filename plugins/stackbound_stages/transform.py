"""Predict by a quantized block transform."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

from stackbound.plugins import hookimpl
from stackbound.stages import Options, Plan, Predict, Stage

if TYPE_CHECKING:
    from stackbound.lattice import LatticeTile
    from stackbound.prediction import Prediction


class TransformOptions(Options):
    """Block and step, where the user wants to choose them."""

    block: list[int] | None = None
    """Shape of a block along z, y and x, each 1, 2, 4, 8, 16 or 32 (z at most 16); chosen by measured size when not given."""

    step: int | None = None
    """Step of the quantizer in multiples of a quarter of 2E+1 (E: the tolerance); chosen by measured size when not given."""


class PredictTransform(Predict):
    """Transform blocks, keep coarse indices, and let the decoder's integer inverse foresee the tile."""

    name = "transform"
    Options = TransformOptions

    def predict(self, tile: LatticeTile, plan: Plan, size: Callable[[LatticeTile, Prediction], int]) -> Prediction:
        """Return block shape, steps and indices for one tile."""
        from stackbound.prediction import NoPrediction

        return NoPrediction()


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [PredictTransform]
