"""The command line: its output, its exit codes, and what it says of a user's mistakes."""

from __future__ import annotations

import functools
import json
import os
import signal
import subprocess
import sys
import time

import numpy as np
import pytest
import tifffile
from small_files import pixels, tree, write_stack
from stackbound import cli
from stackbound.errors import IntegrityError
from stackbound.tolerance import UNITS

# ------------------------------------------------------------------------------------------------------- what it does


def test_the_whole_way(here, capfd):
    """Compress, inspect, verify and restore a stack by the command line; every pixel lies within the tolerance."""
    data = write_stack("embryo.tif")

    assert 0 == cli.run(["compress", "embryo.tif", "embryo.ome.zarr", "--tolerance", "3"])
    out = capfd.readouterr().out
    assert "largest error 3" in out
    assert "Keep this line elsewhere" in out
    root = out.partition("  root")[2].split()[0]

    assert 0 == cli.run(["inspect", "embryo.ome.zarr"])
    assert root in capfd.readouterr().out
    assert 0 == cli.run(["verify", "embryo.ome.zarr", "--root", root, "--against", "embryo.tif"])
    assert "measured again now" in capfd.readouterr().out
    assert 0 == cli.run(["restore", "embryo.ome.zarr", "again.tif"])
    assert "Research use." in capfd.readouterr().out

    assert 3 == np.abs(tifffile.imread("again.tif").astype(int) - data.astype(int)).max()


def test_json_is_one_object_with_a_schema_version(here, capfd):
    """With --json standard output is one JSON object, of every command that has results."""
    write_stack("embryo.tif")
    commands = [
        ["compress", "embryo.tif", "embryo.ome.zarr", "--tolerance", "3", "--dry-run", "--json"],
        ["compress", "embryo.tif", "embryo.ome.zarr", "--tolerance", "3", "--json"],
        ["verify", "embryo.ome.zarr", "--json"],
        ["inspect", "embryo.ome.zarr", "--json"],
        ["inspect", "embryo.tif", "--json"],
        ["restore", "embryo.ome.zarr", "again.npy", "--json"],
        ["plugins", "--json"],
    ]

    for command in commands:
        assert 0 == cli.run(command), command
        assert 1 == json.loads(capfd.readouterr().out)["schema_version"]


