"""Transform by the discrete cosine transform of type II, orthonormal, on blocks of up to three axes."""

from __future__ import annotations

from typing import TYPE_CHECKING

from stackbound import hookimpl
from stackbound.stages import Options, Plan, Stage, Transform

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray


class DctOptions(Options):
    """No options."""


class Dct(Transform):
    """The cosine transform of ITU-T T.81 A.3.3, separable, any block length from 1 to 32 that is a power of two."""

    name = "dct"
    Options = DctOptions

    def basis(self, axis: int, length: int, fitted: Plan) -> str | NDArray[np.int64]:
        """Return the name under which every decoder knows the cosine basis."""
        return "dct"

    def forward(self, blocks: NDArray[np.float32], fitted: Plan) -> NDArray[np.float32]:
        """Return the cosine coefficients of all blocks."""
        from stackbound.kernels.forward import dct

        return dct(blocks)


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [Dct]
