"""Whole numbers to bytes by byte shuffle and zstd (RFC 8878), where plain tools matter more than size."""

from __future__ import annotations

import numpy as np
import zstandard
from numpy.typing import NDArray

from stackbound.byteio import Reader, Writer, damaged

WIDTHS = (1, 2, 4)


def encode(numbers: NDArray[np.int32], level: int) -> bytes:
    """Return the bytes of whole numbers of any shape: their width, and zstd of first bytes, second bytes, and so on."""
    flat = numbers.reshape(-1)
    least, most = int(flat.min()), int(flat.max())
    width = next(width for width in WIDTHS if -(2 ** (8 * width - 1)) <= least and most < 2 ** (8 * width - 1))
    shuffled = flat.astype(f"<i{width}").view(np.uint8).reshape(-1, width).T
    writer = Writer()
    writer.number(WIDTHS.index(width))
    writer.sized(zstandard.ZstdCompressor(level=level).compress(shuffled.tobytes()))
    return bytes(writer.data)


def decode(reader: Reader, count: int) -> NDArray[np.int32]:
    """Return `count` whole numbers, flat."""
    width = WIDTHS[reader.number(len(WIDTHS) - 1)]
    data = bytes(reader.sized())
    try:
        # Asked before anything is allocated: a frame may claim any size.
        if zstandard.frame_content_size(data) != count * width:
            raise damaged("a compressed array has the wrong size")
        raw = zstandard.ZstdDecompressor().decompress(data)
    except zstandard.ZstdError as error:
        raise damaged("zstd cannot read an array") from error
    if len(raw) != count * width:
        raise damaged("a compressed array has the wrong size")
    shuffled = np.frombuffer(raw, np.uint8).reshape(width, count).T
    return np.ascontiguousarray(shuffled).view(f"<i{width}").reshape(-1).astype(np.int32)
