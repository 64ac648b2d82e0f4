"""The whole job on an invented light-sheet stack: generate, compress, verify, restore, compare once more, show.

Everything lies in one folder of the user's choice, beside a record of what the demo made. A folder that holds anything
else is refused; files of an earlier demo, unchanged, are replaced.
"""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import tifffile
from numpy.typing import NDArray

from .errors import IntegrityError, TargetError
from .picture import draw_comparison
from .reports import Progress, Quiet, _Report

if TYPE_CHECKING:
    from stackbound_synthetic import SyntheticStack

SHAPE = (24, 1024, 1024)
"""Planes, rows and columns per channel; two channels make about 100 MB."""
TOLERANCE = 2
"""Grey levels; just below the camera's noise where the invented tissue is darkest."""
RECORD = "demo-files.json"
SOURCE, STORE, RESTORED, PICTURE = "source.ome.tif", "compressed.ome.zarr", "restored.ome.tif", "comparison.png"


@dataclass(frozen=True)
class DemoReport(_Report):
    """What the demo made and found.

    Attributes
    ----------
    folder, source, store, restored, picture : Path
        Where everything is.
    axes, shape, dtype : str, tuple, str
        The invented stack.
    source_bytes, store_bytes : int
        Bytes of the pixels and of the whole store.
    ratio, bits_per_pixel : float
        Of the two, and bits of the store per pixel.
    tolerance : int
        What was promised.
    noise : float
        The camera's noise (standard deviation) in the median pixel, known because the camera is invented.
    largest_error : int
        Found by plain numpy between the source and the restored file.
    pixels, pixels_over, pixels_changed : int
        Compared so; outside the tolerance (0); different at all.
    verified : tuple of str
        Checks that `verify` made.
    root : str
        Hash that stands for the store.
    """

    folder: Path
    source: Path
    store: Path
    restored: Path
    picture: Path
    axes: str
    shape: tuple[int, ...]
    dtype: str
    source_bytes: int
    store_bytes: int
    ratio: float
    bits_per_pixel: float
    tolerance: int
    noise: float
    largest_error: int
    pixels: int
    pixels_over: int
    pixels_changed: int
    verified: tuple[str, ...]
    root: str

    def lines(self) -> list[str]:
        """Return the report as lines of text."""
        size = " x ".join(str(n) for n in self.shape)
        changed = self.pixels_changed / self.pixels
        checks = [f"                {check}" for check in self.verified]
        return [
            f"generated       {self.source}",
            f"                an invented light-sheet stack, {self.axes} {size} {self.dtype}; noise in the median pixel"
            f" {self.noise:.1f} grey levels",
            f"compressed      {self.store}",
            f"                under a tolerance of {self.tolerance} grey levels:"
            f" {_megabytes(self.source_bytes)} of pixels became {_megabytes(self.store_bytes)},"
            f" {self.ratio:.1f} times smaller ({self.bits_per_pixel:.2f} bits per pixel)",
            f"verified        root {self.root}",
            *checks,
            f"restored        {self.restored}",
            f"compared again  with plain numpy and tifffile, {self.pixels:,} pixels: largest error {self.largest_error}"
            f" of {self.tolerance} allowed, {self.pixels_over} pixels outside, {changed:.0%} changed",
            f"shown           {self.picture}",
        ]


def demo(
    folder: Path | str,
    *,
    progress: Progress | None = None,
    shape: tuple[int, int, int] = SHAPE,
    tolerance: int = TOLERANCE,
) -> DemoReport:
    """Run the whole job on an invented stack.

    Parameters
    ----------
    folder : path
        Where to work; made when missing. May be empty or hold the unchanged files of an earlier demo.
    progress : Progress, optional
        Told how far the demo is.
    shape : tuple of int
        Planes, rows and columns of each of the two channels.
    tolerance : int
        In grey levels.

    Raises
    ------
    stackbound.errors.TargetError
        The folder holds files that the demo did not make, or that were changed since.
    stackbound.errors.IntegrityError
        A check failed: a fault of stackbound or of the disk.
    """
    from stackbound_synthetic import light_sheet, write_ome_tiff

    import stackbound

    progress = progress or Quiet()
    folder = Path(folder)
    _make_room(folder)
    source, store, restored, picture = (folder / name for name in (SOURCE, STORE, RESTORED, PICTURE))
    stack = light_sheet(shape)

    progress.start("generate", stack.shape[0] * stack.shape[1])
    try:
        write_ome_tiff(source, stack, progress.advance)
    finally:
        progress.end()
    compressed = stackbound.compress(source, store, tolerance=tolerance, progress=progress, command="stackbound demo")
    checked = stackbound.verify(store, against=source, root=compressed.root, progress=progress)
    if not checked.ok:
        raise IntegrityError(f"The demo's store failed its verification: {checked.problems[0]}", where=str(store))
    stackbound.restore(store, restored, progress=progress)
    found = _compare(source, restored, tolerance, progress)
    _draw(picture, source, restored, stack, tolerance)
    _write_record(folder)
    if found.over:
        raise IntegrityError(f"{found.over} restored pixels lie outside the tolerance.", where=str(restored))
    return DemoReport(
        folder=folder,
        source=source,
        store=store,
        restored=restored,
        picture=picture,
        axes=compressed.axes,
        shape=compressed.shape,
        dtype=compressed.dtype,
        source_bytes=compressed.source_bytes,
        store_bytes=compressed.store_bytes,
        ratio=compressed.ratio,
        bits_per_pixel=compressed.bits_per_pixel,
        tolerance=tolerance,
        noise=_median_noise(stack),
        largest_error=found.largest,
        pixels=found.pixels,
        pixels_over=found.over,
        pixels_changed=found.changed,
        verified=checked.checks,
        root=compressed.root or "",
    )