def test_damage_is_exit_code_three(here, capfd):
    """A changed byte ends verify with 3, on standard output with the place, and nothing on standard error."""
    write_stack("embryo.tif")
    cli.run(["compress", "embryo.tif", "embryo.ome.zarr", "--tolerance", "3"])
    shard = next(path for path in (here / "embryo.ome.zarr" / "0" / "c").rglob("*") if path.is_file())
    damaged = bytearray(shard.read_bytes())
    damaged[len(damaged) // 2] ^= 1
    shard.write_bytes(damaged)
    capfd.readouterr()

    assert 3 == cli.run(["verify", "embryo.ome.zarr"])
    out = capfd.readouterr().out
    assert "DAMAGED" in out
    assert shard.relative_to(here / "embryo.ome.zarr").as_posix() in out


def test_several_sources_become_stores_in_a_folder(here, capfd):
    """Each source becomes its own store; a bad one is named, the rest goes on, and the end is not zero."""
    write_stack("one.tif")
    (here / "two.tif").write_text("no image")
    write_stack("three.tif")

    assert 2 == cli.run(["compress", "one.tif", "two.tif", "three.tif", "stores", "--tolerance", "2"])
    out, err = capfd.readouterr()
    assert ["one.ome.zarr", "three.ome.zarr"] == sorted(path.name for path in (here / "stores").glob("*.zarr"))
    assert "2 of 3 sources done" in out
    assert 1 == err.count("Error: ")
    assert "two.tif" in err


def test_the_summary_of_several_sources_as_json(here, capfd):
    """One object tells of each source its report or its error."""
    write_stack("one.tif")
    (here / "two.tif").write_text("no image")

    assert 2 == cli.run(["compress", "one.tif", "two.tif", "stores", "--tolerance", "2", "--json"])
    summary = json.loads(capfd.readouterr().out)
    assert [0, 2] == [result["exit_code"] for result in summary["results"]]
    assert "2" == summary["results"][0]["report"]["largest_error"]
    assert (2, 1) == (summary["sources"], summary["failed"])


def test_several_sources_are_resumed_where_they_stopped(here, capfd):
    """--resume leaves finished stores of the same configuration alone and makes the missing ones."""
    write_stack("one.tif")
    (here / "two.tif").write_text("no image")
    command = ["compress", "one.tif", "two.tif", "stores", "--tolerance"]
    cli.run([*command, "2"])
    first = (here / "stores" / "one.ome.zarr" / "zarr.json").stat().st_mtime_ns
    write_stack("two.tif")
    capfd.readouterr()

    assert 0 == cli.run([*command, "2", "--resume"])
    assert "finished by an earlier run" in capfd.readouterr().out
    assert first == (here / "stores" / "one.ome.zarr" / "zarr.json").stat().st_mtime_ns
    assert 2 == cli.run([*command, "3", "--resume"])
    assert "exists already" in capfd.readouterr().err


@pytest.mark.parametrize(
    ("words", "text"),
    [
        (["one.tif", "sub/one.tif", "stores"], "would both become one.ome.zarr"),
        (["one.tif", "two.tif", "stores.ome.zarr"], "each becomes a store of its own"),
        (["one.tif", "two.tif", "two.tif"], "is a file"),
    ],
)
def test_several_sources_that_cannot_be_told_apart_are_refused(here, capfd, words, text):
    """Two sources for one store, and a target that is no folder, are refused before the first run."""
    (here / "sub").mkdir()
    for name in ("one.tif", "two.tif", "sub/one.tif"):
        write_stack(name)
    before = tree(here)

    assert 2 == cli.run(["compress", *words, "--tolerance", "2"])
    assert text in capfd.readouterr().err
    assert before == tree(here)


def test_an_existing_store_is_replaced_only_when_asked(here, capfd):
    """Without --overwrite nothing is touched and the message says what to do."""
    write_stack("embryo.tif")
    command = ["compress", "embryo.tif", "embryo.ome.zarr", "--tolerance"]
    cli.run([*command, "3"])
    capfd.readouterr()

    assert 2 == cli.run([*command, "2"])
    assert "--overwrite" in capfd.readouterr().err
    assert 0 == cli.run([*command, "2", "--overwrite"])
    assert "(allowed: 2)" in capfd.readouterr().out


def test_a_dry_run_writes_nothing(here, capfd):
    """--dry-run checks everything, says what would be done, and leaves the folder as it was."""
    write_stack("embryo.tif")
    before = tree(here)

    assert 0 == cli.run(["compress", "embryo.tif", "embryo.ome.zarr", "--tolerance", "3", "--dry-run"])
    assert "nothing was written" in capfd.readouterr().out
    assert before == tree(here)


# ------------------------------------------------------------------------------------------- errors, output, processes


def test_a_fault_of_the_program_is_exit_code_one(here, capfd, monkeypatch):
    """An unexpected exception is called the program's own fault; the traceback comes only when it is asked for."""
    monkeypatch.setattr(cli, "_one_source", lambda _: 1 / 0)

    assert 1 == cli.run(["inspect", "embryo.tif"])
    err = capfd.readouterr().err
    assert "a fault of stackbound itself" in err
    assert "Traceback" not in err
    monkeypatch.setenv("STACKBOUND_TRACEBACK", "1")
    assert 1 == cli.run(["inspect", "embryo.tif"])
    assert "Traceback" in capfd.readouterr().err


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (KeyboardInterrupt(), 130),
        (IntegrityError("A tile is damaged."), 3),
        (MemoryError(), 1),
        (OSError(28, "No space left on device", "out.zarr"), 2),
    ],
)
def test_every_error_has_its_exit_code(here, capfd, monkeypatch, error, code):
    """Interruption, damage, exhausted memory and full disks each end with their own exit code and message."""

    def fail(_):
        raise error

    monkeypatch.setattr(cli, "_one_source", fail)

    assert code == cli.run(["inspect", "embryo.tif"])
    assert "Traceback" not in capfd.readouterr().err


