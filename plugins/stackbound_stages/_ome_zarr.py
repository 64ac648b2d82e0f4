"""What OME-Zarr metadata (0.4 and 0.5) say of an image: full-resolution array, axes, scale, units, channel names."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from ._units import unit_name

_BY_TYPE = {"time": "t", "channel": "c"}


@dataclass(frozen=True)
class OmeZarrImage:
    """One image: path of its largest array, one letter per stored axis ("?" unknown), and distances by axis."""

    path: str
    letters: str
    scale: dict[str, float] = field(default_factory=dict)
    units: dict[str, str] = field(default_factory=dict)
    channel_names: tuple[str, ...] = ()
    levels: int = 1


def ome_attributes(attributes: Mapping[str, Any]) -> Mapping[str, Any]:
    """Return the OME part of a group's attributes: 0.5 keeps it under a key of its own, 0.4 and older do not."""
    inner = attributes.get("ome")
    return inner if isinstance(inner, Mapping) else attributes


def axis_letters(axes: Sequence[Any]) -> str:
    """Return one letter per axis from its name, or from its type where the name is no letter of ours."""
    letters = []
    for axis in axes:
        # Version 0.3 wrote plain strings; 0.4 and later write objects.
        name = str(axis.get("name", "") if isinstance(axis, Mapping) else axis).lower()
        kind = axis.get("type") if isinstance(axis, Mapping) else None
        letters.append(name if name in tuple("tczyx") else _BY_TYPE.get(str(kind), "?"))
    # Space axes with other names are z, y, x by their order.
    unknown = [place for place, letter in enumerate(letters) if letter == "?"]
    if len(unknown) <= 3 and not {"z", "y", "x"} & set(letters):
        for place, letter in zip(unknown, "zyx"[3 - len(unknown) :], strict=True):
            letters[place] = letter
    return "".join(letters)


def read_image(attributes: Mapping[str, Any]) -> OmeZarrImage | None:
    """Return the image that a group's attributes describe, or None.

    Raises
    ------
    ValueError
        The description is broken.
    """
    said = ome_attributes(attributes)
    scales = said.get("multiscales")
    if not scales:
        return None
    try:
        first = scales[0]
        dataset = first["datasets"][0]
        path = str(dataset["path"])
        axes = first.get("axes") or ["t", "c", "z", "y", "x"]  # version 0.2 and older: always these five
        letters = axis_letters(axes)
        factors = [1.0] * len(axes)
        for step in [*dataset.get("coordinateTransformations", ()), *first.get("coordinateTransformations", ())]:
            if step.get("type") == "scale":
                factors = [old * float(new) for old, new in zip(factors, step["scale"], strict=True)]
    except (KeyError, IndexError, TypeError, ValueError, AttributeError) as error:
        raise ValueError(f"the multiscales metadata are broken ({type(error).__name__}: {error})") from error
    units: dict[str, str] = {}
    scale: dict[str, float] = {}
    for letter, axis, factor in zip(letters, axes, factors, strict=True):
        unit = unit_name(axis.get("unit")) if isinstance(axis, Mapping) else None
        if letter in ("c", "?"):
            continue
        if unit:
            units[letter] = unit
        # A factor of 1 without a unit is what writers put where they know nothing.
        if 0 < factor < float("inf") and (unit or factor != 1):
            scale[letter] = factor
    return OmeZarrImage(path, letters, scale, units, _channel_names(said), len(first["datasets"]))


def _channel_names(said: Mapping[str, Any]) -> tuple[str, ...]:
    omero = said.get("omero")
    channels = omero.get("channels", []) if isinstance(omero, Mapping) else []
    names = [str(channel.get("label", "")) if isinstance(channel, Mapping) else "" for channel in channels]
    return tuple(names) if any(names) else ()


def write_image(
    axes: str, scale: Sequence[float | None], units: Sequence[str | None], channel_names: Sequence[str], path: str
) -> dict[str, Any]:
    """Return the attributes of an OME-Zarr 0.5 image of one level."""
    kinds = {"t": "time", "c": "channel"}
    described = []
    for axis, unit in zip(axes, units or (None,) * len(axes), strict=True):
        entry = {"name": axis, "type": kinds.get(axis, "space")}
        described.append(entry | ({"unit": unit} if unit else {}))
    factors = [1.0 if factor is None else float(factor) for factor in scale or (None,) * len(axes)]
    dataset = {"path": path, "coordinateTransformations": [{"type": "scale", "scale": factors}]}
    image: dict[str, Any] = {
        "version": "0.5",
        "multiscales": [{"name": "stack", "type": "none", "axes": described, "datasets": [dataset]}],
    }
    if channel_names:
        colours = ["00FF00", "FF00FF", "00FFFF", "FFFF00", "FF0000", "0000FF"]
        image["omero"] = {
            "channels": [
                {"label": name, "color": colours[number % len(colours)], "active": True}
                for number, name in enumerate(channel_names)
            ]
        }
    return {"ome": image}
