"""Checks of a store."""

import json
import os
import random
import shutil

import numpy as np
import pytest
import stackbound
from stackbound import log
from stackbound.errors import SourceError, TargetError, UsageError
from stackbound.hashes import sha256_file, sha256_pixels

from .conftest import contents, records


@pytest.fixture
def store(kept, tmp_path):
    """Make a copy of the store that may be changed."""
    shutil.copytree(kept[1], tmp_path / "s")
    return tmp_path / "s"


def problems(store, **options):
    """Return what a check finds."""
    report = stackbound.verify(store, **options)
    assert report.ok == (not report.problems)
    return [str(problem) for problem in report.problems]


def test_an_intact_store(kept, pixels):
    """An intact store has no problem, and the report says what was checked and what cannot be proved."""
    source, store, root = kept
    alone = stackbound.verify(store)
    full = stackbound.verify(store, against=source, root=root.upper())

    assert alone.ok
    assert full.ok
    assert root == alone.root
    assert (8, pixels.size, "4") == (full.regions, full.pixels, full.largest_error)
    assert any("--root" in line for line in alone.cannot_prove)
    assert any("source was not read" in line for line in alone.cannot_prove)
    assert 1 == len(full.cannot_prove)
    assert len(full.checks) == len(alone.checks) + 2
    assert json.dumps(full.to_json())


def test_a_check_changes_nothing(kept):
    """No byte and no time of a store changes, and nothing appears beside it."""
    source, store, _ = kept

    def times():
        return {path: path.stat().st_mtime_ns for path in [store.parent, *store.parent.rglob("*")]}

    before, files = times(), contents(store)
    stackbound.verify(store, against=source)

    assert before == times()
    assert files == contents(store)


@pytest.mark.skipif(os.name != "posix", reason="permissions of POSIX")
def test_a_read_only_store(store):
    """A store on a medium that cannot be written is checked all the same."""
    for path in (store, *store.rglob("*")):
        path.chmod(0o555 if path.is_dir() else 0o444)
    try:
        assert stackbound.verify(store).ok
    finally:
        for path in (store, *store.rglob("*")):
            path.chmod(0o755 if path.is_dir() else 0o644)


def test_every_changed_byte_is_found(store):
    """A flipped bit anywhere in any file is found, and the file is named."""
    chance = random.Random(11)
    for path in sorted(path for path in store.rglob("*") if path.is_file()):
        good = path.read_bytes()
        name = path.relative_to(store).as_posix()
        places = {0, len(good) - 1, *(chance.randrange(len(good)) for _ in range(3))}
        for place in places:
            bad = bytearray(good)
            bad[place] ^= 1 << chance.randrange(8)
            path.write_bytes(bad)
            found = problems(store)

            assert any(line.startswith(name) for line in found), (name, place, found)
        path.write_bytes(good)
    assert [] == problems(store)


def test_a_flip_that_leaves_the_meaning_is_found(store):
    """Raw bytes count: metadata that say the same in other bytes are not those that were written."""
    for name in ("zarr.json", "0/zarr.json", "OME/zarr.json"):
        good = (store / name).read_bytes()
        (store / name).write_bytes(json.dumps(json.loads(good)).encode())

        assert any(line.startswith(name) for line in problems(store))
        (store / name).write_bytes(good)


def test_damage_is_placed(store):
    """A damaged tile is named by the pixels that it holds; the rest of the store is checked all the same."""
    for name in ("0/c/0/1/1", "0/c/1/0/0"):
        data = bytearray((store / name).read_bytes())
        data[3] ^= 255
        (store / name).write_bytes(data)
    found = problems(store)

    assert 2 == len(found)
    assert found[0].startswith("0/c/0/1/1, pixels [0:2, 64:96, 64:96]")
    assert found[1].startswith("0/c/1/0/0, pixels [4:6, 0:32, 0:32]")


def test_a_missing_shard_is_named(store):
    """Zarr would read a missing shard as zeros; a check does not."""
    (store / "0" / "c" / "1" / "0" / "1").unlink()

    assert ["0/c/1/0/1, pixels [4:6, 0:64, 64:120]: the shard is missing; zarr would read zeros here"] == problems(
        store
    )


def test_swapped_shards_are_named(store):
    """Two shards that changed places are found, and it is said whose pixels each holds."""
    a, b, c = store / "0/c/0/0/0", store / "0/c/1/0/0", store / "0/c/aside"
    a.rename(c)
    b.rename(a)
    c.rename(b)
    found = problems(store)

    assert "0/c/0/0/0" in found[0]
    assert "holds the shard of pixels [4:6, 0:64, 0:64]" in found[0]
    assert "holds the shard of pixels [0:4, 0:64, 0:64]" in found[1]


@pytest.mark.parametrize("lines", [1, 2, 4, 9])
def test_a_cut_log_is_found(store, lines):
    """A log that lost its end is found at any line."""
    file = store / "stackbound" / "verification.jsonl"
    file.write_bytes(b"".join(file.read_bytes().splitlines(keepends=True)[:-lines]))

    assert any("cut" in line for line in problems(store))


def test_a_missing_log_is_found_and_the_tiles_are_still_checked(store):
    """Without its log a store is damaged, and damaged tiles are named even then."""
    (store / "stackbound" / "verification.jsonl").unlink()
    data = bytearray((store / "0/c/0/0/0").read_bytes())
    data[3] ^= 255
    (store / "0/c/0/0/0").write_bytes(data)
    found = problems(store)

    assert "stackbound/verification.jsonl: the log is missing" == found[0]
    assert found[1].startswith("0/c/0/0/0, pixels [0:2, 0:32, 0:32]")


