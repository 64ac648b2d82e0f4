"""The example plugins, each installed as a stranger would install it, and their stores read without them."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import stackbound
from stackbound.plugins import registry

EXAMPLES = Path(__file__).parents[1] / "plugins" / "examples"
NAMES = sorted(path.name for path in EXAMPLES.iterdir() if (path / "pyproject.toml").exists())


@pytest.fixture(scope="module")
def installed(tmp_path_factory):
    """Install all examples into a folder of their own, without dependencies and network; return their environment."""
    site = tmp_path_factory.mktemp("site")
    command = [sys.executable, "-m", "pip", "install", "--quiet", "--no-deps", "--no-build-isolation", "--no-index"]
    command += ["--disable-pip-version-check", "--target", str(site), *(str(EXAMPLES / name) for name in NAMES)]
    run = subprocess.run(command, capture_output=True, text=True)
    assert 0 == run.returncode, run.stderr
    return os.environ | {"PYTHONPATH": str(site)}


def test_there_is_an_example_of_each_usual_kind():
    """A quantizer, a transform, a loader and a figure."""
    assert ["adaptive-zone", "learned-basis", "mrc-loader", "spot-count"] == NAMES


@pytest.mark.parametrize("name", NAMES)
def test_an_example_passes_its_own_tests(name, installed):
    """The project's tests pass against what was installed, not against its folder."""
    command = [sys.executable, "-m", "pytest", "-q", "-p", "no:cacheprovider", "--import-mode=importlib", "tests"]
    run = subprocess.run(command, cwd=EXAMPLES / name, env=installed, capture_output=True, text=True)

    assert 0 == run.returncode, run.stdout + run.stderr


def test_installed_examples_are_listed_with_their_distributions(installed):
    """`stackbound plugins` names each stage with the distribution that it came from."""
    run = subprocess.run(
        [sys.executable, "-m", "stackbound", "plugins", "--json"],
        env=installed,
        capture_output=True,
        text=True,
        check=True,
    )
    stages = {
        stage["name"]: stage["distribution"] for stage in json.loads(run.stdout)["stages"] if not stage["builtin"]
    }

    assert {"adaptive-zone": "adaptive-zone", "learned-basis": "learned-basis", "mrc": "mrc-loader"} | {
        "spot-count": "spot-count"
    } == stages


@pytest.mark.parametrize(
    ("kind", "stage"), [("quantize", "adaptive-zone"), ("transform", "learned-basis"), ("verify", "spot-count")]
)
def test_stores_outlive_the_plugins_that_made_them(kind, stage, installed, tmp_path):
    """A store that a plugin had a part in is verified, read and restored, and decoded by numpy alone, without it."""
    random = np.random.default_rng(3)
    stack = (random.poisson(60, (8, 48, 64)) + 80 * np.sin(np.indices((8, 48, 64))[2] / 9)).clip(0).astype(np.uint16)
    np.save(tmp_path / "in.npy", stack)
    table = f'figures = ["max-error", "{stage}"]' if kind == "verify" else f'name = "{stage}"'
    config = f'[predict]\nname = "transform"\nblock = [4, 8, 8]\n[{kind}]\n{table}\n'
    (tmp_path / "my.toml").write_text(config, encoding="utf-8", newline="\n")
    command = [sys.executable, "-m", "stackbound", "compress", "in.npy", "out.ome.zarr", "--tolerance", "2"]
    run = subprocess.run(
        [*command, "--config", "my.toml", "--json"], cwd=tmp_path, env=installed, capture_output=True, text=True
    )
    assert 0 == run.returncode, run.stderr
    store = tmp_path / "out.ome.zarr"

    assert stage not in registry().names(kind)
    assert stackbound.verify(store, against=tmp_path / "in.npy").ok
    assert 2 >= np.abs(stackbound.open(store)[...].astype(int) - stack).max()
    assert any(stage in plugin for plugin in stackbound.inspect(store)["plugins"])
    stackbound.restore(store, tmp_path / "again.npy")
    assert (stackbound.open(store)[...] == np.load(tmp_path / "again.npy")).all()


def test_an_mrc_file_becomes_a_store(installed, tmp_path):
    """With the loader installed, an MRC file is a source like any other, its header kept in the store."""
    code = f"""
import sys; sys.path.insert(0, {str(EXAMPLES / "mrc-loader" / "tests")!r})
import numpy as np
from pathlib import Path
from test_mrc_loader import write_mrc
write_mrc(Path("a.mrc"), np.random.default_rng(4).normal(0, 30, (4, 40, 50)).astype(np.int16))
import stackbound
report = stackbound.compress("a.mrc", "a.ome.zarr", tolerance=3)
print(report.largest_error, stackbound.open("a.ome.zarr").scale, stackbound.verify("a.ome.zarr", against="a.mrc").ok)
"""
    run = subprocess.run([sys.executable, "-c", code], cwd=tmp_path, env=installed, capture_output=True, text=True)

    assert "3 (4.0, 3.0, 2.0) True" == run.stdout.strip(), run.stderr
    assert 1024 == (tmp_path / "a.ome.zarr" / "stackbound" / "source" / "mrc-header.bin").stat().st_size
