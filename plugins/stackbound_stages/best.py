"""Predict by whichever of several predictors makes a tile smallest."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING

from pydantic import Field, field_validator
from stackbound import hookimpl
from stackbound.stages import Options, Plan, Predict, Stage

if TYPE_CHECKING:
    from stackbound.lattice import LatticeTile
    from stackbound.prediction import Prediction


class BestOptions(Options):
    """Among which predictors to choose."""

    among: list[str] = Field(default=["neighbours"], min_length=1)
    """Names of predict stages, each used with its default options.

    Neighbours alone unless said otherwise: on every stack measured it was smaller than the others, and each further
    name costs its planning and a trial per tile.
    """

    @field_validator("among")
    @classmethod
    def _others(cls, among: list[str]) -> list[str]:
        if "best" in among or len(set(among)) != len(among):
            raise ValueError("name each predictor once, and not best itself")
        return among


class PredictBest(Predict):
    """Try several predictors on the middle of each tile and keep the one that takes the fewest bytes."""

    name = "best"
    Options = BestOptions
    options: BestOptions

    def plan(self, samples: Sequence[LatticeTile], size: Callable[[LatticeTile, Prediction], int]) -> Plan:
        """Return what each predictor plans."""
        return {name: dict(stage.plan(samples, size)) for name, stage in self._stages().items()}

    def predict(self, tile: LatticeTile, plan: Plan, size: Callable[[LatticeTile, Prediction], int]) -> Prediction:
        """Return the prediction of the best predictor; of equal ones, the first named."""
        from stackbound.blocksearch import sample

        stages = self._stages()
        piece = sample(tile)

        def bytes_of(name: str) -> int:
            return size(piece, stages[name].predict(piece, plan.get(name, {}), size))

        name = min(stages, key=bytes_of) if len(stages) > 1 else next(iter(stages))
        return stages[name].predict(tile, plan.get(name, {}), size)

    @property
    def others(self) -> tuple[tuple[str, str], ...]:
        """The predictors to choose among."""
        return tuple(("predict", name) for name in self.options.among)

    def _stages(self) -> dict[str, Predict]:
        from stackbound.guard import make
        from stackbound.plugins import registry

        parts = {"transform": self.transform, "quantize": self.quantize}
        return {name: make(registry(), "predict", name, None, **parts) for name in self.options.among}


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [PredictBest]
