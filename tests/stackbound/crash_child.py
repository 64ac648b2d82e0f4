"""Run `compress` in forked processes that end abruptly, as by SIGKILL, at the n-th step that touches the disk.

Called by test_crash.py with: source, folder, what ("new" or "overwrite"). Prints one line per step: step, exit code,
what was under the final name after the kill, whether resuming gave the expected bytes, and what was left beside it.
"""

import hashlib
import itertools
import os
import shutil
import sys
from pathlib import Path

import numpy as np
import stackbound.finish
import stackbound.regions
import stackbound.run
from stackbound import target
from stackbound.config import build, read_config
from stackbound.tilecodec import TileCoder, decode

# The cheapest coding: what is tested is the order of what happens on disk.
CONFIG = {"tile": {"name": "grid", "tile": [6, 64, 64], "region": [6, 128, 64]}, "predict": {"name": "none"}}


def digest(folder):
    """Return one hash of all names and bytes in a folder; "" where there is none."""
    if not folder.exists():
        return ""
    total = hashlib.sha256()
    for path in sorted(folder.rglob("*")):
        if path.is_file():
            total.update(path.relative_to(folder).as_posix().encode() + b"\0" + path.read_bytes())
    return total.hexdigest()


def before_each_step(action):
    """Call `action` before everything that changes the disk."""

    def watched(function):
        def wrapper(*args, **kwargs):
            action()
            return function(*args, **kwargs)

        return wrapper

    os.fsync = watched(os.fsync)
    for module in (stackbound.run, stackbound.regions, stackbound.finish):
        module.write_file = watched(module.write_file)
    target.rename = watched(target.rename)
    target._remove = watched(target._remove)
    Path.unlink = watched(Path.unlink)


def die_at(step):
    """End this process without any clean-up before the n-th step."""
    steps = itertools.count(1)
    before_each_step(lambda: os._exit(9) if next(steps) == step else None)


def count_steps(file, action):
    """Write how many steps an undisturbed run takes."""
    steps = []
    before_each_step(lambda: steps.append(1))
    action()
    file.write_text(str(len(steps)), encoding="ascii")


def forked(action):
    """Run something in a process of its own and return its exit code."""
    pid = os.fork()
    if pid == 0:
        try:
            action()
        except BaseException as error:  # noqa: BLE001  # whatever it is, this process has to end here
            print(type(error).__name__, error, file=sys.stderr, flush=True)
            os._exit(1)
        os._exit(0)
    return os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1])


def warm_up(source):
    """Load and compile the kernels once, before the forks, without starting zarr's threads."""
    pipeline = build(read_config(CONFIG, tolerance=4))
    tile = np.load(source)[:, :64, :64]
    decode(TileCoder(pipeline.predict, pipeline.encode).planned([tile], [4]).encode(tile, 4), tile.shape, tile.dtype)


def main():
    """Kill at some steps, then resume."""
    source, folder, what = Path(sys.argv[1]), Path(sys.argv[2]), sys.argv[3]
    store = folder / "s.ome.zarr"

    def compress(tolerance, name=store, **options):
        stackbound.run.compress(source, name, tolerance=tolerance, config=CONFIG, workers=2, **options)

    warm_up(source)
    overwrite = what == "overwrite"
    assert forked(lambda: compress(1, folder / "old")) == 0
    assert forked(lambda: count_steps(folder / "steps", lambda: compress(4, folder / "expected"))) == 0
    steps = int((folder / "steps").read_text(encoding="ascii"))
    expected, old = digest(folder / "expected"), digest(folder / "old")
    # A new store: all over the run. One that replaces another: where the names change, at its end.
    for step in range(max(1, steps - 12), steps + 3) if overwrite else range(1, steps + 1, 3):
        shutil.rmtree(store, ignore_errors=True)
        if overwrite:
            shutil.copytree(folder / "old", store)
        code = forked(lambda step=step: (die_at(step), compress(4, overwrite=overwrite)))
        found = {"": "nothing", old: "old", expected: "complete"}.get(digest(store), "HALF")
        # Killed between two renames, the old store waits beside for the next run to put it back.
        if found == "nothing" and digest(folder / "s.ome.zarr.replaced") == old:
            found = "aside"
        resumed = "complete"
        if found != "complete" or overwrite:
            forked(lambda: compress(4, resume=True, overwrite=overwrite))
            resumed = "equal" if digest(store) == expected else "DIFFERENT"
        left = sorted(path.name for path in folder.iterdir() if path.name.startswith("s.ome.zarr."))
        print(step, code, found, resumed, *left, flush=True)


if __name__ == "__main__":
    main()
