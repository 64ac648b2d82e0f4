"""Write the golden tiles of a format version: run once per version, never again for one that was released.

``python tests/golden/make_tiles.py`` writes ``tiles-v<version>.json`` beside this file.
"""

from __future__ import annotations

import base64
import hashlib
import json
import sys
from pathlib import Path

import numpy as np

HERE = Path(__file__).parent
sys.path.insert(0, str(HERE.parent / "support"))

from codec_strategies import neighbour_coder, plain_coder  # noqa: E402
from stackbound.tilecodec import VERSION, TileCoder  # noqa: E402
from stackbound_stages.frequency_weighted import FrequencyWeighted  # noqa: E402
from stackbound_stages.none import PredictNone  # noqa: E402
from stackbound_stages.rans import Rans  # noqa: E402
from stackbound_stages.zstd import Zstd  # noqa: E402


def main() -> None:
    """Encode small tiles of every kind."""
    rng = np.random.default_rng(2024)
    wave = (
        600 + 250 * np.sin(np.arange(40) / 6) + 40 * np.cos(np.arange(36) / 5)[:, None] + rng.normal(0, 5, (3, 36, 40))
    )
    whole = np.rint(wave).astype(np.uint16)
    masked = wave.astype(np.float32)
    masked[:, 5:9, 7:30] = np.nan
    plain, blocks = TileCoder(PredictNone(), Rans()), plain_coder(block=[1, 8, 8], step=4)
    each = np.array([0.5, 2, 6]).reshape(3, 1, 1)
    tiles = [
        ("nothing foreseen", plain, whole, 3),
        ("blocks", blocks, whole, 3),
        ("blocks along three axes, lossless", plain_coder(block=[4, 8, 16], step=6), whole, 0),
        ("steps per frequency", plain_coder(quantize=FrequencyWeighted(), block=[1, 16, 16], step=4), whole, 3),
        ("zstd", TileCoder(blocks.predict, Zstd()), whole, 3),
        ("neighbours", neighbour_coder(base=False), whole, 2),
        ("neighbours on blocks", neighbour_coder(base=True), whole, 4),
        ("neighbours, clamped, no plane before", neighbour_coder(clamped=True, stack=False, base=False), whole, 0),
        ("signed", blocks, whole.astype(np.int16) - 700, 1),
        ("bytes", blocks, (whole >> 3).astype(np.uint8), 1),
        ("wide, binned", blocks, whole.astype(np.int64) << 30, 2**27),
        ("wide, lossless", blocks, rng.integers(0, 2**32, (20, 21), np.uint32), 0),
        ("floats", blocks, masked, 2.0),
        ("floats bit for bit", blocks, masked.astype(np.float16), 0),
        ("doubles", neighbour_coder(), wave, 0.25),
        ("tolerances per plane", blocks, whole, each),
        ("padded", blocks, np.pad(whole, ((0, 1), (0, 12), (0, 8))), 3),
        ("constant", blocks, np.full((5, 6), -3, np.int32), 1),
    ]
    records = []
    for name, coder, pixels, tolerance in tiles:
        payload = coder.encode(pixels, tolerance)
        decoded = _decoded(payload, pixels)
        records.append(
            {
                "name": name,
                "shape": list(pixels.shape),
                "dtype": pixels.dtype.name,
                "sha256": hashlib.sha256(decoded.astype(pixels.dtype.newbyteorder("<")).tobytes()).hexdigest(),
                "payload": base64.b64encode(payload).decode(),
            }
        )
    text = json.dumps(records, indent=1) + "\n"
    (HERE / f"tiles-v{VERSION}.json").write_text(text, encoding="utf-8", newline="\n")


def _decoded(payload: bytes, pixels: np.ndarray) -> np.ndarray:
    from stackbound.tilecodec import decode

    return decode(payload, pixels.shape, pixels.dtype)


if __name__ == "__main__":
    main()
