"""Predict tiles of few different values not at all, and all others as the built-in transform predictor does.

A predictor answers with numbers of the decoder's vocabulary (`stackbound.prediction`), so a store opens without this
plugin. Right or wrong, they decide the size of the store alone.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from pydantic import Field

from stackbound import hookimpl
from stackbound.guard import make
from stackbound.plugins import registry
from stackbound.prediction import NoPrediction
from stackbound.stages import Options, Plan, Predict, Stage


class MyStageOptions(Options):
    """What a configuration may say under [predict] beside the name."""

    values: int = Field(default=16, ge=1)
    """Tiles with at most so many different values are not predicted."""


class MyStage(Predict):
    """Leave tiles of few values alone; transform the others."""

    name = "my-stage"
    Options = MyStageOptions
    options: MyStageOptions

    @property
    def others(self) -> tuple[tuple[str, str], ...]:
        """The stage that this one uses; the store names it."""
        return (("predict", "transform"),)

    def plan(self, samples: Any, size: Callable[[Any, Any], int]) -> Plan:
        """Return what is chosen once for the whole stack."""
        return dict(self._transform().plan(samples, size))

    def predict(self, tile: Any, plan: Plan, size: Callable[[Any, Any], int]) -> Any:
        """Return the prediction of one tile; `tile.values` are whole numbers from 0 to `tile.span`, read-only."""
        if len(np.unique(tile.values)) <= self.options.values:
            return NoPrediction()
        return self._transform().predict(tile, plan, size)

    def _transform(self) -> Predict:
        stage: Predict = make(registry(), "predict", "transform", transform=self.transform, quantize=self.quantize)
        return stage


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stages of this plugin."""
    return [MyStage]
