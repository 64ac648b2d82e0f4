"""Measure coders side by side on one stack: sizes, errors and CPU times, in turn so that all see the same machine."""

from __future__ import annotations

import os
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass

import numpy as np
from coders import Coder, Encoded, NotPossibleError
from noise import measured_noise, tolerance_for
from stacks import Stack
from threadpoolctl import threadpool_limits


@dataclass
class Measurement:
    """One coder on one stack at one tolerance."""

    stack: str
    shape: tuple[int, ...]
    dtype: str
    noise: float
    multiple: float | None
    tolerance: float
    coder: str
    bits: float = float("nan")
    """Bits per pixel."""
    encode: float = float("nan")
    """Million pixels per second of CPU time on one core, planning included; the best repetition."""
    decode: float = float("nan")
    planning: float = float("nan")
    """Share of the encoding time that goes into choosing parameters."""
    largest_error: float = float("nan")
    floor: float | None = None
    """Bits per pixel below which no coder can go on average, where the noise is known exactly."""
    note: str = ""


@contextmanager
def one_core() -> Iterator[int | None]:
    """Keep this process on one core and BLAS on one thread; yields the core, or None where the system cannot pin."""
    with threadpool_limits(1):
        if not hasattr(os, "sched_setaffinity"):
            yield None
            return
        before = os.sched_getaffinity(0)
        core = max(before)
        os.sched_setaffinity(0, {core})
        try:
            yield core
        finally:
            os.sched_setaffinity(0, before)


def compare(
    stack: Stack,
    coders: Sequence[Coder],
    tolerances: Sequence[tuple[float | None, float]],
    *,
    noise: float,
    repeat: int,
) -> list[Measurement]:
    """Measure every coder at every tolerance, `repeat` times in turn."""
    rows: list[Measurement] = []
    about = (stack.name, stack.pixels.shape, str(stack.pixels.dtype), noise)
    for multiple, tolerance in tolerances:
        floor = stack.floor(int(tolerance)) if stack.floor else None
        here = {c.name: Measurement(*about, multiple, tolerance, c.name, floor=floor) for c in coders}
        for repetition in range(repeat):
            for coder in coders:
                row = here[coder.name]
                if not row.note:
                    _measure_once(stack, coder, tolerance, row, check=repetition == 0)
        rows.extend(here.values())
    return rows


def _measure_once(stack: Stack, coder: Coder, tolerance: float, row: Measurement, *, check: bool) -> None:
    try:
        began = time.process_time()
        encoded = coder.encode(stack, tolerance)
        encoding = time.process_time() - began
        began = time.process_time()
        decoded = coder.decode(stack, encoded)
        decoding = time.process_time() - began
    except NotPossibleError as error:
        row.note = str(error)
        return
    _note_best(row, stack.pixels.size, encoded, encoding, decoding)
    if check:
        row.largest_error = largest_error(stack, decoded)
        if not row.largest_error <= tolerance:
            row.note = f"BROKEN: an error of {row.largest_error} at tolerance {tolerance}"


def _note_best(row: Measurement, pixels: int, encoded: Encoded, encoding: float, decoding: float) -> None:
    row.bits = 8 * encoded.size / pixels
    if not pixels / 1e6 / encoding <= row.encode:  # the first time `row.encode` is NaN
        row.encode = pixels / 1e6 / encoding
        row.planning = encoded.planning / encoding
    row.decode = np.nanmax([row.decode, pixels / 1e6 / decoding])


def largest_error(stack: Stack, decoded: np.ndarray) -> float:
    """Return the largest absolute difference, exact for integers; plane by plane, so that memory stays small."""
    wide = np.float64 if stack.pixels.dtype.kind == "f" else np.int64
    worst = 0.0
    shape = (-1, *stack.pixels.shape[-2:])
    for original, copy in zip(stack.pixels.reshape(shape), decoded.reshape(shape), strict=True):
        same = (original == copy) | ((original != original) & (copy != copy))
        difference = np.abs(original.astype(wide) - copy.astype(wide))
        worst = max(worst, float(np.where(same, 0, difference).max()))
    return worst


def noise_tolerances(
    stack: Stack, multiples: Sequence[float], noise: float | None = None
) -> tuple[float, list[tuple[float | None, float]]]:
    """Return the noise of a stack and the tolerance for each multiple of it."""
    sigma = measured_noise(stack.pixels) if noise is None else noise
    return sigma, [(m, tolerance_for(sigma, m, stack.pixels.dtype)) for m in multiples]
