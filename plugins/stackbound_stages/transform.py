"""Predict by a quantized block transform."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING

from pydantic import Field, field_validator
from stackbound import hookimpl
from stackbound.errors import ConfigError
from stackbound.stages import Options, Plan, Predict, Quantize, Stage, Transform

if TYPE_CHECKING:
    from stackbound.blocksearch import Choice
    from stackbound.lattice import LatticeTile
    from stackbound.prediction import Prediction

LENGTHS = (1, 2, 4, 8, 16, 32)
DEEPEST = 16


class TransformOptions(Options):
    """Block and step, where the user wants to choose them."""

    block: list[int] | None = Field(default=None, min_length=3, max_length=3)
    """Shape of a block along z, y and x: each 1, 2, 4, 8, 16 or 32, z at most 16. By measured size when not given."""

    step: int | None = Field(default=None, ge=-2, le=12)
    """Step of the quantizer: (2E+1) * 2**(step/2), E being the tolerance. By measured size when not given."""

    @field_validator("block")
    @classmethod
    def _lengths(cls, block: list[int] | None) -> list[int] | None:
        if block is not None and (any(side not in LENGTHS for side in block) or block[0] > DEEPEST):
            raise ValueError(f"each side must be one of {LENGTHS}, the first at most {DEEPEST}")
        return block


class PredictTransform(Predict):
    """Transform blocks, keep coarse indices, and let the decoder's integer inverse foresee the tile."""

    name = "transform"
    Options = TransformOptions
    options: TransformOptions

    def plan(self, samples: Sequence[LatticeTile], size: Callable[[LatticeTile, Prediction], int]) -> Plan:
        """Return block shape, step and basis for a stack."""
        choice, fitted = self._search(samples, size)
        return {"block": list(choice.block), "step": choice.exponent, "transform": dict(fitted)}

    def predict(self, tile: LatticeTile, plan: Plan, size: Callable[[LatticeTile, Prediction], int]) -> Prediction:
        """Return block shape, steps and indices for one tile."""
        from stackbound.blockplan import fitting, predicted
        from stackbound.blocksearch import Choice

        transform, quantize = self._stages()
        if "block" in plan:
            depth, height, width = plan["block"]
            choice, fitted = Choice((depth, height, width), int(plan["step"])), plan.get("transform", {})
        else:
            choice, fitted = self._search([tile], size)
        block = fitting(choice.block, tile.values.shape)
        return predicted(tile, block, choice.step(tile.tolerance), transform, quantize, fitted)

    def _search(
        self, samples: Sequence[LatticeTile], size: Callable[[LatticeTile, Prediction], int]
    ) -> tuple[Choice, Plan]:
        from stackbound.blockplan import pixels
        from stackbound.blocksearch import BLOCKS, sample, search

        transform, quantize = self._stages()
        pieces = [sample(tile) for tile in samples]
        known: dict[tuple[int, int, int], Plan] = {}

        def fitted(block: tuple[int, int, int]) -> Plan:
            if block not in known:
                known[block] = transform.fit(pixels(pieces[0], block), block)
            return known[block]

        blocks = BLOCKS if self.options.block is None else [(*self.options.block,)]
        steps = None if self.options.step is None else [self.options.step]
        choice = search(pieces, blocks, steps, transform, quantize, fitted, size)  # type: ignore[arg-type]
        return choice, fitted(choice.block)

    def _stages(self) -> tuple[Transform, Quantize]:
        if self.transform is None or self.quantize is None:
            raise ConfigError("predict transform needs a transform and a quantize stage", where="predict")
        return self.transform, self.quantize


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [PredictTransform]
