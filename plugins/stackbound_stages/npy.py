"""Load NPY: one array as numpy.save writes it, in either memory order and any byte order."""

from __future__ import annotations

from math import prod
from pathlib import Path
from typing import Any

import numpy as np
from numpy.lib import format as npy_format
from stackbound.axes import Layout, apply_axes, describe_shape, guess_axes
from stackbound.errors import SourceError
from stackbound.plugins import hookimpl
from stackbound.stages import Load, OpenSource, StackInfo, Stage

from ._flat import FlatPixels
from ._stored import StoredSource, as_path, look_at

_CUT = "The file was cut short or damaged; save it again."


class NpyLoad(Load):
    """NPY files of whole numbers or floats."""

    name = "npy"

    def recognises(self, source: object) -> bool:
        """Return whether this is a file with NPY's first bytes or suffix."""
        path = as_path(source)
        if path is None or path.is_dir():
            return False
        if path.suffix.lower() == ".npy":
            return True
        try:
            with path.open("rb") as file:
                return file.read(6) == npy_format.MAGIC_PREFIX
        except OSError:
            return False

    def open(self, source: object, *, axes: str | None = None) -> OpenSource:
        """Open a file."""
        path = as_path(source)
        assert path is not None
        name = str(path)
        file = look_at(path)
        shape, fortran, dtype, offset, header = _read_header(path, name)
        needed = offset + prod(shape) * dtype.itemsize
        if file.size < needed:
            raise SourceError(
                f"pixel data should end at byte {needed}, but the file has only {file.size}", where=name, remedy=_CUT
            )
        notes: tuple[str, ...] = ()
        if axes is None:
            letters, notes = guess_axes(shape, name)
        else:
            letters = apply_axes(axes, shape, name)
        if file.size > needed:
            notes = (*notes, f"{file.size - needed} bytes behind the array are left out.")
        try:
            layout = Layout(letters, shape)
        except SourceError as error:
            raise error.at(name) from None
        # Fortran order is C order of the turned array.
        stored = Layout(letters[::-1], shape[::-1]) if fortran else layout
        pixels = FlatPixels(path, offset, stored.shape, dtype, name)
        info = StackInfo(
            kind="NPY",
            axes=layout.axes,
            shape=layout.lengths,
            dtype=dtype.newbyteorder("="),
            scale=(None,) * len(layout.axes),
            units=(None,) * len(layout.axes),
            headers={"npy-header.txt": header},
            attributes={
                "format": "npy",
                "axes": letters,
                "shape": list(shape),
                "fortran": fortran,
                "byteorder": "big" if dtype.str[0] == ">" else "little",
            },
            notes=notes,
            read_overhead=pixels.overhead,
        )
        return StoredSource(info, stored, pixels, [file])


def _read_header(path: Path, name: str) -> tuple[tuple[int, ...], bool, np.dtype[Any], int, bytes]:
    """Return shape, order, stored dtype, offset of the pixels and the header's bytes."""
    try:
        with path.open("rb") as file:
            version = npy_format.read_magic(file)
            start = file.tell()
            if version == (1, 0):
                shape, fortran, dtype = npy_format.read_array_header_1_0(file)
            elif version in ((2, 0), (3, 0)):
                # 3.0 differs from 2.0 only in the encoding of names of fields, which pixels do not have.
                shape, fortran, dtype = npy_format.read_array_header_2_0(file)
            else:
                raise SourceError(f"NPY version {version[0]}.{version[1]} is unknown", where=name)
            offset = file.tell()
            file.seek(start)
            header = file.read(offset - start)
    except (ValueError, SyntaxError, EOFError) as error:
        if isinstance(error, SourceError):
            raise
        raise SourceError(f"this is not a whole NPY file: {error}", where=name, remedy=_CUT) from error
    if dtype.hasobject:
        raise SourceError(
            "the array holds Python objects, which are not read because they can run code",
            where=name,
            remedy="Save it with a dtype of whole numbers or floats.",
        )
    if dtype.kind not in "iuf" or dtype.itemsize > 8 or dtype.subdtype:
        what = {"b": "yes-or-no (boolean)", "c": "complex"}.get(dtype.kind, str(dtype))
        raise SourceError(
            f"{what} pixels cannot be compressed within a tolerance",
            where=name,
            remedy="Convert them to whole numbers of 8 to 64 bits or floats of 16, 32 or 64 bits first.",
        )
    if 0 in shape:
        raise SourceError(f"the array has no pixels ({describe_shape(shape)})", where=name)
    return shape, bool(fortran), dtype, offset, header


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [NpyLoad]
