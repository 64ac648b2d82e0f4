"""Numbers as the text that the log holds, the same on every machine.

Quotients, roots and logarithms are formed in 50 decimal digits and rounded once to float64: the mathematics library of
a platform has no say.
"""

from __future__ import annotations

from decimal import Context, Decimal
from fractions import Fraction

_CONTEXT = Context(prec=50)


def decimal(value: Fraction | float) -> str:
    """Return a number as text that reads back to the same number: whole numbers in full, others as float64."""
    if isinstance(value, int) or (isinstance(value, Fraction) and value.denominator == 1):
        return str(int(value))
    try:
        number = float(value)
    except OverflowError:
        number = float("inf") if value > 0 else float("-inf")
    return str(int(number)) if number.is_integer() and abs(number) < 2**53 else repr(number)


def root(value: Fraction) -> float:
    """Return the square root of a number that is not negative."""
    return float(_CONTEXT.sqrt(_decimal(value)))


def decibel(value: Fraction) -> str:
    """Return ``10 log10(value)`` as text; "-inf" for zero."""
    if value == 0:
        return "-inf"
    return decimal(float(_CONTEXT.multiply(Decimal(10), _CONTEXT.log10(_decimal(value)))))


def _decimal(value: Fraction) -> Decimal:
    return _CONTEXT.divide(Decimal(value.numerator), Decimal(value.denominator))
