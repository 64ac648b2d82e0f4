"""How the axes of stored pixels become those of a stack: t, c, z, y, x, always in this order, colour samples as c."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import prod
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackbound.errors import SourceError, UsageError
from stackbound.stages import Index

ORDER = "tczyx"
"""The axes of a stack in the order of OME."""

SAMPLES = "s"
"""A stored axis of colour samples; in the stack it is (or joins) c."""

DROPPED = "-"
"""A stored axis of length 1 that the stack leaves out."""

Fill = Callable[[Index, Index, NDArray[Any]], None]
"""``fill(start, stop, out)`` puts the pixels of a box of the stored array into `out`, of any strides."""


def check_axes(axes: str) -> str:
    """Return the user's word on axes in lower case.

    Raises
    ------
    stackbound.errors.UsageError
        An unknown or repeated letter, more than five or fewer than two, or no y and x.
    """
    letters = axes.strip().lower()
    unknown = [letter for letter in letters if letter not in ORDER]
    if unknown:
        problem = f"axes {axes!r} has {unknown[0]!r}, which is none of t, c, z, y, x"
    elif len(set(letters)) < len(letters):
        problem = f"axes {axes!r} names an axis twice"
    elif not {"y", "x"} <= set(letters):
        problem = f"axes {axes!r} needs y and x"
    else:
        return letters
    raise UsageError(
        problem,
        where="--axes",
        remedy="Give one letter per stored axis, slowest first: t time, c channel or colour sample, z depth, y row, "
        "x column; for example --axes zyx.",
    )


def apply_axes(axes: str, shape: Sequence[int], where: str | None = None) -> str:
    """Return one letter per stored axis from the user's word, which may leave out stored axes of length 1.

    Raises
    ------
    stackbound.errors.UsageError
        The number of letters fits neither all stored axes nor those longer than 1.
    """
    letters = check_axes(axes)
    if len(letters) == len(shape):
        return letters
    if len(letters) == sum(length > 1 for length in shape):
        longer = iter(letters)
        return "".join(next(longer) if length > 1 else DROPPED for length in shape)
    raise UsageError(
        f"--axes {letters} names {len(letters)} axes, but the source stores {len(shape)} ({describe_shape(shape)})",
        where=where,
        remedy="Name every stored axis, slowest first; axes of length 1 may be left out.",
    )


def guess_axes(shape: Sequence[int], where: str | None = None) -> tuple[str, tuple[str, ...]]:
    """Return one letter per axis of an array that does not name its axes, and what to tell the user.

    A last axis of 3 or 4 behind two of at least 16 is colour samples; else the last axes are (t, c, z,) y, x.

    Raises
    ------
    stackbound.errors.SourceError
        Fewer than two or more than five axes.
    """
    count = len(shape)
    if not 2 <= count <= 5:
        raise SourceError(
            f"the array has {count} axes ({describe_shape(shape)}); a stack has two to five",
            where=where,
            remedy="Reshape it, or save its parts one by one.",
        )
    colour = count > 2 and shape[-1] in (3, 4) and min(shape[-3:-1]) >= 16
    planes = {0: "", 1: "z", 2: "tz", 3: "tcz"}[count - 2 - colour]
    letters = f"{planes}yx{'c' if colour else ''}"
    if letters == "yx":
        return letters, ()
    return letters, (f"The axes have no names: taken as {', '.join(letters)} (--axes decides).",)


def describe_shape(shape: Sequence[int]) -> str:
    """Return a shape in words: ``10 x 512 x 512``."""
    return " x ".join(str(length) for length in shape) or "no axes"


@dataclass(frozen=True)
class Layout:
    """Stored axes, one letter of "tczyxs-" and one length each, and the way from a stored box to one of the stack.

    Where both c and s are stored, the samples of a channel follow one another along c.
    """

    stored: str
    shape: Index

    def __post_init__(self) -> None:
        """Refuse what is not a stack."""
        count = len(self.axes)
        if 0 in self.shape:
            raise SourceError(f"the stack has no pixels ({describe_shape(self.shape)})")
        if not 2 <= count <= 5 or len(self.stored) != len(self.shape):
            raise SourceError(f"the stack has {count} axes ({describe_shape(self.shape)}); two to five can be stored")

    @property
    def axes(self) -> str:
        """Axes of the stack."""
        present = set(self.stored.replace(SAMPLES, "c"))
        return "".join(letter for letter in ORDER if letter in present)

    @property
    def lengths(self) -> Index:
        """Shape of the stack."""
        return tuple(self._length(letter) for letter in self.axes)

    def _length(self, letter: str) -> int:
        among = ("c", SAMPLES) if letter == "c" else (letter,)
        return prod(length for name, length in zip(self.stored, self.shape, strict=True) if name in among)

    def read(self, start: Index, stop: Index, dtype: np.dtype[Any], fill: Fill) -> NDArray[Any]:
        """Return a box of the stack in C order, of which `fill` reads the stored one."""
        box = dict(zip(self.axes, zip(start, stop, strict=True), strict=True))
        split = "c" in self.stored and SAMPLES in self.stored
        if split:
            first, last = box["c"]
            samples = self.shape[self.stored.index(SAMPLES)]
            box["c"] = first // samples, -(-last // samples)
            box[SAMPLES] = 0, samples
        elif SAMPLES in self.stored:
            box[SAMPLES] = box.pop("c")
        letters = [letter for letter in "tcszyx" if letter in box]
        out = np.empty([box[letter][1] - box[letter][0] for letter in letters], dtype)
        kept = [letter for letter in self.stored if letter != DROPPED]
        view = out.transpose([letters.index(letter) for letter in kept])
        view = view[tuple(None if letter == DROPPED else slice(None) for letter in self.stored)]
        bounds = [box.get(letter, (0, 1)) for letter in self.stored]
        fill(tuple(low for low, _ in bounds), tuple(high for _, high in bounds), view)
        if not split:
            return out
        place = letters.index("c")
        merged = out.reshape((*out.shape[:place], -1, *out.shape[place + 2 :]))
        skip = first % samples
        return np.ascontiguousarray(merged[(slice(None),) * place + (slice(skip, skip + last - first),)])

    def stored_plane_order(self) -> str:
        """Return the stored axes without samples and dropped ones, for savers that keep the order."""
        return "".join(letter for letter in self.stored if letter not in (SAMPLES, DROPPED))
