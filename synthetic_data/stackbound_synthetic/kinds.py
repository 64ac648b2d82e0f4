"""Ready synthetic stacks, one per kind of instrument, each of invented content."""

from __future__ import annotations

from stackbound_synthetic.camera import Camera
from stackbound_synthetic.scene import LightSheetScene
from stackbound_synthetic.scenes import MembraneScene, StainScene
from stackbound_synthetic.stack import SyntheticStack


def light_sheet(
    shape: tuple[int, int, int] = (24, 1024, 1024), seed: int = 20, brightness: float = 1.0
) -> SyntheticStack:
    """Return a two-channel light-sheet stack through a camera of 16 bits; about 100 MB by default.

    Noise at the background is about 2 grey levels, on bright structures 10 to 20.

    Parameters
    ----------
    shape : tuple of int
        Planes, rows, columns.
    seed : int
        Of scene and noise.
    brightness : float
        Multiplies all light: 0.15 leaves few photons.
    """
    scene = LightSheetScene(seed, shape[1:], brightness=brightness)
    return SyntheticStack(scene, Camera(), shape[0], seed, "invented light-sheet stack")


def confocal(shape: tuple[int, int, int] = (8, 256, 256), seed: int = 21) -> SyntheticStack:
    """Return a confocal-like stack of 12 bits with few photons: most pixels hold 0 to 5, each worth 24 grey levels."""
    scene = LightSheetScene(seed, shape[1:], pixel=(0.5, 0.12, 0.12), blur=(0.5, 0.15), brightness=0.03)
    camera = Camera(gain=24.0, offset=40.0, read_noise=3.0, saturation=4095, hot_fraction=0.0)
    return SyntheticStack(scene, camera, shape[0], seed, "invented confocal stack")


def electron_micrograph(shape: tuple[int, int, int] = (2, 256, 256), seed: int = 22) -> SyntheticStack:
    """Return 8-bit sections like those of an electron microscope: dark membranes on a grainy grey ground."""
    camera = Camera(gain=0.9, offset=0.0, read_noise=2.0, saturation=255, hot_fraction=0.0)
    return SyntheticStack(MembraneScene(seed, shape[1:]), camera, shape[0], seed, "invented electron micrographs")


def stained_tissue(size: tuple[int, int] = (256, 256), seed: int = 23) -> SyntheticStack:
    """Return one 8-bit red, green, blue picture of tissue in two stains; its channels are strongly alike."""
    camera = Camera(gain=0.05, offset=0.0, read_noise=0.6, saturation=255, hot_fraction=0.0)
    return SyntheticStack(StainScene(seed, size), camera, 1, seed, "invented stained tissue")
