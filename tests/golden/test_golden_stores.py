"""Every store ever written stays readable: golden stores of each format version, verified and decoded again."""

from __future__ import annotations

import hashlib
import json
import subprocess
import sys
import zipfile
from pathlib import Path

import numpy as np
import pytest
import stackbound

HERE = Path(__file__).parent
ROOTS = {"store-v1": "34edd2ce97f753907503f8da3892595987d2cf79dcd50980688fbc5241169576"}

ALONE = """
import runpy, sys
for name in ("numba", "zarr", "stackbound", "scipy", "pydantic"):
    sys.modules[name] = None
sys.argv = sys.argv[1:]
runpy.run_path(sys.argv[0], run_name="__main__")
"""


@pytest.fixture(params=ROOTS)
def golden(request: pytest.FixtureRequest, tmp_path: Path) -> tuple[Path, str]:
    """Return an unpacked golden store and its root."""
    zipfile.ZipFile(HERE / f"{request.param}.zip").extractall(tmp_path)
    return tmp_path / "store.ome.zarr", ROOTS[request.param]


def decode_alone(store: Path, target: Path) -> subprocess.CompletedProcess[str]:
    """Run the decoder that a store carries in a process that can import neither numba nor zarr nor stackbound."""
    command = [sys.executable, "-I", "-c", ALONE, str(store / "stackbound" / "decode.py"), str(store), str(target)]
    return subprocess.run(command, capture_output=True, text=True, check=False)


def test_golden_stores_still_hold(golden: tuple[Path, str]) -> None:
    """A store of the past is whole, has the root that it had, and decodes to the pixels that were compared then."""
    store, root = golden

    assert stackbound.verify(store, root=root).ok


def test_a_store_is_read_by_what_it_carries(golden: tuple[Path, str], tmp_path: Path) -> None:
    """With numpy alone, a store's own decoder writes the pixels whose hashes stand in the log."""
    store, _ = golden

    done = decode_alone(store, tmp_path / "pixels.npy")

    assert "" == done.stderr
    pixels = np.load(tmp_path / "pixels.npy")
    log = (store / "stackbound" / "verification.jsonl").read_text(encoding="utf-8").splitlines()
    regions = [record for record in map(json.loads, log) if record["record"] == "region"]
    assert len(regions) == 16
    for region in regions:
        box = tuple(map(slice, region["start"], region["stop"]))
        little = np.ascontiguousarray(pixels[box]).astype(pixels.dtype.newbyteorder("<"))
        assert region["decoded_sha256"] == hashlib.sha256(little.tobytes()).hexdigest()


@pytest.mark.parametrize("at", [0, 40, -1, -9])
def test_damage_stops_the_decoder_that_a_store_carries(golden: tuple[Path, str], tmp_path: Path, at: int) -> None:
    """A changed byte of a tile or of a shard's index is named with its shard; no pixels are made up."""
    store, _ = golden
    shard = store / "0" / "c" / "1" / "0" / "1" / "0"
    data = bytearray(shard.read_bytes())
    data[at] ^= 1
    shard.write_bytes(data)

    done = decode_alone(store, tmp_path / "pixels.npy")

    assert done.returncode != 0
    assert "0/c/1/0/1/0: " in done.stderr
    assert not (tmp_path / "pixels.npy").exists()


def test_the_decoder_overwrites_nothing(golden: tuple[Path, str], tmp_path: Path) -> None:
    """A target that exists is left as it is."""
    (tmp_path / "pixels.npy").write_text("mine", encoding="utf-8")

    done = decode_alone(golden[0], tmp_path / "pixels.npy")

    assert done.returncode != 0
    assert "mine" == (tmp_path / "pixels.npy").read_text(encoding="utf-8")
