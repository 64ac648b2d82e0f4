"""Units of length and time: what files write, the names that OME-Zarr wants (UDUNITS), and the signs of OME-XML."""

from __future__ import annotations

_LENGTHS = {
    "micrometer": ("µm", 1.0),
    "nanometer": ("nm", 1e-3),
    "angstrom": ("Å", 1e-4),
    "picometer": ("pm", 1e-6),
    "millimeter": ("mm", 1e3),
    "centimeter": ("cm", 1e4),
    "meter": ("m", 1e6),
    "inch": ("in", 25400.0),
}
_TIMES = {
    "second": "s",
    "millisecond": "ms",
    "microsecond": "µs",
    "minute": "min",
    "hour": "h",
    "day": "d",
}
_OTHER_NAMES = {
    "μm": "micrometer",  # the Greek letter, not the micro sign
    "um": "micrometer",
    "micron": "micrometer",
    "microns": "micrometer",
    "micrometre": "micrometer",
    "inches": "inch",
    "sec": "second",
    "msec": "millisecond",
    "us": "microsecond",
    "hr": "hour",
}
_NAMES = (
    {name: name for name in (*_LENGTHS, *_TIMES)}
    | {sign: name for name, (sign, _) in _LENGTHS.items()}
    | {sign: name for name, sign in _TIMES.items()}
    | _OTHER_NAMES
)


def unit_name(text: str | None) -> str | None:
    """Return the UDUNITS name of a unit, or None where it is no unit that we know."""
    if not text:
        return None
    clean = text.replace("\\u00B5", "µ").replace("\\u00b5", "µ").strip().strip("\0")
    return _NAMES.get(clean) or _NAMES.get(clean.lower())


def unit_sign(name: str | None) -> str | None:
    """Return the sign that OME-XML writes for a UDUNITS name."""
    if name in _LENGTHS:
        return _LENGTHS[name][0]
    return _TIMES.get(name or "")


def in_micrometers(value: float, name: str | None) -> float | None:
    """Return a length in micrometers, or None where the unit is unknown."""
    return value * _LENGTHS[name][1] if name in _LENGTHS else None


def is_length(name: str | None) -> bool:
    """Return whether a UDUNITS name is one of a length."""
    return name in _LENGTHS
