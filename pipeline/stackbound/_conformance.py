"""The checks of `stackbound.testing` for each kind of stage."""

from __future__ import annotations

import copy
import time
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .guard import make, same
from .plugins import registry
from .stages import Options, StackInfo, Stage

Finding = tuple[str, str]
Check = Callable[[], Iterator[Finding]]

BLOCKS = ((1, 8, 8), (4, 8, 8), (1, 32, 32), (1, 1, 4))
TOLERANCES = (0, 1, 5, 1000)


@dataclass(frozen=True)
class Context:
    """What the checks work on."""

    cls: type[Stage]
    options: Options | None
    example: Path | None
    notes: list[str]

    def stage(self) -> Any:
        """Return a fresh stage."""
        return self.cls(self.options)


def checks(context: Context) -> list[tuple[str, Check]]:
    """Return the checks for the kind of a stage class, by name."""
    from . import _conformance_files as files

    table: dict[str, list[tuple[str, Callable[[Context], Iterator[Finding]]]]] = {
        "load": [("recognising", files.recognising), ("reading", files.reading)],
        "tile": [("shapes", _shapes)],
        "transform": [("basis", _basis), ("coefficients", _coefficients), ("the bound", _bound)],
        "quantize": [("weights", _weights), ("indices", _indices), ("the bound", _bound)],
        "predict": [("the bound", _bound)],
        "encode": [("coder", _coder), ("the bound", _bound)],
        "verify": [("figure", _figure)],
        "save": [("writing", files.writing)],
    }
    return [(name, lambda check=check: check(context)) for name, check in table[context.cls.kind]]  # type: ignore[misc]


def built_in_stage(kind: str, name: str, **parts: Any) -> Any:
    """Return a built-in stage to compare with."""
    return make(registry(), kind, name, None, **parts)


# ------------------------------------------------------------------------------------------------------------ questions


def asked(method: Callable[..., Any], *question: Any) -> Iterator[Finding]:
    """Ask one question in all the ways in which the machine may ask it, and yield what goes wrong."""
    name = getattr(method, "__name__", "it")
    before = copy.deepcopy(question)
    answer = method(*question)
    if not same(before, question):
        yield f"'{name}' changes its input.", "Work on a copy: the machine hands over read-only arrays."
    if not same(answer, method(*copy.deepcopy(before))):
        yield (
            f"'{name}' answers differently when it is asked again.",
            "It may depend on its arguments and options alone.",
        )
    with ThreadPoolExecutor(4) as threads:
        others = list(threads.map(lambda _: method(*copy.deepcopy(before)), range(8)))
    if not all(same(answer, other) for other in others):
        yield f"'{name}' answers differently from several threads.", "Keep no state that methods change."
    arrays = [item for item in question if isinstance(item, np.ndarray)]
    if isinstance(answer, np.ndarray) and any(np.shares_memory(answer, item) for item in arrays):
        yield f"'{name}' returns a view of its input.", "Return an array of its own."


def array_problem(answer: Any, shape: tuple[int, ...], dtype: str) -> Iterator[Finding]:
    """Yield what is wrong with the type of an answer that has to be an array."""
    if not isinstance(answer, np.ndarray):
        yield f"It returned {type(answer).__name__}, not an array.", f"Return {dtype} of shape {shape}."
    elif answer.shape != shape or answer.dtype != np.dtype(dtype):
        yield f"It returned {answer.dtype} of shape {answer.shape}.", f"Return {dtype} of shape {shape}."
    elif answer.dtype.kind == "f" and not np.isfinite(answer).all():
        yield "It returned numbers that are not finite.", "Guard against division by zero and overflow."


def _samples(shape: tuple[int, ...]) -> Iterator[NDArray[np.float32]]:
    random = np.random.default_rng(1)
    yield np.zeros(shape, np.float32)
    yield random.normal(0, 30, shape).astype(np.float32)
    yield np.full(shape, 2.0**24, np.float32)
    yield -np.full(shape, 2.0**24, np.float32)
    yield random.laplace(0, 1e-6, shape).astype(np.float32)


def _speed(context: Context, what: str, own: Callable[[], Any], built_in: Callable[[], Any]) -> None:
    """Note how long something takes relative to the built-in stage, measured side by side."""

    def best(function: Callable[[], Any]) -> float:
        times = []
        for _ in range(3):
            start = time.perf_counter()
            function()
            times.append(time.perf_counter() - start)
        return min(times)

    ratio = best(own) / max(best(built_in), 1e-9)
    context.notes.append(f"{what} takes {ratio:.2g} times as long as the built-in stage")


