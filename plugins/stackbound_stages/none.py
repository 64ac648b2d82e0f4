"""Predict nothing: every lattice value is coded by itself."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

from stackbound import hookimpl
from stackbound.stages import Options, Plan, Predict, Stage

if TYPE_CHECKING:
    from stackbound.lattice import LatticeTile
    from stackbound.prediction import Prediction


class NoneOptions(Options):
    """No options."""


class PredictNone(Predict):
    """Predict the middle of the tile's range everywhere: for labels, masks and data without structure."""

    name = "none"
    Options = NoneOptions

    def predict(self, tile: LatticeTile, plan: Plan, size: Callable[[LatticeTile, Prediction], int]) -> Prediction:
        """Return the prediction that holds nothing."""
        from stackbound.prediction import NoPrediction

        return NoPrediction()


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [PredictNone]
