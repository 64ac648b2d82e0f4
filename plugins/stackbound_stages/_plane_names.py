"""What the names of single-plane files say of their places along t, c and z."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

from stackbound.errors import SourceError

# Marks that acquisition programs put before a number: z or slice, t or time, c, ch, channel or w (wavelength).
_MARK = re.compile(
    r"(?<![a-z0-9])(?:(?P<z>z|slice)|(?P<t>t|time|frame)|(?P<c>c|ch|channel|w|wave))[-=_]?(?P<number>\d+)(?![a-z0-9])",
    re.IGNORECASE,
)

# High-content screens append a random identifier to each name.
_IDENTIFIER = re.compile(r"[0-9a-f]{8}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{12}", re.IGNORECASE)

_MOST_CHANNEL_DIGITS = 2
"""A longer number behind a channel's mark counts planes ("signal_ch000003")."""


@dataclass(frozen=True)
class Arrangement:
    """Axes of a set of planes beside y and x, their lengths, and the planes in that order (numbers into the names)."""

    axes: str
    shape: tuple[int, ...]
    order: tuple[int, ...]
    note: str


def arrange(names: Sequence[str], wanted: str | None = None) -> Arrangement:
    """Return the arrangement of planes whose names are in natural order.

    Where every name carries the same marks and no other difference, the marks decide; else the planes are one axis.

    Parameters
    ----------
    names : sequence of str
        File names in natural order.
    wanted : str, optional
        The axes that the user asked for, without those of one plane.

    Raises
    ------
    stackbound.errors.SourceError
        The names clearly count along several axes, but planes are missing; or they do not carry the wanted axes.
    """
    if wanted is not None and len(wanted) == 1:
        return _one_axis(names, wanted, "as --axes says")
    marked = _marked(names)
    if marked is None:
        if wanted is not None:
            raise SourceError(
                f"--axes asks for the axes {', '.join(wanted)} across the files, but their names do not carry them",
                remedy="Names like a_t1_c2_z03.tif do; or give one axis for the files, such as --axes zyx.",
            )
        return _one_axis(names, "z", "--axes decides")
    axes = "".join(axis for axis in "tcz" if axis in marked)
    if wanted is not None and set(wanted) != set(axes):
        raise SourceError(
            f"--axes asks for {', '.join(wanted)} across the files, but their names carry {', '.join(axes)}"
        )
    values = {axis: sorted(set(marked[axis])) for axis in axes}
    places: dict[tuple[int, ...], int] = {}
    for number in range(len(names)):
        place = tuple(values[axis].index(marked[axis][number]) for axis in axes)
        if place in places:
            raise SourceError(
                f"two files stand for the same plane ({_place(axes, values, place)})", remedy="Remove one."
            )
        places[place] = number
    shape = tuple(len(values[axis]) for axis in axes)
    total = 1
    for length in shape:
        total *= length
    if total != len(names):
        missing = next(place for place in _all_places(shape) if place not in places)
        raise SourceError(
            f"{total - len(names)} of {total} planes that the file names count are missing, first the one of "
            f"{_place(axes, values, missing)}",
            remedy="Add them, or say --axes zyx to take the files as they come in natural order.",
        )
    listed = " and ".join(f"{axis} ({length})" for axis, length in zip(axes, shape, strict=True))
    note = f"The file names are taken to count {listed}; --axes decides.{_gaps(axes, values)}"
    return Arrangement(axes, shape, tuple(places[place] for place in _all_places(shape)), note)


def _one_axis(names: Sequence[str], axis: str, why: str) -> Arrangement:
    note = f"{len(names)} files in natural order of their names are taken as {axis} ({why})."
    return Arrangement(axis, (len(names),), tuple(range(len(names))), note)


def _marked(names: Sequence[str]) -> dict[str, list[int]] | None:
    """Return the numbers per axis, or None where the names are not clear; axes with one number only are left out."""
    found: dict[str, list[int]] = {}
    rests = set()
    for name in names:
        clean = _IDENTIFIER.sub("", name)
        axes = []
        for match in _MARK.finditer(clean):
            axis = next(letter for letter in "ztc" if match[letter])
            if axis == "c" and len(match["number"]) > _MOST_CHANNEL_DIGITS:
                return None
            axes.append(axis)
            found.setdefault(axis, []).append(int(match["number"]))
        if len(set(axes)) < len(axes):
            return None
        rests.add(_MARK.sub("#", clean))
    if len(rests) > 1 or any(len(numbers) != len(names) for numbers in found.values()):
        return None
    varying = {axis: numbers for axis, numbers in found.items() if len(set(numbers)) > 1}
    return varying or None


def _all_places(shape: tuple[int, ...]) -> list[tuple[int, ...]]:
    places: list[tuple[int, ...]] = [()]
    for length in shape:
        places = [(*place, step) for place in places for step in range(length)]
    return places


def _place(axes: str, values: dict[str, list[int]], place: tuple[int, ...]) -> str:
    return ", ".join(f"{axis} {values[axis][step]}" for axis, step in zip(axes, place, strict=True))


def _gaps(axes: str, values: dict[str, list[int]]) -> str:
    broken = [axis for axis in axes if values[axis][-1] - values[axis][0] + 1 != len(values[axis])]
    return f" The numbers along {', '.join(broken)} are not consecutive." if broken else ""
