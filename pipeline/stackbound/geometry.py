"""Boxes of a regular grid over a stack: regions in the stack, tiles in a region, in C order."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator
from dataclasses import dataclass

Index = tuple[int, ...]


@dataclass(frozen=True)
class Box:
    """Half-open bounds per axis, in stack coordinates."""

    start: Index
    stop: Index

    @property
    def shape(self) -> Index:
        """Length per axis."""
        return tuple(stop - start for start, stop in zip(self.start, self.stop, strict=True))

    @property
    def pixels(self) -> int:
        """Number of pixels inside."""
        return math.prod(self.shape)

    def slices(self, origin: Index | None = None) -> tuple[slice, ...]:
        """Return the index that cuts this box out of the stack, or out of an array whose first pixel is at `origin`."""
        origin = origin or (0,) * len(self.start)
        return tuple(slice(a - o, b - o) for a, b, o in zip(self.start, self.stop, origin, strict=True))

    def __str__(self) -> str:
        return "[" + ", ".join(f"{a}:{b}" for a, b in zip(self.start, self.stop, strict=True)) + "]"


def counts(shape: Index, step: Index) -> Index:
    """Return how many boxes of `step` cover `shape`, per axis."""
    return tuple(-(-length // size) for length, size in zip(shape, step, strict=True))


def box_at(shape: Index, step: Index, position: Index) -> Box:
    """Return the box at a grid position, cut off at the end of the stack."""
    start = tuple(p * s for p, s in zip(position, step, strict=True))
    stop = tuple(min(a + s, length) for a, s, length in zip(start, step, shape, strict=True))
    return Box(start, stop)


def positions(shape: Index, step: Index) -> Iterator[Index]:
    """Yield the grid positions of all boxes, the last axis fastest."""
    return itertools.product(*(range(n) for n in counts(shape, step)))


def whole_boxes(start: Index, outer: Index, inner: Index) -> list[Box]:
    """Return the boxes of shape `inner` that fill one of shape `outer` at `start`, none cut off, in C order."""
    corners = (
        tuple(a + p * n for a, p, n in zip(start, position, inner, strict=True)) for position in positions(outer, inner)
    )
    return [Box(corner, tuple(a + n for a, n in zip(corner, inner, strict=True))) for corner in corners]


def position_of(index: int, shape: Index, step: Index) -> Index:
    """Return the grid position of the box with a C-order index."""
    position = []
    for n in reversed(counts(shape, step)):
        index, p = divmod(index, n)
        position.append(p)
    return tuple(reversed(position))
