"""A store back to a file of the user's choice."""

from __future__ import annotations

import contextlib
import os
import shutil
from pathlib import Path
from typing import TYPE_CHECKING

from stackbound.errors import PluginError, StackboundError, TargetError, UsageError
from stackbound.geometry import Index
from stackbound.opened import StoredStack, StoreSource
from stackbound.plugins import registry
from stackbound.reports import Progress, Quiet, RestoreReport
from stackbound.target import rename

if TYPE_CHECKING:
    from typing import Any

    from numpy.typing import NDArray

    from stackbound.stages import Save


def restore(
    store: str | os.PathLike[str],
    target: str | os.PathLike[str],
    *,
    overwrite: bool = False,
    progress: Progress | None = None,
) -> RestoreReport:
    """Write a stored stack as a file of another format; every tile is checked against its checksums on the way.

    Parameters
    ----------
    store : path
        The store.
    target : path
        The file; the end of its name says the format.
    overwrite : bool
        Replace an existing file, once the new one is complete.
    progress : Progress, optional
        Told how far it is, in pixels.

    Raises
    ------
    stackbound.errors.UsageError
        No format has this ending, or the format cannot hold the stack unchanged.
    stackbound.errors.TargetError
        The target exists or cannot be written.
    stackbound.errors.IntegrityError
        The store is damaged.
    """
    path = Path(target)
    saver = saver_for(path)
    stack = StoredStack(store)
    saver.check(stack.info)
    _check_target(path, stack.path, overwrite)
    # The whole ending stays: savers and the libraries under them look at it.
    suffix = _suffix(path, saver)
    unfinished = path.with_name(f"{path.name[: len(path.name) - len(suffix)]}.partial-{os.getpid()}{suffix}")
    if os.path.lexists(unfinished):
        raise TargetError("A file is in the way.", where=str(unfinished), remedy="Move it away.")
    watched = progress or Quiet()
    watched.start("restoring", stack.size)
    try:
        saver.write(unfinished, _Watched(stack, watched))
        rename(unfinished, path)
    except StackboundError:
        _remove(unfinished)
        raise
    except OSError as error:
        _remove(unfinished)
        raise TargetError(f"The file cannot be written ({error.strerror or error}).", where=str(path)) from error
    except Exception as error:
        _remove(unfinished)
        raise PluginError(f"The saver '{saver.name}' raised {type(error).__name__}: {error}.") from error
    except BaseException:
        _remove(unfinished)
        raise
    finally:
        watched.end()
    return RestoreReport(
        store=stack.path,
        target=path,
        kind=saver.name,
        axes=stack.axes,
        shape=stack.shape,
        dtype=stack.dtype.name,
        bytes=_size(path),
        notes=(stack.promise.words,),
    )


def saver_for(target: Path) -> Save:
    """Return the save stage for a file name.

    Raises
    ------
    stackbound.errors.UsageError
        No stage has this ending; names those that exist.
    """
    name = target.name.lower()
    classes = [cls for cls in registry().classes("save") if issubclass(cls, _save_class())]
    fitting = [(suffix, cls) for cls in classes for suffix in cls.suffixes if name.endswith(suffix)]
    if not fitting:
        known = ", ".join(sorted({suffix for cls in classes for suffix in cls.suffixes}))
        raise UsageError("No format has this ending.", where=target.name, remedy=f"Known endings: {known}.")
    _, chosen = max(fitting, key=lambda pair: len(pair[0]))
    return chosen()


def _save_class() -> type[Save]:
    from stackbound.stages import Save

    return Save


class _Watched(StoreSource):
    def __init__(self, stack: StoredStack, progress: Progress) -> None:
        super().__init__(stack)
        self._progress = progress

    def read(self, start: Index, stop: Index) -> NDArray[Any]:
        pixels = super().read(start, stop)
        self._progress.advance(pixels.size)
        return pixels


def _check_target(path: Path, store: Path, overwrite: bool) -> None:
    if not path.parent.is_dir():
        raise TargetError("The folder of the target does not exist.", where=str(path.parent), remedy="Create it first.")
    if os.path.lexists(path):
        if path.is_dir():
            raise TargetError(
                "The target is a folder.",
                where=str(path),
                left="It was left as it is.",
                remedy="Choose another name.",
            )
        if not overwrite:
            raise TargetError(
                "The target exists already.",
                where=str(path),
                left="It was left as it is.",
                remedy="Choose another name, or replace it with --overwrite.",
            )
    if store.resolve() in path.resolve().parents:
        raise TargetError("The target lies inside the store.", where=str(path), remedy="Choose another folder.")


def _suffix(path: Path, saver: Save) -> str:
    endings = (suffix for suffix in saver.suffixes if path.name.lower().endswith(suffix))
    longest = max(endings, key=len)
    return path.name[len(path.name) - len(longest) :]


def _remove(path: Path) -> None:
    with contextlib.suppress(FileNotFoundError):
        if path.is_dir():
            shutil.rmtree(path)
        else:
            path.unlink()


def _size(path: Path) -> int:
    if path.is_dir():
        return sum(file.stat().st_size for file in path.rglob("*") if file.is_file())
    return path.stat().st_size
