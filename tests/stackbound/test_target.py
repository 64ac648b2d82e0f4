"""Names on disk around a target."""

import json
import os
import subprocess
import sys
import time

import pytest
from stackbound.errors import TargetError
from stackbound.lock import Lock
from stackbound.target import Target

HOLD = """
import sys, time
from pathlib import Path
from stackbound.lock import Lock
with Lock(Path(sys.argv[1])):
    print("held", flush=True)
    time.sleep(60)
"""


@pytest.fixture
def holder(tmp_path):
    """Start a process that holds the lock of `tmp_path`."""
    process = subprocess.Popen([sys.executable, "-c", HOLD, str(tmp_path / "lock")], stdout=subprocess.PIPE, text=True)
    assert process.stdout is not None
    assert process.stdout.readline() == "held\n"
    yield process
    process.kill()
    process.wait()
    process.stdout.close()


def test_a_second_run_is_refused(holder, tmp_path):
    """While a process holds the lock, another one is told who holds it."""
    with pytest.raises(TargetError, match=f"process {holder.pid}"):
        Lock(tmp_path / "lock").acquire()
    assert (tmp_path / "lock").exists()


def test_the_lock_of_a_killed_process_is_stale(holder, tmp_path):
    """A lock file whose process was killed holds nobody up, and is gone after the next run."""
    holder.kill()
    holder.wait()
    assert (tmp_path / "lock").exists()
    with Lock(tmp_path / "lock"):
        assert os.getpid() == json.loads((tmp_path / "lock").read_text(encoding="utf-8"))["process"]

    assert not (tmp_path / "lock").exists()


def test_without_file_locks_the_process_decides(tmp_path, monkeypatch):
    """On a file system without locks a living holder is refused and a dead one is not."""
    monkeypatch.setattr("stackbound.lock._lock_file", lambda file: (_ for _ in ()).throw(OSError(38, "no locks")))
    with Lock(tmp_path / "lock"), pytest.raises(TargetError, match="Another run"):
        Lock(tmp_path / "lock").acquire()
    (tmp_path / "lock").write_text('{"process": 1, "started": "0", "host": "' + os.uname().nodename + '"}', "utf-8")
    with Lock(tmp_path / "lock"):
        pass


def make_store(path, text="old"):
    """Make a folder that counts as a store."""
    (path / "stackbound").mkdir(parents=True)
    (path / "zarr.json").write_text('{"attributes": {"stackbound": {}}}', encoding="utf-8")
    (path / "stackbound" / "note").write_text(text, encoding="utf-8")


@pytest.mark.parametrize(
    ("make", "options", "message"),
    [
        (lambda t: make_store(t.path), {}, "exists already"),
        (lambda t: t.path.write_text("mine", encoding="utf-8"), {"overwrite": True}, "nothing but stores"),
        (lambda t: (t.path / "mine").mkdir(parents=True), {"overwrite": True}, "nothing but stores"),
        (lambda t: t.partial.mkdir(), {}, "--resume"),
    ],
)
def test_what_exists_is_refused(tmp_path, make, options, message):
    """Nothing that exists is written over without being asked, and nothing but stores even then."""
    target = Target(tmp_path / "t.ome.zarr")
    make(target)
    with pytest.raises(TargetError, match=message):
        target.check(**{"resume": False, "overwrite": False, **options})


def test_a_missing_folder_is_named(tmp_path):
    """The folder of the target must exist."""
    with pytest.raises(TargetError, match="does not exist"):
        Target(tmp_path / "none" / "t").check(resume=False, overwrite=False)


def test_a_target_over_its_source_is_refused(tmp_path):
    """A target that is its source, holds it or lies in it is refused."""
    for target, source in (("a", "a"), ("a", "a/b.tif"), ("a/b/t", "a")):
        with pytest.raises(TargetError, match="own source"):
            Target(tmp_path / target).check_source([tmp_path / source])
    Target(tmp_path / "t").check_source([tmp_path / "a.tif"])


def test_something_else_under_the_unfinished_name_stays(tmp_path):
    """A folder that is no unfinished store is not removed, even when asked to start again."""
    target = Target(tmp_path / "t")
    target.partial.mkdir()
    (target.partial / "thesis.txt").write_text("mine", encoding="utf-8")
    with pytest.raises(TargetError, match="not an unfinished store"):
        target.discard()
    assert (target.partial / "thesis.txt").exists()


def test_finish_replaces_whole_stores(tmp_path):
    """The old store is gone only when the new one has its name."""
    target = Target(tmp_path / "t")
    make_store(target.path, "old")
    make_store(target.partial, "new")
    target.finish()

    assert "new" == (target.path / "stackbound" / "note").read_text(encoding="utf-8")
    assert ["t"] == [path.name for path in tmp_path.iterdir()]


def test_a_kill_between_two_renames_loses_nothing(tmp_path):
    """An old store that was moved aside comes back where no new one took its place."""
    target = Target(tmp_path / "t")
    make_store(target.replaced, "old")
    target.recover()
    assert "old" == (target.path / "stackbound" / "note").read_text(encoding="utf-8")
    make_store(target.replaced, "older")
    target.recover()

    assert "old" == (target.path / "stackbound" / "note").read_text(encoding="utf-8")
    assert not target.replaced.exists()


def test_renames_are_retried_where_windows_refuses(tmp_path, monkeypatch):
    """A sharing violation that passes does not fail the run."""
    from stackbound import target as module

    calls = []

    def action():
        calls.append(1)
        if len(calls) < 3:
            raise PermissionError(13, "in use")

    monkeypatch.setattr(module.os, "name", "nt")
    monkeypatch.setattr(time, "sleep", lambda seconds: None)
    module._patiently(action, "it cannot be renamed", tmp_path)

    assert 3 == len(calls)


def test_a_rename_that_fails_puts_the_old_store_back(tmp_path, monkeypatch):
    """Where the new store cannot get its name, the old one has it."""
    from stackbound import target as module

    target = Target(tmp_path / "t")
    make_store(target.path, "old")
    make_store(target.partial, "new")
    real = module.rename

    def failing(old, new):
        if old == target.partial:
            raise TargetError("it cannot be renamed")
        real(old, new)

    monkeypatch.setattr(module, "rename", failing)
    with pytest.raises(TargetError):
        target.finish()

    assert "old" == (target.path / "stackbound" / "note").read_text(encoding="utf-8")
    assert target.partial.exists()
