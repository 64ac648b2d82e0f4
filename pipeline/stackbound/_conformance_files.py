"""The checks of `stackbound.testing` for stages that read and write files."""

from __future__ import annotations

import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from .errors import SourceError, UsageError
from .stages import Index, OpenSource, StackInfo

if TYPE_CHECKING:
    from ._conformance import Context, Finding


def recognising(context: Context) -> Iterator[Finding]:
    """Check that a loader says no to what is not its own, without raising."""
    stage = context.stage()
    with tempfile.TemporaryDirectory() as folder:
        text, empty = Path(folder) / "notes.txt", Path(folder) / "empty"
        text.write_text("This is no image.\n", encoding="utf-8", newline="\n")
        empty.touch()
        for source in (text, empty, Path(folder), Path(folder) / "missing", [text, empty], None):
            what = type(source).__name__ if not isinstance(source, Path) else source.name
            try:
                if stage.recognises(source):
                    yield f"It recognises what is not its own ({what}).", "Look at the first bytes of the file."
            except Exception as error:  # noqa: BLE001  # the finding names whatever was raised
                yield f"'recognises' raised {type(error).__name__} for {what}.", "Return False for all that is foreign."


def reading(context: Context) -> Iterator[Finding]:
    """Check that a loader reads boxes that agree with the whole, and refuses a truncated file."""
    if context.example is None:
        context.notes.append("reading was not checked: no example file was given")
        return
    stage, path = context.stage(), context.example
    if not stage.recognises(path):
        yield f"It does not recognise {path.name}.", "'recognises' has to say yes to a file of its own kind."
        return
    with stage.open(path) as source:
        info = source.info
        yield from _info(info)
        zero = (0,) * len(info.shape)
        whole = source.read(zero, info.shape)
        if whole.shape != info.shape or whole.dtype != info.dtype:
            yield f"It read {whole.dtype} of shape {whole.shape}.", f"The file says {info.dtype} of {info.shape}."
            return
        for start, stop in _boxes(info.shape):
            box = source.read(start, stop)
            if not np.array_equal(box, whole[tuple(map(slice, start, stop))], equal_nan=info.dtype.kind == "f"):
                yield f"The box {start} to {stop} is not that part of the whole.", "Bounds are half-open, per axis."
        if whole.size and np.shares_memory(source.read(zero, info.shape), source.read(zero, info.shape)):
            yield "'read' returns the same memory again.", "The caller owns the result: return a copy."
    if not source.files:
        context.notes.append("it names no files, so a source that changes during a run goes unnoticed")
    yield from _truncated(stage, path)


def _info(info: StackInfo) -> Iterator[Finding]:
    if not 2 <= len(info.axes) <= 5 or [axis for axis in "tczyx" if axis in info.axes] != list(info.axes):
        yield f"The axes '{info.axes}' are not two to five of t, c, z, y, x in this order.", "Bring them into it."
    if len(info.axes) != len(info.shape):
        yield f"The axes '{info.axes}' do not fit the shape {info.shape}.", "Give one length for each."
    if not info.dtype.isnative:
        yield f"The dtype {info.dtype} has foreign byte order.", "Use dtype.newbyteorder('=')."


def _boxes(shape: Index) -> Iterator[tuple[Index, Index]]:
    random = np.random.default_rng(6)
    for _ in range(8):
        start = tuple(int(random.integers(0, length)) for length in shape)
        yield start, tuple(int(random.integers(a + 1, length + 1)) for a, length in zip(start, shape, strict=True))


def _truncated(stage: Any, path: Path) -> Iterator[Finding]:
    if not path.is_file():
        return
    with tempfile.TemporaryDirectory() as folder:
        cut = Path(folder) / path.name
        cut.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
        try:
            with stage.open(cut) as source:
                source.read((0,) * len(source.info.shape), source.info.shape)
        except SourceError:
            return
        except Exception as error:  # noqa: BLE001  # the finding names whatever was raised
            yield f"A truncated file raised {type(error).__name__}.", "Raise stackbound.errors.SourceError."
        else:
            yield "A truncated file was read as if it were whole.", "Compare the file's size with what its header says."


class _Memory(OpenSource):
    """Pixels in memory as a decoded stack."""

    def __init__(self, pixels: NDArray[Any], axes: str) -> None:
        self.pixels = pixels
        self.info = StackInfo("array", axes, pixels.shape, pixels.dtype)

    def read(self, start: Index, stop: Index) -> NDArray[Any]:
        return self.pixels[tuple(map(slice, start, stop))].copy()


def writing(context: Context) -> Iterator[Finding]:
    """Check that what a saver writes reads back as the same pixels."""
    from .sources import open_source

    stage, written = context.stage(), 0
    if not stage.suffixes or any(not suffix.startswith(".") or suffix != suffix.lower() for suffix in stage.suffixes):
        yield f"The suffixes {stage.suffixes} are not lower-case file name endings.", "Write them as ('.abc',)."
        return
    random = np.random.default_rng(7)
    for axes, shape, dtype in (
        ("zyx", (3, 20, 30), "uint16"),
        ("yx", (9, 7), "int16"),
        ("czyx", (2, 2, 8, 8), "uint8"),
    ):
        source = _Memory(random.integers(0, 99, shape).astype(dtype), axes)
        try:
            stage.check(source.info)
        except UsageError:
            continue
        with tempfile.TemporaryDirectory() as folder:
            target = Path(folder) / f"out{stage.suffixes[0]}"
            stage.write(target, source)
            written += 1
            if not target.exists():
                yield "'write' left no file.", "Write to the very name that was given."
                continue
            try:
                with open_source(target, axes=axes) as again:
                    pixels = again.read((0,) * len(again.info.shape), again.info.shape)
            except SourceError:
                context.notes.append(f"no loader here reads '{stage.suffixes[0]}' files back")
                continue
            if pixels.tobytes() != source.pixels.tobytes():
                yield f"What was written reads back as other pixels ({axes}, {dtype}).", "Keep type and order."
    if not written:
        yield "It refuses every stack that was tried.", "'check' refuses only what the format cannot hold."
