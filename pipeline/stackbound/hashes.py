"""SHA-256 of files and of pixels."""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray


def sha256_bytes(data: bytes) -> str:
    """Return the hash of some bytes, in hexadecimal."""
    return hashlib.sha256(data).hexdigest()


def sha256_file(path: Path) -> str:
    """Return the hash of a file, read once from front to back."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def sha256_pixels(pixels: NDArray[Any]) -> str:
    """Return the hash of an array's pixels: little-endian, the last axis fastest.

    The same as ``hashlib.sha256(pixels.astype(pixels.dtype.newbyteorder("<")).tobytes())``.
    """
    little = np.ascontiguousarray(pixels, dtype=pixels.dtype.newbyteorder("<"))
    return hashlib.sha256(little.reshape(-1).view(np.uint8).data).hexdigest()
