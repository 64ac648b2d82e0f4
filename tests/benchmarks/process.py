"""Run a command and measure what it used. POSIX only: the kernel keeps a child's figures for `os.wait4`."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

STACKBOUND = str(Path(sys.executable).with_name("stackbound"))
"""The command as users type it, of this Python environment."""


class FailedError(Exception):
    """A measured command did not end well; the text is what it said."""


@dataclass(frozen=True)
class Usage:
    """What one command used.

    Attributes
    ----------
    wall, cpu : float
        Seconds; `cpu` over all threads, user and system.
    peak : int
        Largest resident size in bytes, of the whole process.
    output : str
        What it printed.
    """

    wall: float
    cpu: float
    peak: int
    output: str


def run(command: Sequence[str], environment: Mapping[str, str] | None = None) -> Usage:
    """Run `command` to its end.

    Raises
    ------
    FailedError
        It ended with another exit code than 0.
    """
    with tempfile.TemporaryFile() as output, tempfile.TemporaryFile() as errors:
        began = time.perf_counter()
        child = subprocess.Popen(command, stdout=output, stderr=errors, env={**os.environ, **(environment or {})})
        _, status, used = os.wait4(child.pid, 0)
        wall = time.perf_counter() - began
        child.returncode = os.waitstatus_to_exitcode(status)
        output.seek(0)
        errors.seek(0)
        if child.returncode:
            raise FailedError(f"{' '.join(command)}: exit code {child.returncode}: {errors.read().decode()}")
        kilobyte = 1 if sys.platform == "darwin" else 1024
        return Usage(wall, used.ru_utime + used.ru_stime, used.ru_maxrss * kilobyte, output.read().decode())