@pytest.mark.skipif(os.name != "posix", reason="signals work otherwise on this system")
def test_interruption_is_exit_code_130_and_no_store(here):
    """Ctrl-C ends a run at once with 130 and without a traceback; nothing stands under the final name."""
    np.save("big.npy", pixels(24, 1024, 1024))
    command = [sys.executable, "-m", "stackbound.cli", "compress", "big.npy", "big.ome.zarr", "--tolerance", "1"]
    # A shell starts background jobs with the signal ignored, and children inherit that.
    listening = functools.partial(signal.signal, signal.SIGINT, signal.SIG_DFL)
    with subprocess.Popen(command, stderr=subprocess.PIPE, text=True, preexec_fn=listening) as run:
        while run.poll() is None and not (here / "big.ome.zarr.partial").exists():
            time.sleep(0.01)
        run.send_signal(signal.SIGINT)
        err = run.communicate()[1]

    assert 130 == run.returncode
    assert "Interrupted." in err
    assert "Traceback" not in err
    assert not (here / "big.ome.zarr").exists()


def test_help_imports_nothing_heavy():
    """--help answers without numpy, pydantic and everything that needs them."""
    heavy = "{'numpy', 'pydantic', 'numba', 'zarr', 'scipy', 'tifffile', 'rich', 'stackbound.plugins'}"
    code = (
        "import sys; from stackbound import cli; codes = [cli.run([*w, '--help']) for w in"
        " ([], ['compress'], ['verify'], ['restore'], ['inspect'], ['plugins'], ['schema'], ['demo'])];"
        f"print('heavy:', sorted({heavy} & set(sys.modules)), codes)"
    )
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)

    assert f"heavy: [] {[0] * 8}" in run.stdout


@pytest.mark.parametrize("command", [[], ["compress"], ["restore"]])
def test_help_carries_the_caution(command, capfd):
    """The help of the program, and of whoever makes or hands out pixels, says what is not promised."""
    cli.run([*command, "--help"])

    assert "qualified clinical review" in " ".join(capfd.readouterr().out.split())


def test_help_names_every_unit(capfd):
    """The help of --unit names the units that there are."""
    cli.run(["compress", "--help"])
    text = " ".join(capfd.readouterr().out.split())

    assert all(unit in text for unit in UNITS)


def test_the_version_is_shown(capfd):
    """--version prints name and version."""
    assert 0 == cli.run(["--version"])
    assert capfd.readouterr().out.startswith("stackbound 0.")


def test_the_schema_is_json(capfd):
    """`stackbound schema` prints a JSON Schema."""
    assert 0 == cli.run(["schema"])
    assert "properties" in json.loads(capfd.readouterr().out)


def test_output_in_a_pipe_has_no_escape_codes(here):
    """Piped, neither results nor progress nor errors hold colours or cursor movements; results stay alone on stdout."""
    write_stack("embryo.tif")
    environment = {key: value for key, value in os.environ.items() if key != "NO_COLOR"}
    for target in ("embryo.ome.zarr", "embryo.ome.zarr"):
        run = subprocess.run(
            [sys.executable, "-m", "stackbound.cli", "compress", "embryo.tif", target, "--tolerance", "1"],
            capture_output=True,
            env=environment,
        )
        assert b"\x1b" not in run.stdout + run.stderr

    assert (2, b"") == (run.returncode, run.stdout)


def test_a_reader_that_leaves_early_is_no_error():
    """`stackbound schema | head -1` ends quietly."""
    command = f"'{sys.executable}' -m stackbound.cli schema | head -1"
    run = subprocess.run(["bash", "-o", "pipefail", "-c", command], capture_output=True, text=True)

    assert (0, "") == (run.returncode, run.stderr)