def test_unknown_files_are_named_and_litter_is_not_damage(store):
    """A file that the log does not know is a problem; what file managers leave behind is a notice."""
    (store / ".DS_Store").write_bytes(b"x")
    (store / "0" / "Thumbs.db").write_bytes(b"x")
    report = stackbound.verify(store)
    assert report.ok
    assert 2 == len(report.notices)
    (store / "0" / "c" / "9").write_bytes(b"x")

    assert ["0/c/9: this file is not known to the log"] == problems(store)


def forge(store):
    """Change a pixel's tile and rewrite log and metadata so that all of it fits again."""
    header, *regions, totals, _ = records(store)
    other = store / "0" / "c" / "0" / "0" / "1"
    first = store / "0" / "c" / "0" / "0" / "0"
    first.write_bytes(other.read_bytes())
    for key in ("file_sha256", "file_bytes", "max_error", "sum_error", "sum_squared_error"):
        regions[0][key] = regions[1][key]
    regions[0]["decoded_sha256"] = sha256_pixels(stackbound.open(store)[:4, :64, :64])
    image = json.loads((store / "zarr.json").read_bytes())
    from stackbound.finish import sum_up
    from stackbound.store import json_text

    totals.update(sum_up(regions))
    image["attributes"]["stackbound"]["regions_root"] = totals["regions_root"]
    (store / "zarr.json").write_bytes(json_text(image))
    for entry in totals["files"]:
        entry["sha256"] = sha256_file(store / entry["path"])
        entry["bytes"] = (store / entry["path"]).stat().st_size
    (store / "stackbound" / "verification.jsonl").write_bytes(log.write_log(header, regions, totals))


def test_a_forged_store_is_caught_by_its_root(store, kept):
    """A store rewritten whole with a log that fits is recognised by the root that was kept elsewhere, or the source."""
    forge(store)

    assert [] == problems(store)
    assert any("not the store of that root" in line for line in problems(store, root=kept[2]))
    assert any("outside their tolerance" in line for line in problems(store, against=kept[0]))


def test_a_log_that_admits_a_broken_promise_is_a_problem(store):
    """Records that do not keep the promise are a problem even where every hash fits."""
    header, *regions, totals, _ = records(store)
    regions[2]["pixels_over"] = 1
    (store / "stackbound" / "verification.jsonl").write_bytes(log.write_log(header, regions, totals))

    assert any("outside their tolerance by its own record" in line for line in problems(store))


def test_another_source_is_found(kept, pixels, save_npy):
    """Compared with a source that is not the one, the difference is named by region; another shape is refused."""
    other = pixels.copy()
    other[5, 80, 30] += 9
    found = problems(kept[1], against=save_npy(other))

    assert 2 == len(found)
    assert "0/c/1/1/0" in found[0]
    assert "other pixels" in found[0]
    assert "the first at (5, 80, 30)" in found[1]
    with pytest.raises(SourceError, match="--against"):
        stackbound.verify(kept[1], against=save_npy(pixels[:, :-1], "cut.npy"))


def test_a_record_of_the_check(kept, tmp_path):
    """The record goes to a new file outside the store and nowhere else."""
    stackbound.verify(kept[1], record=tmp_path / "check.json")
    record = json.loads((tmp_path / "check.json").read_text(encoding="utf-8"))

    assert record["ok"]
    assert kept[2] == record["root"]
    with pytest.raises(TargetError, match="exists already"):
        stackbound.verify(kept[1], record=tmp_path / "check.json")
    with pytest.raises(UsageError, match="inside the store"):
        stackbound.verify(kept[1], record=kept[1] / "check.json")


def test_what_is_no_store_is_refused(tmp_path):
    """A missing path, a file and a folder of something else are unusable input, not damage."""
    (tmp_path / "file").write_text("x", encoding="utf-8")
    (tmp_path / "folder").mkdir()
    for name in ("missing", "file", "folder"):
        with pytest.raises(TargetError):
            stackbound.verify(tmp_path / name)
    with pytest.raises(UsageError, match="64"):
        stackbound.verify(tmp_path / "folder", root="abc")


@pytest.mark.parametrize("part", ["zarr.json", "0/zarr.json", "stackbound/README.txt", "stackbound/verification.jsonl"])
def test_a_part_of_a_store_is_damage(store, part):
    """Where any part of a store is left, what is missing is damage."""
    for path in sorted(store.rglob("*"), reverse=True):
        if path.is_file() and path != store / part:
            path.unlink()

    assert problems(store)


@pytest.mark.parametrize("seed", range(6))
def test_garbage_never_crashes_a_check(store, seed):
    """Whatever the files hold, a check ends with a report."""
    chance = np.random.default_rng(seed)
    for path in sorted(path for path in store.rglob("*") if path.is_file()):
        data = path.read_bytes()
        match chance.integers(4):
            case 0:
                path.write_bytes(chance.bytes(len(data)))
            case 1:
                path.write_bytes(data[: chance.integers(len(data))])
            case 2:
                path.write_bytes(b"")
            case 3:
                path.write_bytes(data.replace(b"6", b"9").replace(b"[", b"{", 1))

    assert problems(store)


def test_an_absurd_shape_does_not_keep_a_check_busy(store):
    """Metadata that claim a stack of 10**18 pixels are named as damage at once, with and without a log."""
    (store / "stackbound" / "verification.jsonl").unlink()
    for name in ("zarr.json", "0/zarr.json"):
        data = (store / name).read_bytes()
        (store / name).write_bytes(
            data.replace(b"\n    6,", b"\n    1000000000000,").replace(b" 6,", b" 1000000000000,")
        )
    found = problems(store)

    assert any("cannot be this one" in line or "damaged" in line for line in found)
