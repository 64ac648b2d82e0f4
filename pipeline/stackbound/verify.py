"""Check a store: log, files, pixels, and, with the source at hand, the errors again. Writes nothing into the store.

Hashes are checked before anything is interpreted, everything that is wrong is listed, and the check goes on to the end.
"""

from __future__ import annotations

import contextlib
import datetime
import json
import os
import re
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING

from stackbound import environment
from stackbound.budget import Budget, budget
from stackbound.errors import SourceError, TargetError, UsageError
from stackbound.opened import require_store
from stackbound.plugins import registry
from stackbound.reports import Problem, Progress, Quiet, VerifyReport
from stackbound.verifyfiles import Findings, check_files, check_log, check_metadata
from stackbound.verifypixels import PixelCheck

if TYPE_CHECKING:
    from stackbound.stages import OpenSource
    from stackbound.verifyfiles import Expected

__all__ = ["Problem", "VerifyReport", "verify"]

_ALWAYS_OPEN = "That a measurement, a reading or a model result is the same on original and decoded pixels."
_WITHOUT_SOURCE = (
    "What the errors are today: the source was not read. The store is what was compared with it then, and the log says "
    "how that went."
)
_WITHOUT_ROOT = (
    "That nobody rewrote the store whole together with its log: only a root kept elsewhere (--root) can show that."
)


def verify(
    store: str | os.PathLike[str],
    *,
    against: object = None,
    root: str | None = None,
    record: str | os.PathLike[str] | None = None,
    axes: str | None = None,
    workers: int | None = None,
    progress: Progress | None = None,
) -> VerifyReport:
    """Check that a store is complete and unchanged and decodes to the pixels that were compared with the source.

    Parameters
    ----------
    store : path
        The store; it is only read.
    against : path, list of paths or array, optional
        The source; every pixel is compared with it again.
    root : str, optional
        The root that `compress` returned and that was kept elsewhere.
    record : path, optional
        A new file, outside the store, for a record of this check.
    axes : str, optional
        The axes of `against`, as for `compress`.
    workers : int, optional
        Regions checked at once; by default the processors that this process may use.
    progress : Progress, optional
        Told how far the check is, in pixels.

    Returns
    -------
    VerifyReport
        Damage is in its `problems`, not raised.

    Raises
    ------
    stackbound.errors.UsageError
        The root is none, the record's place is not usable.
    stackbound.errors.TargetError
        There is no store.
    stackbound.errors.SourceError
        The source cannot be read or is a stack of another shape.
    """
    path = Path(store)
    root = _checked_root(root)
    require_store(path)
    _check_record(record, path)
    with contextlib.ExitStack() as stack:
        source = stack.enter_context(_opened(against, axes))
        findings = Findings()
        expected = check_log(path, findings, root)
        check_files(path, expected, findings)
        usable = check_metadata(path, expected, findings)
        if source is not None:
            _check_fits(source, expected)
        pixels, largest = 0, None
        if expected.grid is not None and expected.info is not None:
            limits = _limits(workers, expected)
            check = PixelCheck(path, expected, findings, source, usable)
            pixels, largest = check.run(limits, progress or Quiet())
    report = VerifyReport(
        store=path,
        ok=not findings.problems,
        root=expected.root,
        checks=tuple(findings.checks),
        problems=tuple(findings.problems),
        notices=tuple(findings.notices),
        cannot_prove=_open_questions(source, root),
        against=source is not None,
        regions=len(expected.regions),
        pixels=pixels,
        largest_error=largest,
        promise=expected.promise.record() if expected.promise is not None else None,
    )
    if record is not None:
        _write_record(Path(record), report)
    return report


def _checked_root(root: str | None) -> str | None:
    if root is None:
        return None
    plain = root.strip().lower()
    if not re.fullmatch(r"[0-9a-f]{64}", plain):
        raise UsageError("A root has 64 hexadecimal digits.", where="--root", remedy="Copy the one compress printed.")
    return plain


def _check_record(record: str | os.PathLike[str] | None, store: Path) -> None:
    if record is None:
        return
    path = Path(record)
    if os.path.lexists(path):
        raise TargetError("The file for the record exists already.", where=str(path), left="It was left as it is.")
    if not path.parent.is_dir():
        raise TargetError("The folder of the record does not exist.", where=str(path.parent))
    if store.resolve() in path.resolve().parents:
        raise UsageError("The record cannot lie inside the store.", where=str(path), remedy="Choose another folder.")


@contextlib.contextmanager
def _opened(against: object, axes: str | None) -> Iterator[OpenSource | None]:
    if against is None:
        yield None
        return
    from stackbound.sources import open_source

    with open_source(against, axes=axes, registry=registry()) as source:
        yield source


def _check_fits(source: OpenSource, expected: Expected) -> None:
    if expected.info is None:
        return
    ours, theirs = expected.info, source.info
    if (ours.axes, ours.shape, ours.dtype) != (theirs.axes, theirs.shape, theirs.dtype):
        raise SourceError(
            f"The store holds {ours.axes} {ours.shape} {ours.dtype}, this source is "
            f"{theirs.axes} {theirs.shape} {theirs.dtype}.",
            where="--against",
            remedy="Give the source that was compressed.",
        )


def _limits(workers: int | None, expected: Expected) -> Budget:
    if workers is not None and workers < 1:
        raise UsageError(f"{workers} workers cannot work.", where="--workers", remedy="Give 1 or more.")
    count = workers or environment.cpus()
    assert expected.info is not None
    assert expected.grid is not None
    try:
        return budget(environment.memory() // 2, count, expected.info, expected.grid)
    except UsageError:
        return Budget(1, 1, 1)  # a check of what exists is tried all the same


def _open_questions(source: OpenSource | None, root: str | None) -> tuple[str, ...]:
    questions = [_ALWAYS_OPEN]
    if source is None:
        questions.append(_WITHOUT_SOURCE)
    if root is None:
        questions.append(_WITHOUT_ROOT)
    return tuple(questions)


def _write_record(path: Path, report: VerifyReport) -> None:
    import stackbound

    checked = datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds")
    content = {"checked": checked, "version": stackbound.__version__, **report.to_json()}
    try:
        with path.open("x", encoding="utf-8", newline="\n") as file:
            file.write(json.dumps(content, indent=2, ensure_ascii=False) + "\n")
    except OSError as error:
        raise TargetError(f"The record cannot be written ({error.strerror}).", where=str(path)) from error
