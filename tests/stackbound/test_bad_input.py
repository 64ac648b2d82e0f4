"""What the command line says of bad input: one clear message, exit code 2, nothing left behind."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import tifffile
from small_files import pixels, tree, write_stack
from stackbound import cli


def truncated(path: str, keep: float) -> None:
    data = Path(path).read_bytes()
    Path(path).write_bytes(data[: int(len(data) * keep)])


def make_empty() -> None:
    Path("bad.tif").touch()


def make_text() -> None:
    Path("bad.tif").write_text("This is no image.\n", encoding="utf-8")


def make_truncated_pages() -> None:
    write_stack("bad.tif", 5, 64, 64)
    truncated("bad.tif", 0.6)


def make_truncated_deflate() -> None:
    tifffile.imwrite("bad.tif", pixels(5, 64, 64), compression="deflate", photometric="minisblack")
    truncated("bad.tif", 0.6)


def make_truncated_big() -> None:
    tifffile.imwrite("bad.tif", pixels(5, 64, 64), bigtiff=True, photometric="minisblack")
    truncated("bad.tif", 0.6)


def make_truncated_ome() -> None:
    tifffile.imwrite("bad.tif", pixels(5, 64, 64), ome=True, metadata={"axes": "ZYX"}, photometric="minisblack")
    truncated("bad.tif", 0.6)


def make_truncated_imagej() -> None:
    tifffile.imwrite("bad.tif", pixels(5, 64, 64), imagej=True, metadata={"axes": "ZYX"})
    truncated("bad.tif", 0.6)


def make_truncated_npy() -> None:
    np.save("bad.npy", pixels(5, 64, 64))
    truncated("bad.npy", 0.6)


def make_complex() -> None:
    np.save("bad.npy", np.ones((20, 20), np.complex64))


def make_boolean() -> None:
    np.save("bad.npy", np.ones((20, 20), bool))


def make_six_axes() -> None:
    np.save("bad.npy", np.ones((1, 2, 1, 2, 20, 20), np.uint8))


def make_one_axis() -> None:
    np.save("bad.npy", np.ones(20, np.uint8))


def make_no_pixels() -> None:
    np.save("bad.npy", np.ones((0, 20), np.uint8))


def make_objects() -> None:
    np.save("bad.npy", np.array([[None, 1], [2, 3]], dtype=object), allow_pickle=True)


def make_nothing() -> None:
    pass


@pytest.mark.parametrize(
    "make",
    [function for name, function in list(globals().items()) if name.startswith("make_")],
    ids=lambda f: f.__name__,
)
def test_a_bad_source_is_one_message(here, capfd, make):
    """Every unusable source ends with exit code 2, one message that names it, no traceback, and nothing left behind."""
    make()
    name = next((path.name for path in here.iterdir()), "bad.tif")
    before = tree(here)

    code = cli.run(["compress", name, "out.ome.zarr", "--tolerance", "1"])
    out, err = capfd.readouterr()
    assert (2, "") == (code, out)
    assert 1 == err.count("Error: ")
    assert name in err
    assert "Traceback" not in err
    assert before == tree(here)


@pytest.mark.parametrize(
    ("options", "text"),
    [
        ([], "--tolerance 0"),
        (["--tolerance", "-1"], "negative"),
        (["--tolerance", "nan"], "finite"),
        (["--tolerance", "inf"], "finite"),
        (["--tolerance", "four"], "not a number"),
        (["--tolerance", "1", "--unit", "pixels"], "There is no unit 'pixels'"),
        (["--unit", "stored"], "without a tolerance"),
        (["--tolerance", "1", "--config", "light-shet"], "did you mean 'light-sheet'"),
        (["--tolerance", "1", "--config", "missing.toml"], "does not exist"),
        (["--tolerance", "1", "--config", "key.toml"], "did you mean 'predict'"),
        (["--tolerance", "1", "--config", "stage.toml"], "There is no predict stage 'nonne'"),
        (["--tolerance", "1", "--config", "syntax.toml"], "line 1"),
        (["--tolerance", "1", "--axes", "zyxx"], "zyxx"),
        (["--tolerance", "1", "--axes", "qyx"], "qyx"),
        (["--tolerance", "1", "--axes", "yx"], "yx"),
        (["--tolerance", "1", "--plugin", "missing.py"], "missing.py"),
        (["--tolerance", "1", "--workers", "0"], "--workers"),
        (["--tolerance", "1", "--memory", "much"], "600MiB"),
        (["--tolerance", "1", "--memory", "1kB"], "memory"),
        (["--tolerance", "1", "--colour"], "--colour"),
    ],
)
def test_a_bad_option_is_one_message(here, capfd, options, text):
    """Every unusable option ends with exit code 2, one message that says what to do, and nothing left behind."""
    write_stack("embryo.tif")
    for name, content in {"key": "[predikt]\n", "stage": '[predict]\nname = "nonne"\n', "syntax": "[pre\n"}.items():
        (here / f"{name}.toml").write_text(content, encoding="utf-8", newline="\n")
    before = tree(here)

    code = cli.run(["compress", "embryo.tif", "out.ome.zarr", *options])
    out, err = capfd.readouterr()
    assert (2, "") == (code, out)
    assert 1 == err.count("Error: ")
    assert text in err
    assert "Traceback" not in err
    assert before == tree(here)


@pytest.mark.parametrize(
    "target", ["file.txt/out.ome.zarr", "embryo.tif", "out.tif", "out.OZX", "missing/a/out.ome.zarr"]
)
def test_an_unwritable_target_is_one_message(here, capfd, target):
    """A target that cannot be written is refused before anything is read, with nothing left behind."""
    write_stack("embryo.tif")
    (here / "file.txt").write_text("keep me")
    before = tree(here)

    code = cli.run(["compress", "embryo.tif", target, "--tolerance", "1"])
    err = capfd.readouterr().err
    assert (2, 1) == (code, err.count("Error: "))
    assert "Traceback" not in err
    assert before == tree(here)


@pytest.mark.parametrize(
    ("words", "text"),
    [
        (["compress"], "SOURCE"),
        (["compress", "embryo.tif"], "STORE"),
        (["compres"], "compres"),
        (["verify", "missing.ome.zarr"], "no such store"),
        (["verify", "embryo.tif"], "not a store"),
        (["restore", "missing.ome.zarr", "again.tif"], "missing.ome.zarr"),
        (["inspect", "missing.tif"], "missing.tif"),
        (["inspect", "no*.tif"], "no*.tif"),
    ],
)
def test_a_wrong_command_is_one_message(here, capfd, words, text):
    """Missing arguments, unknown commands and missing files end with exit code 2 and one message."""
    write_stack("embryo.tif")

    code = cli.run(words)
    out, err = capfd.readouterr()
    assert (2, "", 1) == (code, out, err.count("Error: "))
    assert text in err
