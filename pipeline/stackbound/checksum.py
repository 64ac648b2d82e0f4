"""CRC-32C, the checksum of RFC 3720 that Zarr's own shards carry; computed by a library that uses the processor's."""

from __future__ import annotations

from typing import Any

import google_crc32c
import numpy as np


def crc32c(data: Any, seed: int = 0) -> int:
    """Return the CRC-32C of `data` (bytes in one piece), or of what has the CRC-32C `seed` followed by `data`."""
    return int(google_crc32c.extend(seed, np.frombuffer(data, np.uint8)))
