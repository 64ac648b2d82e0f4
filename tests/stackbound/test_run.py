"""Whole runs."""

import json
import os
import shutil
import subprocess
import zipfile

import numpy as np
import pytest
import stackbound
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from stackbound import budget
from stackbound.errors import (
    PromiseError,
    SourceChangedError,
    SourceError,
    StackboundError,
    TargetError,
    TileError,
    UsageError,
)
from stackbound.sources import open_source
from stackbound.stages import Grid, StackInfo

from .conftest import GRID, contents, records


def compress(source, store, **options):
    """Compress with small tiles and regions."""
    return stackbound.compress(source, store, **{"tolerance": 4, "config": {"tile": GRID}, **options})


def test_report(kept, pixels):
    """What the report says is what is on disk."""
    _, store, root = kept
    again = stackbound.open(store)
    size = sum(len(data) for data in contents(store).values())
    report = json.loads((store.parent / "stack.ome.zarr.run.json").read_text(encoding="utf-8"))

    assert ("zyx", pixels.shape, pixels.dtype) == (again.axes, again.shape, again.dtype)
    assert root == again.root == report["root"]
    assert {"started", "finished", "host", "operator", "command"} <= set(report)
    assert size < pixels.nbytes


@pytest.mark.parametrize("dtype", ["u1", "i1", "u2", "i2", "u4", "i4"])
@pytest.mark.parametrize("tolerance", [0, 1, 7])
def test_the_promise_holds(save_npy, tmp_path, pixels, dtype, tolerance):
    """Every pixel of every integer type is within its tolerance, and the largest error is reached."""
    limits = np.iinfo(dtype)
    shifted = (pixels[:2, :70, :70].astype(np.int64) - 2000).clip(limits.min, limits.max).astype(dtype)
    report = compress(save_npy(shifted), tmp_path / "s.ome.zarr", tolerance=tolerance)
    decoded = np.asarray(stackbound.open(report.store))
    errors = np.abs(decoded.astype(np.int64) - shifted.astype(np.int64))

    assert dtype == decoded.dtype.str.lstrip("<|=")
    assert tolerance == errors.max() == int(report.largest_error)
    assert 0 == report.pixels_over
    assert shifted.size == report.pixels


@settings(deadline=None, max_examples=25, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(st.integers(1, 7), min_size=2, max_size=5), st.integers(0, 300), st.integers(0, 2**32 - 1))
def test_small_stacks(save_npy, tmp_path, shape, tolerance, seed):
    """Stacks of any shape down to one pixel keep the promise."""
    pixels = np.random.default_rng(seed).integers(0, 256, shape, dtype=np.uint8)
    report = stackbound.compress(save_npy(pixels), tmp_path / "s.ome.zarr", tolerance=tolerance, overwrite=True)
    decoded = np.asarray(stackbound.open(report.store)).reshape(pixels.shape)

    assert np.abs(decoded.astype(int) - pixels).max() <= tolerance
    assert stackbound.verify(report.store).ok


def test_same_bytes_whatever_the_workers(kept, tmp_path):
    """Workers, memory and the target's name leave no trace in the store."""
    source, store, root = kept
    with open_source(source) as opened:
        least = budget.needed(1, 1, opened.info, Grid((2, 32, 32), (4, 64, 64)))
    for workers, memory, name in ((1, "1GiB", "a.ome.zarr"), (4, "200MiB", "other name.zarr"), (2, least, "c")):
        report = compress(source, tmp_path / name, workers=workers, memory=memory)

        assert contents(store) == contents(report.store)
        assert root == report.root


def test_same_bytes_from_a_copy_of_the_source(kept, tmp_path):
    """Name, place and time of the source leave no trace in the store."""
    source, store, _ = kept
    shutil.copyfile(source, tmp_path / "copy.npy")

    assert contents(store) == contents(compress(tmp_path / "copy.npy", tmp_path / "s").store)


def test_too_little_memory_says_how_much_is_needed(kept, tmp_path):
    """The size that the error names is enough, and one byte less is not."""
    info, grid = StackInfo("", "zyx", (6, 100, 120), np.dtype("u2")), Grid((2, 32, 32), (4, 64, 64))
    least = budget.needed(1, 1, info, grid)
    with pytest.raises(UsageError, match="are needed"):
        compress(kept[0], tmp_path / "s", memory=least - 1)

    assert [] == list(tmp_path.iterdir())
    assert 1 == budget.budget(least, 4, info, grid).workers


