"""What `inspect` tells of sources and stores."""

from __future__ import annotations

import json
import shutil

import numpy as np
import pytest
import stackbound
import tifffile
from stackbound.errors import SourceError

STACK = np.random.default_rng(2).poisson(90, (2, 5, 48, 40)).astype(np.uint16)


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """Write one OME-TIFF with two channels and its store."""
    folder = tmp_path_factory.mktemp("inspect")
    metadata = {
        "axes": "CZYX",
        "PhysicalSizeX": 0.2,
        "PhysicalSizeXUnit": "µm",
        "PhysicalSizeY": 0.2,
        "PhysicalSizeYUnit": "µm",
        "Channel": {"Name": ["nuclei", "membrane"]},
    }
    tifffile.imwrite(folder / "two.ome.tif", STACK, ome=True, metadata=metadata, photometric="minisblack")
    stackbound.compress(folder / "two.ome.tif", folder / "two.ome.zarr", tolerance=2)
    return folder


def test_a_source_is_told_with_its_metadata(folder):
    """Axes, shape, pixel type, distances and channels of a source are what the file says."""
    facts = stackbound.inspect(folder / "two.ome.tif")

    assert ("source", "OME-TIFF", "czyx", [2, 5, 48, 40], "uint16") == tuple(
        facts[key] for key in ("is", "kind", "axes", "shape", "dtype")
    )
    assert [0.2, 0.2] == facts["scale"][-2:]
    assert ["micrometer", "micrometer"] == facts["units"][-2:]
    assert ["nuclei", "membrane"] == facts["channel_names"]
    assert STACK.nbytes == facts["pixel_bytes"]
    assert (folder / "two.ome.tif").stat().st_size == facts["file_bytes"]


def test_a_store_is_told_with_its_promise(folder):
    """A store keeps what its source said, and adds its promise, sizes and root."""
    source, store = stackbound.inspect(folder / "two.ome.tif"), stackbound.inspect(folder / "two.ome.zarr")
    same = ("kind", "axes", "shape", "dtype", "pixel_bytes", "scale", "units", "channel_names")
    size = sum(path.stat().st_size for path in (folder / "two.ome.zarr").rglob("*") if path.is_file())

    assert [source[key] for key in same] == [store[key] for key in same]
    assert {"value": "2", "unit": "stored"} == store["tolerance"]
    assert "<= 2 " in store["promise"]
    assert size == store["store_bytes"]
    assert STACK.nbytes / size == store["ratio"]
    assert stackbound.open(folder / "two.ome.zarr").root == store["root"]
    assert store["readable_without_plugins"] is True


def test_the_facts_are_json(folder):
    """Everything told is plain JSON."""
    for name in ("two.ome.tif", "two.ome.zarr"):
        facts = stackbound.inspect(folder / name)

        assert facts == json.loads(json.dumps(facts))


def test_an_inspection_writes_nothing(folder):
    """Looking at a store leaves its bytes and times as they are."""
    before = {path: path.stat().st_mtime_ns for path in folder.rglob("*")}
    stackbound.inspect(folder / "two.ome.zarr")

    assert before == {path: path.stat().st_mtime_ns for path in folder.rglob("*")}


def test_a_store_without_its_log_is_still_told(folder, tmp_path):
    """A damaged log is a note, since the rest of a store can still be told."""
    store = shutil.copytree(folder / "two.ome.zarr", tmp_path / "cut.ome.zarr")
    log = store / "stackbound" / "verification.jsonl"
    log.write_bytes(log.read_bytes()[:-10])
    facts = stackbound.inspect(store)

    assert facts["root"] is None
    assert "stackbound verify" in facts["notes"][0]


@pytest.mark.parametrize("name", ["missing.tif", "empty", "text.txt"])
def test_what_is_neither_is_refused(tmp_path, name):
    """Missing files, empty folders and other files are errors that name the path."""
    (tmp_path / "empty").mkdir()
    (tmp_path / "text.txt").write_text("no image", encoding="utf-8")

    with pytest.raises(SourceError, match=name):
        stackbound.inspect(tmp_path / name)
