"""Invented scenes and a camera model: stacks of known noise around a known signal, for the demo and the tests."""

from __future__ import annotations

from stackbound_synthetic.camera import Camera
from stackbound_synthetic.kinds import confocal, electron_micrograph, light_sheet, stained_tissue
from stackbound_synthetic.ometiff import write_ome_tiff
from stackbound_synthetic.scene import LightSheetScene
from stackbound_synthetic.scenes import PADDING, MembraneScene, StainScene, ct_phantom
from stackbound_synthetic.stack import Scene, SyntheticStack

__all__ = [
    "PADDING",
    "Camera",
    "LightSheetScene",
    "MembraneScene",
    "Scene",
    "StainScene",
    "SyntheticStack",
    "confocal",
    "ct_phantom",
    "electron_micrograph",
    "light_sheet",
    "stained_tissue",
    "write_ome_tiff",
]
