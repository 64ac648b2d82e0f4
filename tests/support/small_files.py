"""Small files for the tests of the command line."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import tifffile

RNG = np.random.default_rng(5)


def pixels(*shape: int, dtype: str = "uint16") -> np.ndarray:
    return RNG.poisson(200, shape).astype(dtype)


def write_stack(path: str, *shape: int) -> np.ndarray:
    data = pixels(*(shape or (3, 40, 50)))
    tifffile.imwrite(path, data, photometric="minisblack")
    return data


def tree(folder: Path) -> list[str]:
    return sorted(str(path.relative_to(folder)) for path in folder.rglob("*"))