# --------------------------------------------------------------------------------------------- transform and quantize


def _basis(context: Context) -> Iterator[Finding]:
    stage = context.stage()
    for block in BLOCKS:
        sample = np.random.default_rng(2).normal(0, 20, (64, *block)).astype(np.float32)
        fitted = stage.fit(sample, block)
        for axis, length in enumerate(block):
            yield from asked(stage.basis, axis, length, fitted)
            basis = stage.basis(axis, length, fitted)
            if isinstance(basis, str):
                if basis != "dct":
                    yield f"The basis '{basis}' is not known.", 'Return "dct" or a matrix of whole numbers.'
                continue
            yield from array_problem(basis, (length, length), "int64")
            if isinstance(basis, np.ndarray) and np.abs(basis).max() > 2**15:
                yield "A number of the basis is larger than 2**15.", "Rows are basis functions times 2**14."


def _coefficients(context: Context) -> Iterator[Finding]:
    stage = context.stage()
    for block in BLOCKS:
        shape = (32, *block)
        ramp = np.linspace(-200, 300, int(np.prod(shape)), dtype=np.float32).reshape(shape)
        fitted = stage.fit(ramp, block)
        yield from asked(stage.forward, ramp, fitted)
        for sample in _samples(shape):
            yield from array_problem(stage.forward(sample, fitted), shape, "float32")
        lost = _lost(stage, ramp, block, fitted)
        if lost > 0.01:
            yield (
                f"The basis brings back only {1 - lost:.0%} of what 'forward' took apart (block {block}).",
                "'forward' has to be the inverse of 'basis'; the bound holds all the same, the store is larger.",
            )
    data = np.random.default_rng(3).normal(0, 30, (4096, 1, 8, 8)).astype(np.float32)
    fitted, built_in = stage.fit(data[:64], (1, 8, 8)), built_in_stage("transform", "dct")
    built_in.forward(data, {})
    _speed(context, "'forward'", lambda: stage.forward(data, fitted), lambda: built_in.forward(data, {}))


def _lost(stage: Any, blocks: NDArray[np.float32], block: tuple[int, ...], fitted: Any) -> float:
    """Return the share of energy that the basis does not bring back from the coefficients."""
    restored = stage.forward(blocks, fitted).astype(np.float64)
    for axis, length in enumerate(block):
        basis = stage.basis(axis, length, fitted)
        rows = _cosine(length) if isinstance(basis, str) else np.asarray(basis) / 2**14
        restored = np.moveaxis(np.tensordot(restored, rows, (axis + 1, 0)), -1, axis + 1)
    return float(((restored - blocks) ** 2).sum() / (blocks.astype(np.float64) ** 2).sum())


def _cosine(length: int) -> NDArray[np.float64]:
    u, x = np.indices((length, length))
    scale = np.where(u == 0, np.sqrt(1 / length), np.sqrt(2 / length))
    return np.asarray(scale * np.cos((2 * x + 1) * u * np.pi / (2 * length)))


def _weights(context: Context) -> Iterator[Finding]:
    stage = context.stage()
    for block in BLOCKS:
        yield from asked(stage.weights, block)
        weights = stage.weights(block)
        yield from array_problem(weights, block, "float64")
        if isinstance(weights, np.ndarray) and not (weights > 0).all():
            yield "A weight is not above zero.", "A weight multiplies the step of its frequency."


def _indices(context: Context) -> Iterator[Finding]:
    stage = context.stage()
    for block in BLOCKS:
        shape = (32, *block)
        for tolerance in TOLERANCES:
            steps = np.full(block, 2.0 * tolerance + 1) * stage.weights(block)
            for sample in _samples(shape):
                yield from array_problem(stage.indices(sample, steps, tolerance), shape, "int32")
            yield from asked(stage.indices, next(s for s in _samples(shape) if s.any()), steps, tolerance)
    data = np.random.default_rng(3).normal(0, 30, (4096, 1, 8, 8)).astype(np.float32)
    steps, built_in = np.full((1, 8, 8), 3.0), built_in_stage("quantize", "uniform")
    built_in.indices(data, steps, 1)
    _speed(context, "'indices'", lambda: stage.indices(data, steps, 1), lambda: built_in.indices(data, steps, 1))


# -------------------------------------------------------------------------------------------------- the bound, a figure


