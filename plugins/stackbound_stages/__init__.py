"""The built-in stages, one file each; a file is named as its stage, with "_" for "-".

A saver whose format has a loader of the same name carries the prefix ``save_``. The machine takes the stages from this
tuple through the same hook as anyone's plugin, in this order.
"""

from __future__ import annotations

BUILTIN: tuple[str, ...] = (
    "tiff",
    "npy",
    "zarr",
    "array",
    "grid",
    "transform",
    "none",
    "neighbours",
    "best",
    "dct",
    "uniform",
    "frequency_weighted",
    "rans",
    "zstd",
    "max_error",
    "mean_error",
    "rmse",
    "psnr",
    "changed_share",
    "ssim",
    "save_tiff",
    "save_ome_tiff",
    "save_npy",
    "save_zarr",
)