# ------------------------------------------------------------------------------------------ compare once more, and show


@dataclass
class _Found:
    largest: int = 0
    pixels: int = 0
    over: int = 0
    changed: int = 0


def _compare(source: Path, restored: Path, tolerance: int, progress: Progress) -> _Found:
    """Compare two TIFF files plane by plane, with nothing of stackbound in between."""
    found = _Found()
    with tifffile.TiffFile(source) as before, tifffile.TiffFile(restored) as after:
        if before.series[0].shape != after.series[0].shape or len(before.pages) != len(after.pages):
            raise IntegrityError("The restored file has another shape than the source.", where=str(restored))
        progress.start("compare", len(before.pages))
        try:
            for one, other in zip(before.pages, after.pages, strict=True):
                error = np.abs(one.asarray().astype(np.int64) - other.asarray().astype(np.int64))
                found.largest = max(found.largest, int(error.max()))
                found.pixels += error.size
                found.over += int(np.count_nonzero(error > tolerance))
                found.changed += int(np.count_nonzero(error))
                progress.advance(1)
        finally:
            progress.end()
    return found


def _draw(picture: Path, source: Path, restored: Path, stack: SyntheticStack, tolerance: int) -> None:
    """Draw the middle plane of the last channel."""
    channels, depth, *_ = stack.shape
    page = (channels - 1) * depth + depth // 2
    with tifffile.TiffFile(source) as before, tifffile.TiffFile(restored) as after:
        draw_comparison(
            picture,
            before.pages[page].asarray(),
            after.pages[page].asarray(),
            tolerance=tolerance,
            title=f"Invented light-sheet stack: {stack.scene.channel_names[-1]}, plane {depth // 2 + 1} of {depth}",
            pixel_size=stack.scene.pixel[2],
        )


def _median_noise(stack: SyntheticStack) -> float:
    """Return the standard deviation of the noise in the median pixel of a plane in the middle."""
    electrons: NDArray[Any] = stack.electrons(0, stack.depth // 2)
    return float(np.sqrt(np.median(stack.camera.variance(electrons))))


def _megabytes(size: int) -> str:
    return f"{size / 1e6:.1f} MB"


# -------------------------------------------------------------------------------------------------- files of the demo


def _make_room(folder: Path) -> None:
    """Make the folder, or empty it where it holds nothing but an earlier demo."""
    if folder.exists() and not folder.is_dir():
        raise TargetError("The demo needs a folder, and this is a file.", where=str(folder))
    try:
        folder.mkdir(parents=True, exist_ok=True)
        record = folder / RECORD
        if not any(folder.iterdir()):
            return
        if not record.is_file() or _hashes(folder) != _recorded(record):
            raise TargetError(
                "The folder holds files that the demo did not make, or that were changed since.",
                where=str(folder),
                left="Nothing was touched.",
                remedy="Name another folder: stackbound demo FOLDER.",
            )
        _remove(folder, [record, *(folder / name for name in _recorded(record))])
    except PermissionError as error:
        raise TargetError(f"The folder cannot be written: {error.strerror}.", where=str(folder)) from error


def _remove(folder: Path, files: list[Path]) -> None:
    """Remove files and the folders that held nothing else."""
    for file in files:
        file.unlink()
    inside = {parent for file in files for parent in file.parents if parent.is_relative_to(folder) and parent != folder}
    for parent in sorted(inside, key=lambda path: len(path.parts), reverse=True):
        if not any(parent.iterdir()):
            parent.rmdir()


def _write_record(folder: Path) -> None:
    text = json.dumps(_hashes(folder), indent=1, sort_keys=True) + "\n"
    (folder / RECORD).write_text(text, encoding="utf-8", newline="\n")


def _recorded(record: Path) -> Any:
    try:
        return json.loads(record.read_text(encoding="utf-8"))
    except ValueError:
        return None


def _files(folder: Path) -> list[Path]:
    return sorted(path for path in folder.rglob("*") if not path.is_dir())


def _hashes(folder: Path) -> dict[str, str]:
    """Return the SHA-256 of every file below the folder but the record itself."""
    hashes = {}
    for path in _files(folder):
        if path != folder / RECORD:
            with path.open("rb") as file:
                hashes[path.relative_to(folder).as_posix()] = hashlib.file_digest(file, "sha256").hexdigest()
    return hashes
