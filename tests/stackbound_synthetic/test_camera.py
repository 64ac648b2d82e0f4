"""The camera's noise is what its model says."""

import numpy as np
import pytest
from stackbound_synthetic import Camera
from stackbound_synthetic.seeds import generator

SAMPLES = 400_000
LIMIT = 5.0
"""Standard errors; the seeds are fixed, so a right camera passes always."""


@pytest.mark.parametrize("electrons", [0.0, 0.7, 12.0, 300.0, 20_000.0])
@pytest.mark.parametrize("camera", [Camera(), Camera(gain=2.3, offset=60.0, read_noise=4.0)])
def test_mean_is_offset_plus_gain_times_electrons(camera: Camera, electrons: float) -> None:
    """The mean grey level is the noiseless signal, within the standard error of the mean."""
    grey = camera.expose(np.full((SAMPLES, 1), electrons, np.float32), generator(3, 1)).astype(np.float64)
    expected = camera.offset + camera.gain * electrons
    spread = np.sqrt(camera.gain**2 * electrons + camera.read_noise**2 + 1 / 12)

    assert abs(grey.mean() - expected) < LIMIT * spread / np.sqrt(SAMPLES)


@pytest.mark.parametrize("electrons", [0.0, 0.7, 12.0, 300.0, 20_000.0])
@pytest.mark.parametrize("camera", [Camera(), Camera(gain=2.3, offset=60.0, read_noise=4.0)])
def test_variance_is_photon_noise_plus_read_noise_plus_rounding(camera: Camera, electrons: float) -> None:
    """The variance is gain^2 e + read^2 + 1/12 (EMVA 1288), within the standard error of a variance."""
    grey = camera.expose(np.full((SAMPLES, 1), electrons, np.float32), generator(4, 1)).astype(np.float64)
    expected = camera.gain**2 * electrons + camera.read_noise**2 + 1 / 12
    # The fourth cumulant of gain * Poisson(e) is gain^4 e; the variance of a sample variance is (k4 + 2 k2^2) / n.
    error = np.sqrt((camera.gain**4 * electrons + 2 * expected**2) / SAMPLES)

    assert float(camera.variance(np.array([electrons], np.float32))[0]) == pytest.approx(expected, rel=1e-5)
    assert abs(grey.var() - expected) < LIMIT * error


def test_saturated_pixels_hold_the_largest_grey_level() -> None:
    """Light beyond the range reads as `saturation` in every pixel, and nothing wraps around."""
    camera = Camera(saturation=4095)
    grey = camera.expose(np.full((64, 64), 1e6, np.float32), generator(5, 1))

    assert grey.dtype == np.uint16
    assert (grey == 4095).all()


def test_grey_levels_end_at_zero() -> None:
    """Without an offset, read noise below zero reads as 0."""
    grey = Camera(offset=0.0, read_noise=5.0).expose(np.zeros((64, 64), np.float32), generator(6, 1))

    assert grey.min() == 0
    assert (grey == 0).mean() > 0.45


def test_hot_pixels_are_as_many_as_stated_and_stay_in_place() -> None:
    """A camera has its share of leaking pixels, the same ones whenever it is asked."""
    camera = Camera(hot_fraction=0.01)
    leakage = camera.leakage((200, 300), seed=8)

    assert np.count_nonzero(leakage) == 600
    assert np.array_equal(leakage, camera.leakage((200, 300), seed=8))
    assert leakage[leakage > 0].mean() == pytest.approx(camera.hot_electrons, rel=0.25)


@pytest.mark.parametrize("electrons", [0.0, 0.3, 40.0, 5_000.0])
@pytest.mark.parametrize("saturation", [255, 65535])
def test_probabilities_are_those_of_the_drawn_pixels(electrons: float, saturation: int) -> None:
    """The stated distribution adds up to 1 and fits a sample by a chi-square test."""
    camera = Camera(saturation=saturation)
    first, probabilities = camera.probabilities(electrons)
    grey = camera.expose(np.full((SAMPLES, 1), electrons, np.float32), generator(9, 1)).ravel()
    counts = np.bincount(grey.astype(np.int64) - first, minlength=len(probabilities))

    assert probabilities.sum() == pytest.approx(1, abs=1e-9)
    assert len(counts) == len(probabilities)
    likely = probabilities * SAMPLES >= 10
    chi_square = ((counts[likely] - probabilities[likely] * SAMPLES) ** 2 / (probabilities[likely] * SAMPLES)).sum()
    assert chi_square < likely.sum() + 5 * np.sqrt(2 * likely.sum()) + 1


@pytest.mark.parametrize(("tolerance", "bits"), [(0, 4.371), (1, 2.805), (2, 2.105), (5, 1.124)])
def test_entropy_of_nearly_gaussian_noise(tolerance: int, bits: float) -> None:
    """Noise of 5 grey levels in bins centred on the signal has the entropies of a Gaussian, computed independently."""
    electrons = 40_000.0
    camera = Camera(gain=0.02, offset=0.0, read_noise=3.0)
    assert camera.gain**2 * electrons + camera.read_noise**2 == 25

    assert camera.bits(electrons, tolerance) == pytest.approx(bits, abs=2e-3)


def test_entropy_is_that_of_a_direct_sum() -> None:
    """With a gain of 1 and no read noise the entropy is that of the Poisson law itself."""
    camera = Camera(gain=1.0, offset=0.0, read_noise=0.0)
    n = np.arange(60)
    p = np.exp(n * np.log(7.0) - 7.0 - np.cumsum(np.log(np.maximum(n, 1))))

    assert camera.bits(7.0) == pytest.approx(-(p * np.log2(p)).sum(), abs=1e-9)
