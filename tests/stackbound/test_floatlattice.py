"""Floating-point pixels: the bound exact, and every bit kept where bits must be."""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from codec_strategies import Liar, plain_coder
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from stackbound import decode as alone
from stackbound.kernels.floats import outside
from stackbound.tilecodec import TileCoder, decode, describe
from stackbound_stages.none import PredictNone
from stackbound_stages.rans import Rans

KINDS = ("float16", "float32", "float64")


@st.composite
def float_pixels(draw: st.DrawFn) -> NDArray[Any]:
    """Draw bells, any bits at all, extremes, nasty values, masks of NaN, and values around the rounding of the type."""
    dtype = np.dtype(draw(st.sampled_from(KINDS)))
    shape = draw(st.sampled_from([(1,), (1, 90), (7, 11), (3, 9, 21), (2, 1, 3, 4, 5)]))
    rng = np.random.default_rng(draw(st.integers(0, 2**32)))
    info = np.finfo(dtype)
    kind = draw(st.sampled_from(["bell", "bits", "extremes", "nasty", "masked", "far", "equal"]))
    if kind == "bits":
        return rng.integers(0, 2 ** (8 * dtype.itemsize) - 1, shape, f"u{dtype.itemsize}", endpoint=True).view(dtype)
    if kind == "extremes":
        return np.where(rng.random(shape) < 0.5, info.max, info.min).astype(dtype)
    if kind == "nasty":
        values = [
            0.0,
            -0.0,
            np.inf,
            -np.inf,
            info.smallest_subnormal,
            info.tiny,
            1e-3,
            0.24170587956905365,
            1.0,
            2049.5,
        ]
        return rng.choice(np.array(values).astype(dtype), shape)
    pixels = (rng.normal(0, 1, shape) + (1000 if kind == "far" else 0)).astype(dtype)
    if kind == "equal":
        pixels[...] = pixels.flat[0]
    if kind == "masked":
        pixels[rng.random(shape) < 0.3] = np.nan
        pixels.reshape(-1).view(f"u{dtype.itemsize}")[0] += 1
    return pixels


def float_tolerances() -> st.SearchStrategy[float]:
    """From far below every spacing to infinity."""
    return st.sampled_from([0.0, 5e-324, 1e-30, 1e-8, 1e-4, 0.001, 0.1, 0.5, 3.0, 1e30, 1e308, float("inf")])


def float_coders() -> st.SearchStrategy[TileCoder]:
    """Built-in predictors and one that lies."""
    fixed = [TileCoder(PredictNone(), Rans()), plain_coder(block=[1, 8, 8], step=3)]
    return st.sampled_from(fixed) | st.integers(0, 2**32).map(lambda seed: TileCoder(Liar(seed), Rans()))


def _assert_within(original: NDArray[Any], decoded: NDArray[Any], tolerance: Any) -> None:
    """Compare in exact numbers; what is not finite, or has a tolerance of zero, must keep its bits."""
    limits = np.broadcast_to(np.asarray(tolerance, np.float64), original.shape)
    for a, b, limit in zip(original.ravel(), decoded.ravel(), limits.ravel(), strict=True):
        if limit == 0 or not np.isfinite(a):
            assert a.tobytes() == b.tobytes()
        else:
            assert np.isfinite(b)
            assert not np.isfinite(limit) or abs(Fraction(float(a)) - Fraction(float(b))) <= Fraction(float(limit))


@settings(max_examples=200, deadline=None)
@given(float_pixels(), float_tolerances(), float_coders())
def test_bound_holds(pixels: NDArray[Any], tolerance: float, coder: TileCoder) -> None:
    """In exact arithmetic no finite pixel moves by more than the tolerance; NaN and infinities keep their bits."""
    decoded = decode(coder.encode(pixels, tolerance), pixels.shape, pixels.dtype)

    assert decoded.dtype == pixels.dtype
    _assert_within(pixels, decoded, tolerance)


@settings(max_examples=40, deadline=None)
@given(float_pixels(), float_tolerances(), float_coders())
def test_decoder_of_numpy_alone_agrees(pixels: NDArray[Any], tolerance: float, coder: TileCoder) -> None:
    """The plain decoder gives the bits that the kernels give."""
    payload = coder.encode(pixels, tolerance)
    expected = decode(payload, pixels.shape, pixels.dtype)

    assert expected.tobytes() == alone.decode(payload, pixels.shape, pixels.dtype).tobytes()