def tiles() -> Iterator[NDArray[Any]]:
    """Yield tiles of several types and shapes, some of them nasty."""
    random = np.random.default_rng(4)
    yield random.poisson(100, (3, 40, 48)).astype(np.uint16)
    yield (random.normal(0, 900, (1, 33, 65)) + np.linspace(-9000, 9000, 65)).astype(np.int16)
    yield random.choice(np.array([0, 255], np.uint8), (2, 17, 19))
    yield random.integers(-(2**31), 2**31, (1, 16, 16), dtype=np.int32)
    yield np.full((1, 8, 8), 7, np.uint8)
    yield np.array([[[5]]], np.uint16)


def _bound(context: Context) -> Iterator[Finding]:
    """Encode and decode tiles with the stage in its place between built-in ones."""
    from .tilecodec import TileCoder, decode

    def coder(kind: str | None) -> TileCoder:
        made: dict[str, Any] = {
            own: context.stage() if own == kind else built_in_stage(own, name)
            for own, name in (("transform", "dct"), ("quantize", "uniform"), ("encode", "rans"))
        }
        parts = {"transform": made["transform"], "quantize": made["quantize"]}
        if kind == "predict":
            cls: Any = context.cls
            predict = cls(context.options, **parts)
        else:
            predict = built_in_stage("predict", "transform", **parts)
        return TileCoder(predict, made["encode"])

    own, built_in, sizes = coder(context.cls.kind), coder(None), [0, 0]
    for pixels in tiles():
        for tolerance in TOLERANCES:
            planned = own.planned([pixels], [tolerance])
            payload = planned.encode(pixels, tolerance)
            decoded = decode(payload, pixels.shape, pixels.dtype)
            if np.abs(decoded.astype(np.int64) - pixels.astype(np.int64)).max() > tolerance:
                yield "A pixel is outside the tolerance.", "This must never happen: report it to stackbound."
            if payload != own.planned([pixels], [tolerance]).encode(pixels, tolerance):
                yield (
                    "The same tile gives other bytes when it is coded again.",
                    "Depend on arguments and options alone.",
                )
            sizes[0] += len(payload)
            sizes[1] += len(built_in.planned([pixels], [tolerance]).encode(pixels, tolerance))
    context.notes.append(f"the test tiles take {sizes[0] / sizes[1]:.3f} times the bytes of the built-in stages")


def _coder(context: Context) -> Iterator[Finding]:
    coder = context.stage().coder
    if coder not in ("rans", "zstd"):
        yield f"The coder '{coder}' is not known to decoders.", 'Return "rans" or "zstd".'


def _figure(context: Context) -> Iterator[Finding]:
    stage = context.stage()
    random = np.random.default_rng(5)
    for dtype in ("uint8", "int16", "uint16", "float32"):
        original = random.normal(90, 20, (2, 16, 20)).astype(dtype)
        decoded = (original + random.integers(-2, 3, original.shape)).astype(dtype)
        info = StackInfo("array", "zyx", original.shape, original.dtype)
        yield from asked(stage.measure, original, decoded, info)
        parts = [stage.measure(original[:1], decoded[:1], info), stage.measure(original[1:], decoded[1:], info)]
        yield from asked(stage.combine, parts, info)
        text = stage.combine(parts, info)
        try:
            float(text)
        except (TypeError, ValueError):
            yield (
                f"'combine' returned {text!r}.",
                "Return a number as text, such as '0.25'; 'inf' and 'nan' are allowed.",
            )
        else:
            if not isinstance(text, str):
                yield f"'combine' returned {type(text).__name__}.", "Return the number as text."


def _shapes(context: Context) -> Iterator[Finding]:
    stage = context.stage()
    for axes, shape in (("zyx", (50, 600, 700)), ("yx", (1, 1)), ("tczyx", (3, 2, 5, 64, 64)), ("yx", (3, 100_000))):
        info = StackInfo("array", axes, shape, np.dtype("uint16"))
        yield from asked(stage.grid, info, None)
        grid = stage.grid(info, None)
        if len(grid.tile) != len(shape) or len(grid.region) != len(shape) or min(*grid.tile, *grid.region) < 1:
            yield f"It gave {grid} for a stack of {shape}.", "Give one length above zero for each axis."
        elif any(region % tile for region, tile in zip(grid.region, grid.tile, strict=True)):
            yield f"Regions {grid.region} are no multiple of tiles {grid.tile}.", "A region is made of whole tiles."
        elif sum(length > 1 for length in grid.tile) > 3:
            yield f"Tiles {grid.tile} are longer than 1 along more than three axes.", "Three are the most."
