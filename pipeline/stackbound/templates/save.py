"""Write a small format of our own: one line of JSON (shape and dtype), then the pixels, little-endian."""

from __future__ import annotations

import json
from pathlib import Path

from stackbound import hookimpl
from stackbound.errors import UsageError
from stackbound.stages import OpenSource, Options, Save, StackInfo, Stage


class MyStageOptions(Options):
    """No options."""


class MyStage(Save):
    """Write files of the format my-stage."""

    name = "my-stage"
    Options = MyStageOptions
    suffixes = (".my-stage",)

    def check(self, info: StackInfo) -> None:
        """Refuse, before anything is written, what the format cannot hold."""
        if info.dtype.kind not in "iuf":
            raise UsageError(f"The format my-stage cannot hold pixels of type {info.dtype}.")

    def write(self, target: Path, source: OpenSource) -> None:
        """Write all pixels plane by plane, so that a stack larger than the memory can be written."""
        info = source.info
        header = {"my-stage": 1, "shape": list(info.shape), "dtype": info.dtype.name}
        with target.open("wb") as file:
            file.write(json.dumps(header).encode("utf-8") + b"\n")
            for number in range(info.shape[0]):
                start = (number, *(0 for _ in info.shape[1:]))
                pixels = source.read(start, (number + 1, *info.shape[1:]))
                file.write(pixels.astype(pixels.dtype.newbyteorder("<")).tobytes())


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stages of this plugin."""
    return [MyStage]
