"""Every shipped recipe on a small stack of the kind that it is for, from the checkout and from the wheel."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import zipfile
from pathlib import Path

import numpy as np
import pytest
import stackbound
import stackbound_synthetic as synthetic
from stackbound.recipes import recipe_names, recipe_path

ROOT = Path(__file__).parents[2]


def deconvolved() -> np.ndarray:
    """Return a smooth volume of floats with sharp points, some of them not finite."""
    z, y, x = np.indices((8, 64, 64), dtype=np.float32)
    volume = np.exp(-((y - 30) ** 2 + (x - 30) ** 2 + 9 * (z - 4) ** 2) / 200).astype(np.float32) * 3000
    volume += np.random.default_rng(6).gamma(1, 2, volume.shape).astype(np.float32)
    volume[0, 0, :2] = np.nan, np.inf
    return volume


STACKS = {
    "light-sheet": (lambda: synthetic.light_sheet((4, 96, 128)).pixels(), "czyx", "3"),
    "confocal": (lambda: synthetic.confocal((4, 64, 96)).pixels(), "czyx", "0.002"),
    "electron-microscopy": (lambda: synthetic.electron_micrograph((2, 96, 96)).pixels(), "czyx", "1"),
    "brightfield-rgb": (lambda: synthetic.stained_tissue((96, 96)).pixels(), "czyx", "2"),
    "ct-research": (lambda: synthetic.ct_phantom((4, 96, 96)), "zyx", "5"),
    "float-deconvolved": (deconvolved, "zyx", "0.001"),
    "lossless": (lambda: synthetic.ct_phantom((2, 64, 64)), "zyx", None),
}


def test_every_recipe_has_a_stack_here():
    """No recipe is left untried."""
    assert sorted(STACKS) == recipe_names()


@pytest.fixture(scope="module")
def stacks(tmp_path_factory):
    """Write all stacks as NPY files."""
    folder = tmp_path_factory.mktemp("stacks")
    for name, (make, _, _) in STACKS.items():
        np.save(folder / f"{name}.npy", make())
    return folder


@pytest.mark.parametrize("name", STACKS)
def test_a_recipe_does_its_job(name, stacks, tmp_path):
    """Each recipe makes a store that keeps its promise, and its tiles are smaller than the pixels."""
    _, axes, tolerance = STACKS[name]
    source, store = stacks / f"{name}.npy", tmp_path / f"{name}.ome.zarr"
    report = stackbound.compress(source, store, config=name, axes=axes, tolerance=tolerance)
    original, decoded = np.load(source), stackbound.open(store)[...]
    finite = np.isfinite(original)
    bounds = np.array([float(text) for text in report.promise["stored"]])
    errors = np.abs(np.where(finite, original, 0).astype(float) - np.where(finite, decoded, 0).astype(float))
    largest = errors.reshape(len(bounds), -1).max(axis=1)

    assert 0 == report.pixels_over
    assert (largest <= bounds).all()
    assert original[~finite].tobytes() == decoded[~finite].tobytes()
    assert sum(shard.stat().st_size for shard in (store / "0" / "c").rglob("*") if shard.is_file()) < original.nbytes
    assert stackbound.verify(store, against=source, axes=axes).ok


@pytest.mark.parametrize("name", recipe_names())
def test_a_recipe_says_what_it_is_not_for(name):
    """Each recipe says in its comments what it is for and when not to use it."""
    comments = [line for line in recipe_path(name).read_text(encoding="utf-8").splitlines() if line.startswith("#")]

    assert len(comments) >= 5
    assert "Not for" in " ".join(comments)


def test_recipes_are_found_in_an_installed_wheel(stacks, tmp_path):
    """From a wheel, outside the checkout, every recipe is found by its name and does its job."""
    build = [sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(tmp_path)]
    subprocess.run(build, cwd=ROOT, check=True, capture_output=True)
    # A wheel without scripts is installed by unpacking it: its metadata lies where an installer would put it.
    zipfile.ZipFile(next(tmp_path.glob("*.whl"))).extractall(tmp_path / "site")
    code = """
import json, sys
import stackbound
from stackbound.recipes import recipe_names
folder, jobs = sys.argv[1], json.loads(sys.argv[2])
over = [
    stackbound.compress(f"{folder}/{name}.npy", f"{name}.ome.zarr", config=name, axes=axes, tolerance=n).pixels_over
    for name, axes, n in jobs
]
print(json.dumps([stackbound.__file__, recipe_names(), over]))
"""
    jobs = json.dumps([(name, axes, tolerance) for name, (_, axes, tolerance) in STACKS.items()])
    environment = os.environ | {"PYTHONPATH": str(tmp_path / "site")}
    command = [sys.executable, "-c", code, str(stacks), jobs]
    run = subprocess.run(command, cwd=tmp_path, env=environment, capture_output=True, text=True)
    assert 0 == run.returncode, run.stderr
    file, names, over = json.loads(run.stdout)

    assert (tmp_path / "site") in Path(file).parents
    assert sorted(STACKS) == names
    assert [0] * len(STACKS) == over