def test_more_memory_means_more_at_once():
    """Regions in flight and tiles at once never need more than is allowed."""
    info, grid = StackInfo("", "zyx", (500, 2000, 2000), np.dtype("u2")), Grid((8, 512, 512), (8, 2048, 2048))
    chosen = [budget.budget(megabytes << 20, 4, info, grid) for megabytes in range(400, 3000, 50)]

    assert [b.regions for b in chosen] == sorted(b.regions for b in chosen)
    assert 4 == chosen[-1].regions == chosen[-1].workers
    for megabytes, b in zip(range(400, 3000, 50), chosen, strict=True):
        assert budget.needed(b.regions, b.workers, info, grid) <= megabytes << 20


def test_a_dry_run_writes_nothing(kept, tmp_path):
    """A dry run plans, estimates the size and leaves nothing behind."""
    report = compress(kept[0], tmp_path / "s", dry_run=True)

    assert report.dry_run
    assert (2, 32, 32) == report.tile
    assert 0 < report.store_bytes
    assert [] == list(tmp_path.iterdir())


def test_an_existing_store_is_not_overwritten(kept, tmp_path):
    """Without being asked nothing is replaced; when asked, the new store takes the place of the old one."""
    report = compress(kept[0], tmp_path / "s")
    before = contents(report.store)
    with pytest.raises(TargetError, match="--overwrite"):
        compress(kept[0], tmp_path / "s", tolerance=2)
    assert before == contents(report.store)
    compress(kept[0], tmp_path / "s", tolerance=2, overwrite=True)

    assert 2 == stackbound.open(report.store).tolerance
    assert ["s", "s.run.json"] == sorted(path.name for path in tmp_path.iterdir())


def test_a_failed_run_does_not_cost_the_old_store(kept, tmp_path, monkeypatch):
    """The old store stays where the new run fails, and no half store is left by a run that finished nothing."""
    report = compress(kept[0], tmp_path / "s")
    before = contents(report.store)
    monkeypatch.setattr("stackbound.regions.encode_tile", lambda *a: (_ for _ in ()).throw(OSError(28, "disk full")))
    with pytest.raises((OSError, StackboundError)):
        compress(kept[0], tmp_path / "s", tolerance=2, overwrite=True)

    assert before == contents(report.store)
    assert ["s", "s.run.json"] == sorted(path.name for path in tmp_path.iterdir())


def test_a_source_that_changes_is_refused(save_npy, pixels, tmp_path):
    """A source that is written to while it is read is found out, and nothing is left of the run."""
    source = save_npy(pixels)

    class Writer:
        def start(self, what, total):
            with source.open("r+b") as file:
                file.seek(-2, 2)
                file.write(b"\xff\xff")
                file.truncate()

        def advance(self, n):
            pass

        def end(self):
            pass

    with pytest.raises(SourceChangedError):
        compress(source, tmp_path / "s", progress=Writer())
    assert ["source.npy"] == [path.name for path in tmp_path.iterdir()]


def test_progress(kept, tmp_path, pixels):
    """Each part of a run that takes time is told, adds up to its total and is ended; the regions count in pixels."""
    parts = []

    class Watch:
        def start(self, what, total):
            parts.append([what, total, 0, "open"])

        def advance(self, n):
            parts[-1][2] += n

        def end(self):
            parts[-1][3] = "ended"

    compress(kept[0], tmp_path / "s", progress=Watch())

    assert ["planning", "compressing"] == [what for what, *_ in parts]
    assert all(total == done and state == "ended" for _, total, done, state in parts)
    assert pixels.size == parts[-1][1]