@pytest.mark.parametrize("dtype", KINDS)
def test_value_on_which_plain_scaling_breaks(dtype: str) -> None:
    """0.24170587956905365 at 0.001 in float32: plain rounding to multiples of 0.002 is off by 2e-9 too much."""
    pixels = np.linspace(0.24170587956905365 - 0.4, 0.24170587956905365 + 0.4, 801).astype(dtype)
    pixels[400] = 0.24170587956905365
    decoded = decode(plain_coder().encode(pixels, 0.001), pixels.shape, pixels.dtype)

    _assert_within(pixels, decoded, 0.001)


def test_comparison_refuses_what_rounds_to_the_tolerance() -> None:
    """A difference that rounds to the tolerance but is above it is refused; one that is equal to it is not."""
    pixels = np.array([1.0, 1.0, 2.0**60, 0.0])
    decoded = np.array([-(2.0**-60), 0.0, 0.0, np.nan])
    out = np.empty(4, np.bool_)
    outside(pixels, decoded, np.array([1.0, 1.0, 2.0**60, 1.0]), out)

    assert out.tolist() == [True, False, False, True]


def test_masks_cost_little() -> None:
    """Large areas of NaN are kept as runs beside the lattice, not by coding the whole tile bit for bit."""
    pixels = np.random.default_rng(2).normal(100, 5, (200, 200)).astype(np.float32)
    pixels[60:120, 40:90] = np.nan
    payload = plain_coder().encode(pixels, 1.0)

    assert describe(payload, pixels.shape, pixels.dtype)["lattice"] == "steps"
    assert len(payload) < pixels.nbytes / 8
    _assert_within(pixels, decode(payload, pixels.shape, pixels.dtype), 1.0)


def test_too_many_exceptions_take_the_exact_path() -> None:
    """A tile of scattered NaN with payloads of their own is coded bit for bit."""
    rng = np.random.default_rng(3)
    pixels = rng.normal(0, 1, (60, 60)).astype(np.float32)
    pixels[::7, ::7].view(np.uint32)[...] = 0x7FC00000
    pixels.view(np.uint32)[::7, ::7] = 0x7FC00000 + rng.integers(0, 999, (9, 9))
    payload = plain_coder().encode(pixels, 0.1)

    assert describe(payload, pixels.shape, pixels.dtype)["lattice"] == "bits"
    assert decode(payload, pixels.shape, pixels.dtype).tobytes() == pixels.tobytes()


def test_wider_tolerance_is_smaller() -> None:
    """Noise in floats is worth its tolerance: each doubling saves about a bit per pixel."""
    pixels = np.random.default_rng(4).normal(0, 64, (256, 256)).astype(np.float32)
    sizes = [8 * len(plain_coder(block=[1, 8, 8], step=8).encode(pixels, t)) / pixels.size for t in (1, 2, 4)]

    assert 0.8 < sizes[0] - sizes[1] < 1.2
    assert 0.8 < sizes[1] - sizes[2] < 1.2


@settings(max_examples=60, deadline=None)
@given(st.sampled_from(["uint8", "int16", "int64", "float16", "float32", "float64"]), st.integers(0, 2**32), st.data())
def test_tolerances_may_differ_from_pixel_to_pixel(dtype: str, seed: int, data: st.DataObject) -> None:
    """An array of tolerances that broadcasts over the tile holds pixel by pixel, in both decoders."""
    rng = np.random.default_rng(seed)
    shape = data.draw(st.sampled_from([(3, 9, 21), (12, 17), (2, 3, 5, 8), (1, 40), (2, 1, 6, 7)]))
    lengths = tuple(n if data.draw(st.booleans()) else 1 for n in shape)[data.draw(st.integers(0, len(shape) - 1)) :]
    pixels = rng.normal(60, 20, shape).clip(0, 127).astype(dtype)
    tolerance = rng.choice([0.25, 1, 2.5, 9], lengths)
    payload = data.draw(float_coders()).encode(pixels, tolerance)
    decoded = decode(payload, pixels.shape, pixels.dtype)

    _assert_within(pixels, decoded, np.broadcast_to(tolerance, shape))
    assert decoded.tobytes() == alone.decode(payload, pixels.shape, pixels.dtype).tobytes()
