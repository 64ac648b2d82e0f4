"""Every tile ever written stays readable: golden tiles of each format version decode to the same pixels for good."""

from __future__ import annotations

import base64
import hashlib
import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from stackbound import decode as alone
from stackbound.tilecodec import decode

HERE = Path(__file__).parent
TILES = [tile for path in sorted(HERE.glob("tiles-v*.json")) for tile in json.loads(path.read_text(encoding="utf-8"))]

ALONE = """
import base64, hashlib, importlib.util, json, sys
for name in ("numba", "zarr", "stackbound", "scipy", "pydantic"):
    sys.modules[name] = None
spec = importlib.util.spec_from_file_location("alone", sys.argv[1])
alone = importlib.util.module_from_spec(spec)
spec.loader.exec_module(alone)
for line in sys.stdin:
    tile = json.loads(line)
    pixels = alone.decode(base64.b64decode(tile["payload"]), tuple(tile["shape"]), tile["dtype"])
    print(hashlib.sha256(pixels.astype(pixels.dtype.newbyteorder("<")).tobytes()).hexdigest())
"""


@pytest.mark.parametrize("tile", TILES, ids=lambda tile: tile["name"])
def test_golden_tiles_decode_to_the_same_pixels(tile: dict[str, Any]) -> None:
    """A tile of the past has the pixels that it had."""
    pixels = decode(base64.b64decode(tile["payload"]), tuple(tile["shape"]), np.dtype(tile["dtype"]))

    assert hashlib.sha256(pixels.astype(pixels.dtype.newbyteorder("<")).tobytes()).hexdigest() == tile["sha256"]


def test_numpy_is_enough() -> None:
    """The decoder that stores carry reads all of them in a process without numba, zarr and stackbound."""
    lines = "".join(json.dumps(tile) + "\n" for tile in TILES)
    done = subprocess.run(
        [sys.executable, "-c", ALONE, str(Path(alone.__file__))],
        input=lines,
        capture_output=True,
        text=True,
        check=False,
    )

    assert done.stderr == ""
    assert done.stdout.split() == [tile["sha256"] for tile in TILES]
