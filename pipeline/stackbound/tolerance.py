"""The tolerance as the user wrote it: an exact decimal number and its unit."""

from __future__ import annotations

import math
import re
from decimal import Decimal
from typing import Annotated, Any, Literal, SupportsFloat, get_args

from pydantic import BaseModel, ConfigDict, PlainSerializer, PlainValidator, WithJsonSchema

__all__ = ["UNITS", "Tolerance", "Unit", "exact_decimal"]

Unit = Literal["stored", "range"]
UNITS: tuple[str, ...] = get_args(Unit)
"""The units of a tolerance: `stored` is stored pixel values, `range` a fraction of each channel's own range."""

_DECIMAL = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)(e[+-]?\d{1,4})?", re.ASCII | re.IGNORECASE)


def exact_decimal(value: object) -> Decimal:
    """Return a tolerance as the very decimal number that was written.

    Parameters
    ----------
    value : int, float, str or decimal.Decimal
        A float means its shortest decimal form, as it is typed and printed: 0.1 is one tenth. NumPy scalars count as
        the Python numbers that they hold.

    Returns
    -------
    decimal.Decimal
        Not negative, finite, without trailing zeros; equal tolerances have equal text.

    Raises
    ------
    ValueError
        Anything else; says why.
    """
    item = getattr(value, "item", None)
    if callable(item) and getattr(value, "ndim", 0) == 0:
        # A float32 scalar means the number that it prints, not the longer float64 of the same value.
        value = str(value) if isinstance(value, SupportsFloat) and not isinstance(item(), bool) else item()
    if isinstance(value, bool):
        raise ValueError(f"A tolerance is a number, not {str(value).lower()}")
    if isinstance(value, Decimal | float) and not math.isfinite(value):
        raise ValueError(f"A tolerance must be finite, not {value}")
    if not isinstance(value, int | float | Decimal | str):
        raise ValueError(f"A tolerance is a number, not {value!r}")
    text = (repr(value) if isinstance(value, float) else str(value)).strip()
    if text.lower().lstrip("+-") in ("nan", "inf", "infinity"):
        raise ValueError(f"A tolerance must be finite, not {text}")
    if not _DECIMAL.fullmatch(text):
        raise ValueError(f"'{text}' is not a number")
    number = _plain(Decimal(text))
    if number < 0:
        raise ValueError(f"A tolerance cannot be negative; {text} is")
    return number


def _plain(number: Decimal) -> Decimal:
    """Return the same number with one form for each value (`Decimal.normalize` would round to 28 digits)."""
    sign, digits, exponent = number.as_tuple()
    if number == 0:
        return Decimal(0)
    kept = "".join(map(str, digits)).lstrip("0").rstrip("0")
    power = int(exponent) + len(digits) - len("".join(map(str, digits)).rstrip("0"))
    if 0 < power <= 20:
        kept, power = kept + "0" * power, 0
    return Decimal((sign, tuple(map(int, kept)), power))


def _validate(value: Any) -> Decimal:
    return exact_decimal(value)


class Tolerance(BaseModel):
    """The largest change allowed to any pixel.

    Attributes
    ----------
    value : decimal.Decimal
        The number exactly as it was written.
    unit : str
        One of `UNITS`.
    """

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)

    value: Annotated[
        Decimal,
        PlainValidator(_validate),
        PlainSerializer(str, return_type=str),
        WithJsonSchema({"type": "number", "minimum": 0, "description": "The largest change allowed to any pixel."}),
    ]
    unit: Unit = "stored"

    def record(self) -> dict[str, str]:
        """Return value and unit as strings."""
        return {"value": str(self.value), "unit": self.unit}

    def __str__(self) -> str:
        return f"{self.value} {self.unit}"
