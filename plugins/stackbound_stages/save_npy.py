"""Save NPY: one array, in the axis order, memory order and byte order of the source where that was an NPY file."""

from __future__ import annotations

from math import prod
from pathlib import Path
from typing import ClassVar, Literal

import numpy as np
from numpy.lib import format as npy_format
from stackbound.axes import SAMPLES
from stackbound.errors import UsageError
from stackbound.plugins import hookimpl
from stackbound.stages import OpenSource, Save, StackInfo, Stage

from ._writing import stored_letters, stored_shape, write_pixels


class NpySave(Save):
    """NPY, which keeps pixels alone: no scale, no names."""

    name = "npy"
    suffixes: ClassVar[tuple[str, ...]] = (".npy",)

    def check(self, info: StackInfo) -> None:
        """Refuse pixel types that the format has no word for."""
        if info.dtype.kind not in "iuf":
            raise UsageError(f"NPY is written for whole numbers and floats, not {info.dtype}")

    def write(self, target: Path, source: OpenSource) -> None:
        """Write all pixels."""
        self.check(source.info)
        info = source.info
        letters, shape, fortran = info.axes, info.shape, False
        order: Literal["<", ">"] = "<"
        if info.attributes.get("format") == "npy":
            fortran = bool(info.attributes.get("fortran", False))
            order = ">" if info.attributes.get("byteorder") == "big" else "<"
            letters = stored_letters(info)
            shape = stored_shape(info, letters)
            said = tuple(info.attributes.get("shape", ()))
            if prod(said) == prod(shape) and [n for n in said if n > 1] == [n for n in shape if n > 1]:
                shape = said  # axes of length 1 come back
        dtype = info.dtype.newbyteorder(order) if info.dtype.itemsize > 1 else info.dtype
        with target.open("wb") as file:
            header = {"shape": shape, "fortran_order": fortran, "descr": npy_format.dtype_to_descr(np.dtype(dtype))}
            npy_format.write_array_header_1_0(file, header)
            offset = file.tell()
            file.truncate(offset + prod(shape) * dtype.itemsize)
        stored = letters[::-1] if fortran else letters
        assert SAMPLES not in stored or "c" not in stored
        write_pixels(target, offset, stored, dtype, source)


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [NpySave]
