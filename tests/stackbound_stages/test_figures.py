"""Figures about original and decoded pixels."""

import math

import numpy as np
import pytest
from stackbound.plugins import registry
from stackbound.stages import StackInfo

NAMES = ["max-error", "mean-error", "rmse", "psnr"]


def figure(name, original, decoded, regions=1):
    """Return a figure of a stack measured in some regions."""
    stage = registry().get("verify", name)()
    info = StackInfo("NPY", "zyx"[-original.ndim :], original.shape, original.dtype)
    parts = [
        stage.measure(o, d, info)
        for o, d in zip(np.array_split(original, regions), np.array_split(decoded, regions), strict=True)
    ]
    return stage.combine(parts, info)


@pytest.mark.parametrize("dtype", ["u1", "i2", "u2", "i4", "f4", "f8"])
def test_figures(dtype):
    """Each figure is its definition."""
    rng = np.random.default_rng(4)
    original = rng.normal(120, 30, (5, 40, 50)).clip(10, 245).astype(dtype)
    decoded = (original + rng.integers(-3, 4, original.shape)).astype(dtype)
    error = decoded.astype(float) - original.astype(float)
    rmse = math.sqrt((error**2).mean())
    peak = float(original.max()) - float(original.min())

    assert np.abs(error).max() == pytest.approx(float(figure("max-error", original, decoded)), rel=1e-12)
    assert error.mean() == pytest.approx(float(figure("mean-error", original, decoded)), abs=1e-9)
    assert rmse == pytest.approx(float(figure("rmse", original, decoded)), rel=1e-8)
    assert 20 * math.log10(peak / rmse) == pytest.approx(float(figure("psnr", original, decoded)), rel=1e-8)


@pytest.mark.parametrize("name", NAMES)
def test_regions_do_not_change_a_figure(name):
    """Integers give the very same text however the stack is cut into regions."""
    rng = np.random.default_rng(5)
    original = rng.integers(-30000, 30000, (12, 30, 40)).astype("i2")
    decoded = (original + rng.integers(-9, 10, original.shape)).astype("i2")

    assert 1 == len({figure(name, original, decoded, regions) for regions in (1, 2, 3, 5, 12)})


def test_published_psnr_of_a_uniform_error():
    """An error of 1 in every pixel of a full 8-bit range has 48.13 dB (20 log10 255, common practice)."""
    original = np.tile(np.arange(256, dtype="u1"), (4, 1))
    decoded = np.where(original < 255, original + 1, 254).astype("u1")

    assert "48.13" == f"{float(figure('psnr', original, decoded)):.2f}"


def test_no_error():
    """Equal stacks have no error and an infinite ratio."""
    stack = np.arange(60, dtype="u2").reshape(3, 4, 5)

    assert ["0", "0", "0", "inf"] == [figure(name, stack, stack) for name in NAMES]


def test_text_reads_back():
    """A figure's text is a decimal number that reads back to the same number."""
    original = np.array([[0, 1, 2]], "u1")
    decoded = np.array([[1, 1, 2]], "u1")

    assert repr(1 / 3) == figure("mean-error", original, decoded)
    assert repr(math.sqrt(1 / 3)) == figure("rmse", original, decoded)


def test_changed_share():
    """The share counts bits: a negative zero that became positive is a change."""
    assert "0.25" == figure("changed-share", np.array([[1, 2], [3, 4]], "u1"), np.array([[1, 2], [3, 5]], "u1"))
    assert "0.5" == figure("changed-share", np.array([[-0.0, 1.0]], "f4"), np.array([[0.0, 1.0]], "f4"))


def test_ssim():
    """Structural similarity is that of scikit-image, averaged over planes; it is 1 without change."""
    metrics = pytest.importorskip("skimage.metrics")
    rng = np.random.default_rng(6)
    original = rng.normal(1000, 200, (3, 40, 50)).astype("u2")
    decoded = (original + rng.integers(-60, 61, original.shape)).astype("u2")
    expected = [
        metrics.structural_similarity(o, d, data_range=int(o.max()) - int(o.min()), win_size=7)
        for o, d in zip(original, decoded, strict=True)
    ]

    assert np.mean(expected) == pytest.approx(float(figure("ssim", original, decoded)), abs=1e-8)
    assert figure("ssim", original, decoded) == figure("ssim", original, decoded, regions=3)
    assert "1" == figure("ssim", original, original)
    assert "nan" == figure("ssim", original[:, :5], decoded[:, :5])


def test_ssim_of_planes_that_are_not_finite():
    """Planes with NaN that changed do not count; those that did not are equal."""
    pytest.importorskip("skimage.metrics")
    stack = np.ones((2, 9, 9), "f4")
    stack[0, 0, 0] = np.nan
    changed = stack.copy()
    changed[:, 5, 5] = 2

    assert "1" == figure("ssim", stack, stack)
    assert 0 < float(figure("ssim", stack, changed)) < 1


def test_ssim_without_its_library(monkeypatch):
    """Where scikit-image is missing, the configuration is refused before anything is read."""
    import importlib.util

    from stackbound.config import build, read_config
    from stackbound.errors import ConfigError

    real = importlib.util.find_spec
    monkeypatch.setattr(importlib.util, "find_spec", lambda name, *a: None if name == "skimage" else real(name, *a))
    with pytest.raises(ConfigError, match="scikit-image"):
        build(read_config({"verify": {"figures": ["ssim"]}}, tolerance=1))
