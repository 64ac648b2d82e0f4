"""The files of a source: hashed once while a run is under way, and unchanged from its start to its end."""

from __future__ import annotations

import hashlib
import threading
from collections.abc import Sequence
from types import TracebackType
from typing import Any, Self

from stackbound.errors import SourceChangedError, SourceError, StackboundError
from stackbound.stages import SourceFile

_PIECE = 1 << 20


class FileHashes:
    """SHA-256 of all files of a source, one after the other in a thread beside the run.

    Files are numbered, not named: names may say more than a log should.
    """

    def __init__(self, files: Sequence[SourceFile]) -> None:
        self._files = files
        self._records: list[dict[str, Any]] = []
        self._error: StackboundError | None = None
        self._stop = threading.Event()
        self._thread = threading.Thread(target=self._work, name="source hashes", daemon=True)

    def __enter__(self) -> Self:
        self._thread.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._stop.set()
        self._thread.join()

    def result(self) -> list[dict[str, Any]]:
        """Wait, and return number, size and hash of each file.

        Raises
        ------
        stackbound.errors.SourceError
            A file cannot be read.
        """
        self._thread.join()
        if self._error is not None:
            raise self._error
        return self._records

    def _work(self) -> None:
        buffer = bytearray(_PIECE)
        for number, file in enumerate(self._files):
            digest, size = hashlib.sha256(), 0
            try:
                with file.path.open("rb", buffering=0) as opened:
                    while count := opened.readinto(buffer):
                        if self._stop.is_set():
                            return
                        digest.update(memoryview(buffer)[:count])
                        size += count
            except OSError as error:
                self._error = SourceError(f"A file cannot be read ({error.strerror}).", where=str(file.path))
                return
            self._records.append({"number": number, "bytes": size, "sha256": digest.hexdigest()})


def check_unchanged(files: Sequence[SourceFile]) -> None:
    """Compare size and time of every file with what they were when the source was opened.

    Raises
    ------
    stackbound.errors.SourceChangedError
        A file changed or is gone.
    """
    for file in files:
        try:
            now = file.path.stat()
        except OSError as error:
            raise SourceChangedError("A file of the source is gone.", where=str(file.path)) from error
        if (now.st_size, now.st_mtime_ns) != (file.size, file.mtime_ns):
            raise SourceChangedError(
                "A file of the source changed while it was read.",
                where=str(file.path),
                remedy="Run again when nothing writes to it.",
            )
