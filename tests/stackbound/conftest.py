"""Small stacks and the stores made of them."""

import json
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import stackbound

# Small enough to be quick; several regions, several tiles each, and cut off at every end of the stack.
GRID = {"name": "grid", "tile": [2, 32, 32], "region": [4, 64, 64]}


@pytest.fixture(scope="session")
def pixels() -> np.ndarray:
    """Return a noisy stack with a smooth part, a flat part and the extremes of its type."""
    rng = np.random.default_rng(7)
    z, y, x = np.meshgrid(np.arange(6), np.arange(100), np.arange(120), indexing="ij")
    stack = 2000 + 900 * np.sin(y / 17) * np.cos(x / 23) + 40 * z + rng.normal(0, 12, z.shape)
    stack[:, 70:, 90:] = 500
    stack = stack.astype(np.uint16)
    stack[0, 0, :4] = 0, 65535, 0, 65535
    return stack


@pytest.fixture
def save_npy(tmp_path: Path) -> Callable[..., Path]:
    """Write an array as a source file."""

    def save(array: np.ndarray, name: str = "source.npy") -> Path:
        path = tmp_path / name
        np.save(path, array)
        return path

    return save


@pytest.fixture(scope="session")
def kept(tmp_path_factory: pytest.TempPathFactory, pixels: np.ndarray) -> tuple[Path, Path, str]:
    """Make a source, a store of it at tolerance 4 and its root; not to be changed."""
    folder = tmp_path_factory.mktemp("kept")
    source = folder / "source.npy"
    np.save(source, pixels)
    report = stackbound.compress(source, folder / "stack.ome.zarr", tolerance=4, config={"tile": GRID}, workers=2)
    assert report.root is not None
    return source, report.store, report.root


def contents(folder: Path) -> dict[str, bytes]:
    """Return every file of a folder by its path."""
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in folder.rglob("*") if path.is_file()}


def records(store: Path) -> list[dict]:
    """Return the records of a store's log."""
    text = (store / "stackbound" / "verification.jsonl").read_text(encoding="utf-8")
    return [json.loads(line) for line in text.splitlines()]


@pytest.fixture
def here(tmp_path, monkeypatch):
    """Work in an empty folder."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.setenv("NO_COLOR", "1")
    return tmp_path
