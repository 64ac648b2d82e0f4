"""One run per target: a lock file that a dead process cannot hold."""

from __future__ import annotations

import contextlib
import errno
import json
import os
import socket
from pathlib import Path
from types import TracebackType
from typing import IO, Self

import psutil

from stackbound.errors import TargetError

# The lock is taken by another process (POSIX says EAGAIN or EACCES, Windows EACCES or EDEADLK).
_TAKEN = {errno.EAGAIN, errno.EACCES, errno.EDEADLK}


class Lock:
    """A lock file, held from `acquire` to `release`.

    The operating system's own file lock decides where the file system has one: it ends with its process, however that
    ends. Elsewhere the process number and start time inside the file decide.

    Parameters
    ----------
    path : Path
        The lock file; removed on release.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self._file: IO[str] | None = None

    def acquire(self) -> None:
        """Take the lock.

        Raises
        ------
        stackbound.errors.TargetError
            Another run holds it, or the folder cannot be written.
        """
        while True:
            try:
                file = self.path.open("a+", encoding="utf-8", newline="\n")
            except OSError as error:
                raise TargetError(
                    f"The folder cannot be written ({error.strerror}).", where=str(self.path.parent)
                ) from error
            try:
                self._take(file)
            except BaseException:
                file.close()
                raise
            # A run that ended in this moment may have removed the file that was just locked.
            if self.path.exists() and os.path.samestat(os.fstat(file.fileno()), self.path.stat()):
                break
            file.close()
        self._file = file
        file.seek(0)
        file.truncate()
        me = psutil.Process()
        json.dump({"process": me.pid, "started": str(me.create_time()), "host": socket.gethostname()}, file)
        file.flush()

    def _take(self, file: IO[str]) -> None:
        try:
            _lock_file(file)
        except OSError as error:
            file.seek(0)
            holder = _holder(file.read())
            if error.errno in _TAKEN or (holder and _alive(holder)):
                raise TargetError(
                    f"Another run ({_name(holder)}) is writing this store.",
                    where=str(self.path),
                    remedy="Wait for it or stop it.",
                ) from None

    def release(self) -> None:
        """Give the lock back and remove its file."""
        if self._file is None:
            return
        if os.name == "posix":
            self.path.unlink(missing_ok=True)
            self._file.close()
        else:
            self._file.close()
            with contextlib.suppress(OSError):
                self.path.unlink(missing_ok=True)
        self._file = None

    def __enter__(self) -> Self:
        self.acquire()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.release()


def _lock_file(file: IO[str]) -> None:
    try:
        import fcntl
    except ImportError:
        import msvcrt

        # A byte far behind the text, so that other runs can still read who holds the lock.
        file.seek(1 << 20)
        msvcrt.locking(file.fileno(), msvcrt.LK_NBLCK, 1)  # type: ignore[attr-defined, unused-ignore]
    else:
        fcntl.flock(file.fileno(), fcntl.LOCK_EX | fcntl.LOCK_NB)


def _holder(text: str) -> dict[str, object]:
    try:
        holder = json.loads(text)
    except ValueError:
        return {}
    return holder if isinstance(holder, dict) else {}


def _alive(holder: dict[str, object]) -> bool:
    if holder.get("host") != socket.gethostname():
        return True  # nothing can be known of a process on another machine
    try:
        return str(psutil.Process(int(str(holder.get("process")))).create_time()) == holder.get("started")
    except (psutil.Error, ValueError):
        return False


def _name(holder: dict[str, object]) -> str:
    return f"process {holder['process']} on {holder.get('host')}" if "process" in holder else "of another process"