def test_what_the_disk_holds_is_compared(kept, tmp_path, monkeypatch):
    """Bytes that change between encoding and disk are found before the store gets its name."""
    from stackbound import regions

    real = regions.write_file

    def damaging(path, parts):
        data = bytearray(b"".join(parts))
        data[len(data) // 3] ^= 4
        real(path, bytes(data))

    monkeypatch.setattr(regions, "write_file", damaging)
    with pytest.raises(TileError, match="region"):
        compress(kept[0], tmp_path / "s")
    assert [] == list(tmp_path.iterdir())


def test_a_coder_that_breaks_the_promise_is_found(kept, tmp_path, monkeypatch):
    """Even where every checksum fits, pixels outside their tolerance stop the run and are named."""
    from stackbound.tilecodec import TileCoder

    real = TileCoder.encode

    def lying(self, pixels, tolerance):
        changed = pixels.copy()
        changed[1, 2, 3] ^= 64
        return real(self, changed, tolerance)

    monkeypatch.setattr(TileCoder, "encode", lying)
    with pytest.raises(PromiseError, match=r"first at \(1, 2, 3\)"):
        compress(kept[0], tmp_path / "s", workers=1)
    assert [] == list(tmp_path.iterdir())


def test_the_log_tells_all(kept, pixels):
    """Every region has its record; figures, hashes and totals are those of the pixels."""
    source, store, _ = kept
    header, *regions, totals, _ = records(store)
    decoded = np.asarray(stackbound.open(store)).astype(int)
    errors = decoded - pixels

    assert 8 == len(regions) == totals["regions"]
    assert pixels.size == sum(record["pixels"] for record in regions) == totals["pixels"]
    assert str(errors.sum()) == totals["sum_error"]
    assert str((errors**2).sum()) == totals["sum_squared_error"]
    assert np.count_nonzero(errors) == totals["pixels_changed"]
    assert {"max-error", "mean-error", "rmse", "psnr"} == set(totals["figures"])
    assert [source.stat().st_size] == [file["bytes"] for file in totals["source_files"]]
    assert {"name", "path"}.isdisjoint(totals["source_files"][0])
    assert "4" == header["promise"]["stored"][0]


def test_nothing_of_this_machine_is_inside(kept):
    """No file of a store holds the path of its source or target."""
    source, store, _ = kept
    for name, data in contents(store).items():
        assert str(source.parent).encode() not in data, name
        assert source.name.encode() not in data, name
        assert len(name) < 80


def test_every_tile_is_written(save_npy, tmp_path):
    """A stack that is all fill value has every shard and every tile, so that a missing one is known as such."""
    report = compress(save_npy(np.zeros((6, 100, 120), "u2")), tmp_path / "s")
    shards = [name for name in contents(report.store) if name.startswith("0/c/")]

    assert 8 == len(shards)
    assert stackbound.verify(report.store).ok


def test_scale(kept, tmp_path):
    """Distances given by the caller go into the metadata and come back; nonsense is refused."""
    report = compress(kept[0], tmp_path / "s", scale={"z": 2.0, "y": 0.5, "x": 0.5})

    assert (2.0, 0.5, 0.5) == stackbound.open(report.store).scale
    for bad in ((1.0, 1.0), {"c": 1.0}, (1.0, -1.0, 1.0), (1.0, float("nan"), 1.0)):
        with pytest.raises(UsageError):
            compress(kept[0], tmp_path / "t", scale=bad)


def test_the_zip_of_a_store_is_complete(kept, tmp_path):
    """A store has no names that a zip file or another file system would not keep apart."""
    _, store, _ = kept
    names = list(contents(store))
    with zipfile.ZipFile(tmp_path / "s.zip", "w") as archive:
        for name in names:
            archive.write(store / name, name)

    assert len(names) == len({name.lower() for name in names})


def test_a_missing_source_is_named(tmp_path):
    """A source that is not there is said to be so, and nothing is left."""
    with pytest.raises(SourceError):
        compress(tmp_path / "none.npy", tmp_path / "s")
    assert [] == list(tmp_path.iterdir())


OTHERS = [path for path in os.environ.get("STACKBOUND_OTHER_PYTHONS", "").split(os.pathsep) if path]


@pytest.mark.skipif(not OTHERS, reason="STACKBOUND_OTHER_PYTHONS names no other interpreter that has stackbound")
@pytest.mark.parametrize("python", OTHERS)
def test_same_bytes_on_other_interpreters(kept, tmp_path, python):
    """Another version of Python, numpy, numba and zarr makes the same bytes, and verifies those made here."""
    source, store, _ = kept
    script = (
        "import sys, json, stackbound\n"
        "source, target, store, config = sys.argv[1:]\n"
        "stackbound.compress(source, target, tolerance=4, config=json.loads(config), workers=2)\n"
        "assert stackbound.verify(store, against=source).ok\n"
    )
    command = [python, "-c", script, str(source), str(tmp_path / "s"), str(store), json.dumps({"tile": GRID})]
    done = subprocess.run(command, capture_output=True, text=True, check=False)

    assert 0 == done.returncode, done.stderr
    assert contents(store) == contents(tmp_path / "s")


SHAPES = [(60_000, 60_000), (10_000, 16, 16), (4, 500, 2048, 2048), (1, 1_000_000), (101, 103, 107)]


@pytest.mark.parametrize("shape", SHAPES)
def test_no_shape_needs_much_memory(shape):
    """Whatever the shape of a stack, 400 MiB suffice for its tiles and regions."""
    from stackbound.config import build, read_config

    info = StackInfo("NPY", "tczyx"[-len(shape) :], shape, np.dtype("u2"), read_overhead=0)
    grid = build(read_config(tolerance=1)).tile.grid(info)

    assert budget.needed(1, 1, info, grid) <= 400 << 20
