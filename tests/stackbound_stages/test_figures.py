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
