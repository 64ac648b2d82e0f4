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
    """What to use, where the user wants to choose; by measured size where not given."""

    stack: bool | None = None
    """Whether to use the plane before."""

    clamped: bool | None = None
    """Whether a prediction stays between its nearest neighbours."""

    base: bool | None = None
    """Whether a coarse transform may lie under the neighbours, tile by tile.

    When not given it is tried where a pixel takes little more than a bit: where noise is all there is and the tolerance
    twice the noise, it saves a tenth, at four times most. It takes as long as all the rest.
    """


class PredictNeighbours(Predict):
    """Let decoded neighbours foresee each pixel, with weights fitted to the stack."""

    name = "neighbours"
    Options = NeighbourOptions
    options: NeighbourOptions

    def plan(self, samples: Sequence[LatticeTile], size: Callable[[LatticeTile, Prediction], int]) -> Plan:
        """Return weights and switches for a stack."""
        from stackbound.neighbourplan import Fixed, search

        fixed = Fixed(self.options.stack, self.options.clamped, self.options.base)
        found = search(samples, fixed, self.transform, self.quantize)
        other = self._where_impossible()
        return found if found or other is None else {"transform": dict(other.plan(samples, size))}

    def predict(self, tile: LatticeTile, plan: Plan, size: Callable[[LatticeTile, Prediction], int]) -> Prediction:
        """Return weights and, where one is used, the base of one tile."""
        from stackbound.neighbourplan import possible, predicted
        from stackbound.prediction import NoPrediction

        plan = plan or self.plan([tile], size)
        if "taps" in plan and possible(tile):
            return predicted(tile, plan, self.transform, self.quantize)
        other = self._where_impossible()
        return NoPrediction() if other is None else other.predict(tile, plan.get("transform", {}), size)

    def _where_impossible(self) -> Predict | None:
        """Return what predicts tiles that cannot be coded in bands: very wide or flat ones, or many tolerances."""
        from stackbound_stages.transform import PredictTransform

        if self.transform is None or self.quantize is None:
            return None
        return PredictTransform(transform=self.transform, quantize=self.quantize)


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [PredictNeighbours]
