"""Save OME-TIFF: with the original OME-XML where there was one, else with what is known of the stack."""

from __future__ import annotations

import uuid
from math import prod
from pathlib import Path
from typing import Any, ClassVar

from stackbound.axes import SAMPLES
from stackbound.errors import UsageError
from stackbound.plugins import hookimpl
from stackbound.stages import OpenSource, Save, StackInfo, Stage

from ._ome_xml import PIXEL_TYPES, mend
from ._tiff_writing import byte_order, ome_words, tiff_letters, write_tiff
from ._writing import stored_shape


class OmeTiffSave(Save):
    """Uncompressed OME-TIFF; BigTIFF above 4 GB; planes in the stored order of the source."""

    name = "ome-tiff"
    suffixes: ClassVar[tuple[str, ...]] = (".ome.tiff", ".ome.tif", ".ome.btf")

    def check(self, info: StackInfo) -> None:
        """Refuse pixel types that OME-XML has no word for."""
        if info.dtype.name not in PIXEL_TYPES:
            raise UsageError(
                f"OME-TIFF cannot hold pixels of type {info.dtype} (it knows {', '.join(PIXEL_TYPES)})",
                remedy="Restore to .tif or .npy instead.",
            )

    def write(self, target: Path, source: OpenSource) -> None:
        """Write all pixels and the metadata."""
        self.check(source.info)
        info = source.info
        letters = tiff_letters(info)
        interleaved = SAMPLES in letters
        xml = None
        if info.ome_xml is not None:
            shape = stored_shape(info, letters)
            planes = prod(length for axis, length in zip(letters, shape, strict=True) if axis in "tcz")
            big_endian = byte_order(info) == ">"
            xml = mend(info.ome_xml, info, _dimension_order(letters), planes=planes, big_endian=big_endian)
        if xml is not None:
            write_tiff(target, source, letters, description=xml, metadata=None)
            return
        metadata: dict[str, Any] = {"axes": letters.upper(), "UUID": str(uuid.uuid4()), "Creator": "stackbound"}
        words = ome_words(info)
        if interleaved:
            words.pop("Channel", None)  # one channel of several samples has one name
        write_tiff(target, source, letters, description=None, metadata=metadata | words, ome=True)


def _dimension_order(letters: str) -> str:
    """Return OME's name for an order of planes: fastest first, x and y ahead, all five axes."""
    planes = [letter for letter in reversed(letters) if letter in "tcz"]
    return "XY" + "".join([*planes, *(letter for letter in "zct" if letter not in planes)]).upper()


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [OmeTiffSave]
