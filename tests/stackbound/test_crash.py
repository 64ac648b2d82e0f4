"""Runs that are killed."""

import json
import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import stackbound
from stackbound.errors import SourceError, TargetError

from .conftest import GRID, contents

CHILD = Path(__file__).with_name("crash_child.py")


@pytest.mark.skipif(not hasattr(os, "fork"), reason="needs processes that can be forked")
@pytest.mark.parametrize(("what", "allowed"), [("new", {"nothing"}), ("overwrite", {"old", "aside"})])
def test_killed_at_every_step(kept, tmp_path, what, allowed):
    """Wherever a run is killed: no half store has the final name, no old store is lost, resuming gives equal bytes."""
    done = subprocess.run(
        [sys.executable, str(CHILD), str(kept[0]), str(tmp_path), what], capture_output=True, text=True, check=False
    )
    steps = [line.split() for line in done.stdout.splitlines()]

    assert 0 == done.returncode, done.stderr
    assert len(steps) > 10
    for step, _, found, resumed, *left in steps:
        assert found in allowed | {"complete"}, step
        assert resumed in ("equal", "complete"), step
        if resumed == "equal":
            assert ["s.ome.zarr.run.json"] == left, step
    assert allowed <= {found for _, _, found, *_ in steps}
    assert "9" == steps[0][1]


SCRIPT = """
import sys, json, stackbound
stackbound.compress(sys.argv[1], sys.argv[2], tolerance=4, config=json.loads(sys.argv[3]), resume=True, workers=2)
"""


def test_killed_from_outside_again_and_again(tmp_path):
    """SIGKILL at random moments, each time resumed: the bytes are those of an uninterrupted run."""
    rng = np.random.default_rng(3)
    np.save(tmp_path / "a.npy", (500 + rng.normal(0, 9, (60, 256, 256))).astype(np.uint16))
    config = {"tile": {"name": "grid", "tile": [2, 64, 64], "region": [2, 128, 128]}, "predict": {"name": "none"}}
    chance = random.Random(5)
    store, journal = tmp_path / "s", tmp_path / "s.partial.journal"
    kills = 0
    for _ in range(3):
        process = subprocess.Popen([sys.executable, "-c", SCRIPT, tmp_path / "a.npy", store, json.dumps(config)])
        enough = (journal.stat().st_size if journal.exists() else 0) + chance.randrange(2000, 6000)
        while process.poll() is None and (not journal.exists() or journal.stat().st_size < enough):
            time.sleep(0.003)
        if process.poll() is None:
            process.send_signal(signal.SIGKILL)
            process.wait()
            kills += 1
            assert not store.exists()
            assert store.with_name("s.partial").exists()
    report = stackbound.compress(tmp_path / "a.npy", store, tolerance=4, config=config, resume=True)
    plain = stackbound.compress(tmp_path / "a.npy", tmp_path / "plain", tolerance=4, config=config)

    assert kills
    assert report.resumed
    assert contents(plain.store) == contents(report.store)


@pytest.fixture
def unfinished(save_npy, pixels, tmp_path, monkeypatch):
    """Make a source, and a run of it that failed after some regions."""
    source = save_npy(pixels)
    with monkeypatch.context() as patch:
        real = stackbound.regions.RegionWorker.work

        def failing(self, index, kept=None):
            if index == 5:
                raise SourceError("the network went away")
            return real(self, index, kept)

        patch.setattr(stackbound.regions.RegionWorker, "work", failing)
        with pytest.raises(SourceError, match=r"kept in s\.partial for --resume"):
            stackbound.compress(source, tmp_path / "s", tolerance=4, config={"tile": GRID}, workers=1)
    assert (tmp_path / "s.partial").is_dir()
    assert not (tmp_path / "s").exists()
    return source, tmp_path / "s"


def test_finished_regions_are_kept(unfinished, kept, monkeypatch):
    """Resuming encodes only what was not finished, and compares all of it with the source again."""
    source, store = unfinished
    encoded = []
    real = stackbound.regions.encode_tile
    monkeypatch.setattr(stackbound.regions, "encode_tile", lambda *a: encoded.append(1) or real(*a))
    report = stackbound.compress(source, store, tolerance=4, config={"tile": GRID}, resume=True)

    assert 5 == report.resumed
    # Regions 5, 6 and 7, each one tile deep and two tiles high and wide.
    assert 12 == len(encoded)
    assert contents(kept[1]) == contents(store)


def test_a_damaged_region_is_written_again(unfinished, kept):
    """A shard that changed since it was logged is not kept."""
    source, store = unfinished
    shard = store.with_name("s.partial") / "0" / "c" / "0" / "0" / "1"
    shard.write_bytes(shard.read_bytes()[:-1] + b"!")
    stackbound.compress(source, store, tolerance=4, config={"tile": GRID}, resume=True)

    assert contents(kept[1]) == contents(store)


def test_a_torn_journal_counts_as_far_as_it_is_whole(unfinished, kept):
    """A journal whose last lines a crash tore keeps what is whole."""
    source, store = unfinished
    journal = store.with_name("s.partial.journal")
    journal.write_bytes(journal.read_bytes()[:-30])
    report = stackbound.compress(source, store, tolerance=4, config={"tile": GRID}, resume=True)

    assert 4 == report.resumed
    assert contents(kept[1]) == contents(store)


@pytest.mark.parametrize("options", [{"tolerance": 5}, {"config": {"tile": {**GRID, "tile": [1, 32, 32]}}}])
def test_another_configuration_is_refused(unfinished, options):
    """A run is not continued under another configuration; what is there stays."""
    source, store = unfinished
    partial = store.with_name("s.partial")
    before = contents(partial)
    with pytest.raises(TargetError, match="configuration"):
        stackbound.compress(source, store, **{"tolerance": 4, "config": {"tile": GRID}, "resume": True, **options})
    assert before == contents(partial)


def test_another_version_is_refused(unfinished, monkeypatch):
    """A run is not continued by another version."""
    source, store = unfinished
    monkeypatch.setattr(stackbound, "__version__", "9.9")
    with pytest.raises(TargetError, match="version"):
        stackbound.compress(source, store, tolerance=4, config={"tile": GRID}, resume=True)


def test_another_source_is_refused(unfinished, pixels):
    """A source whose pixels differ where regions were kept is refused, and what is there stays."""
    source, store = unfinished
    other = pixels.copy()
    other[2, 3, 3] += 1
    np.save(source, other)
    partial = store.with_name("s.partial")
    before = contents(partial)
    with pytest.raises((SourceError, TargetError), match="another"):
        stackbound.compress(source, store, tolerance=4, config={"tile": GRID}, resume=True)
    assert set(before) <= set(contents(partial))
    np.save(source, pixels)
    stackbound.compress(source, store, tolerance=4, config={"tile": GRID}, resume=True)


def test_without_resume_an_unfinished_run_is_refused(unfinished):
    """What an interrupted run left is neither continued nor removed without being asked."""
    source, store = unfinished
    before = contents(store.with_name("s.partial"))
    with pytest.raises(TargetError, match="--resume"):
        stackbound.compress(source, store, tolerance=4, config={"tile": GRID})
    assert before == contents(store.with_name("s.partial"))
    stackbound.compress(source, store, tolerance=4, config={"tile": GRID}, overwrite=True)
    assert store.exists()


def test_nothing_to_resume_starts(kept, tmp_path):
    """Asked to resume where nothing is, a run starts."""
    report = stackbound.compress(kept[0], tmp_path / "s", tolerance=4, config={"tile": GRID}, resume=True)

    assert 0 == report.resumed
    assert contents(kept[1]) == contents(report.store)
