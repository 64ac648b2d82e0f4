"""Encode by byte shuffle and zstd."""

from __future__ import annotations

from pydantic import Field
from stackbound import hookimpl
from stackbound.stages import Encode, Options, Stage


class ZstdOptions(Options):
    """How hard to try."""

    level: int = Field(default=9, ge=1, le=22)
    """zstd's level: higher is smaller and slower."""


class Zstd(Encode):
    """Indices and residuals through zstd (RFC 8878): larger than range coding on noise, quick on data with repeats."""

    name = "zstd"
    Options = ZstdOptions
    options: ZstdOptions

    @property
    def coder(self) -> str:
        """Name of the lossless coder."""
        return "zstd"

    @property
    def effort(self) -> int:
        """The level."""
        return self.options.level


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stage of this file."""
    return [Zstd]
