"""Encode by interleaved static range coding in spread classes."""

from __future__ import annotations

from stackbound import hookimpl
from stackbound.stages import Encode, Options, Stage


class RansOptions(Options):
    """No options."""


class Rans(Encode):
    """Range coding with asymmetric numeral systems (Duda, arXiv:1311.2540): tables per tile and spread class."""

    name = "rans"
    Options = RansOptions

    @property
    def coder(self) -> str:
        """Name of the lossless coder."""
        return "rans"


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [Rans]
