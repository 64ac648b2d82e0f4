"""Choose the lossless coder: range coding for noise, zstd for data with repeats, by an option of our own."""

from __future__ import annotations

from stackbound import hookimpl
from stackbound.stages import Encode, Options, Stage


class MyStageOptions(Options):
    """What a configuration may say under [encode] beside the name."""

    repeats: bool = False
    """Whether the data repeat themselves, as drawings and labels do."""


class MyStage(Encode):
    """Take the coder that suits the data."""

    name = "my-stage"
    Options = MyStageOptions
    options: MyStageOptions

    @property
    def coder(self) -> str:
        """Name of the coder; every decoder knows "rans" and "zstd"."""
        return "zstd" if self.options.repeats else "rans"


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stages of this plugin."""
    return [MyStage]
