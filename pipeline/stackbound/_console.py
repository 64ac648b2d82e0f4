"""What the command line prints besides its results: messages, progress, errors; all on standard error."""

from __future__ import annotations

import os
import sys
import traceback
from typing import TYPE_CHECKING

import click

from .errors import StackboundError

if TYPE_CHECKING:
    from rich.progress import Progress as RichProgress
    from rich.progress import TaskID

__all__ = ["TRACEBACK", "ConsoleProgress", "announce_compilation", "exit_code_of", "message"]

TRACEBACK = "STACKBOUND_TRACEBACK"
"""Environment variable: any value prints the traceback of an error beside its message."""


def message(text: str) -> None:
    """Print one message on standard error."""
    click.echo(text, err=True)


def exit_code_of(error: BaseException) -> int:
    """Print what `error` means for the user; return the exit code that goes with it."""
    if os.environ.get(TRACEBACK):
        traceback.print_exception(error)
    if isinstance(error, click.exceptions.Exit):
        return error.exit_code
    if isinstance(error, click.UsageError):
        return _usage(error)
    if isinstance(error, click.Abort | KeyboardInterrupt):
        message("Interrupted.")
        return 130
    if isinstance(error, StackboundError):
        _error(str(error))
        return error.exit_code
    if isinstance(error, MemoryError):
        _error("The machine has no more memory for this. Use a smaller --memory or fewer --workers.")
        return 1
    if isinstance(error, OSError) and error.strerror:
        # Full disks, missing rights, vanished shares: the machine's trouble, which the user can mend.
        _error(f"{error.filename}: {error.strerror}." if error.filename else f"{error.strerror}.")
        return 2
    kind = type(error).__name__
    hint = "" if os.environ.get(TRACEBACK) else f" Run it again with {TRACEBACK}=1 in the environment to see where."
    _error(f"This is a fault of stackbound itself, not of your data ({kind}: {error}). Please report it.{hint}")
    return 1


def _usage(error: click.UsageError) -> int:
    command = error.ctx.command_path if error.ctx is not None else "stackbound"
    _error(f"{error.format_message()} '{command} --help' shows how to use it.")
    return 2


def _error(text: str) -> None:
    colour = None if "NO_COLOR" in os.environ else "red"
    click.secho("Error: ", err=True, nl=False, fg=colour)
    message(text)


def announce_compilation() -> None:
    """Say so when numba compiles a kernel in this process, which happens at the first use after an installation."""
    from numba.core import event

    class Announcer(event.Listener):
        told = False

        def on_start(self, _: object) -> None:
            if not self.told:
                self.told = True
                message("Compiling for this processor. This happens once after an installation and takes a while.")

        def on_end(self, _: object) -> None:
            pass

    # numba raises this event only where its cache holds nothing, so the message is true whenever it comes.
    event.register("numba:compile", Announcer())  # type: ignore[no-untyped-call]


class ConsoleProgress:
    """A progress bar on standard error where that is a terminal; silent where it is not."""

    def __init__(self) -> None:
        self._bar: RichProgress | None = None
        self._task: TaskID | None = None

    def start(self, what: str, total: int) -> None:
        """Begin one piece of work of `total` steps."""
        if not sys.stderr.isatty():
            return
        from rich.console import Console
        from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn, TimeRemainingColumn

        self.end()
        columns = (TextColumn("{task.description}"), BarColumn(), TaskProgressColumn(), TimeRemainingColumn())
        self._bar = Progress(*columns, console=Console(stderr=True), transient=True)
        self._task = self._bar.add_task(what, total=total)
        self._bar.start()

    def advance(self, n: int) -> None:
        """Count `n` steps as done."""
        if self._bar is not None and self._task is not None:
            self._bar.advance(self._task, n)

    def end(self) -> None:
        """Take the bar away."""
        if self._bar is not None:
            self._bar.stop()
            self._bar = self._task = None
