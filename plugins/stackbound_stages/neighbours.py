"""Predict by a weighted sum of decoded neighbours, on top of a coarse transform where that pays."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING

from stackbound import hookimpl
from stackbound.stages import Options, Plan, Predict, Stage

if TYPE_CHECKING:
    from stackbound.lattice import LatticeTile
    from stackbound.prediction import Prediction


class NeighbourOptions(Options):
    """What to use, where the user wants to choose; by measured size when not given."""

    stack: bool | None = None
    """Whether to use the plane before."""

    clamped: bool | None = None
    """Whether a prediction stays between its nearest neighbours."""

    base: bool | None = None
    """Whether a coarse transform lies under the neighbours."""


class PredictNeighbours(Predict):
    """Let decoded neighbours foresee each pixel, with weights fitted to the stack."""

    name = "neighbours"
    Options = NeighbourOptions
    options: NeighbourOptions

    def plan(self, samples: Sequence[LatticeTile], size: Callable[[LatticeTile, Prediction], int]) -> Plan:
        """Return weights and switches for a stack."""
        from stackbound.neighbourplan import Fixed, search

        fixed = Fixed(self.options.stack, self.options.clamped, self.options.base)
        return search(samples, fixed, self.transform, self.quantize, size)

    def predict(self, tile: LatticeTile, plan: Plan, size: Callable[[LatticeTile, Prediction], int]) -> Prediction:
        """Return weights and, where one is used, the base of one tile."""
        from stackbound.neighbourplan import predicted

        return predicted(tile, plan or self.plan([tile], size), self.transform, self.quantize)


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [PredictNeighbours]
