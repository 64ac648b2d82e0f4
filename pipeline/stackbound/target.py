"""The names on disk around one target: ``NAME.partial`` while a run is under way, ``NAME`` only when it is complete.

==========================  =========================================================
``NAME``                    the finished store, never half of one
``NAME.partial``            the store being written
``NAME.partial.journal``    what is finished inside it, for ``--resume``
``NAME.partial.lock``       one run at a time
``NAME.replaced``           the store that ``--overwrite`` replaces, for the moment between two renames
``NAME.run.json``           time, host, operator and command of the run that made the store
==========================  =========================================================
"""

from __future__ import annotations

import json
import os
import shutil
import time
from collections.abc import Callable, Iterable
from pathlib import Path

from stackbound.errors import TargetError
from stackbound.lock import Lock

FILE_ENDINGS = (".tif", ".tiff", ".btf", ".npy", ".dcm", ".zip", ".ozx")
"""A target with such a name is more likely a mistake, such as source and store in the wrong order, than a store."""


class Target:
    """One target and the names beside it.

    Parameters
    ----------
    path : Path
        Where the finished store goes.
    """

    def __init__(self, path: Path) -> None:
        # Only the parent is resolved: a link at the name itself is what gets replaced, not what it points to.
        self.path = path.parent.resolve() / path.name
        self.partial = self._beside(".partial")
        self.journal = self._beside(".partial.journal")
        self.replaced = self._beside(".replaced")
        self.run_json = self._beside(".run.json")
        self.lock = Lock(self._beside(".partial.lock"))

    def _beside(self, ending: str) -> Path:
        return self.path.with_name(self.path.name + ending)

    def check(self, *, resume: bool, overwrite: bool) -> None:
        """Refuse a target that may not be written, before anything is.

        Raises
        ------
        stackbound.errors.TargetError
            Exists without `overwrite`, is no store, has an unfinished run without `resume` or `overwrite`, or its
            folder is missing or not writable.
        """
        parent = self.path.parent
        if self.path.name in ("", ".", ".."):
            raise TargetError("The target needs a name.", where=str(self.path))
        if self.path.name.lower().endswith(FILE_ENDINGS):
            raise TargetError(
                "A store is a folder, and this is the name of a file.",
                where=str(self.path),
                remedy="By custom the name of a store ends in .ome.zarr.",
            )
        if not parent.is_dir():
            raise TargetError("The folder of the target does not exist.", where=str(parent), remedy="Create it first.")
        if not os.access(parent, os.W_OK | os.X_OK):
            raise TargetError("The folder of the target cannot be written.", where=str(parent))
        if os.path.lexists(self.path):
            if not overwrite:
                raise TargetError(
                    "The target exists already.",
                    where=str(self.path),
                    left="It was left as it is.",
                    remedy="Choose another name, or replace it with --overwrite.",
                )
            if not _is_store(self.path):
                raise TargetError(
                    "The target is not a store, and --overwrite replaces nothing but stores.",
                    where=str(self.path),
                    left="It was left as it is.",
                    remedy="Choose another name.",
                )
        if os.path.lexists(self.partial) and not (resume or overwrite):
            raise TargetError(
                "An unfinished run left its files here.",
                where=str(self.partial),
                left="They were left as they are.",
                remedy="Continue it with --resume, or start again with --overwrite.",
            )

    def check_source(self, files: Iterable[Path]) -> None:
        """Refuse a target that is or holds a file of its own source, or would be written inside it."""
        for file in files:
            source = file.resolve()
            for name in (self.path, self.partial):
                if source == name or name in source.parents or source in name.parents:
                    raise TargetError(
                        "The target would be written over its own source.",
                        where=str(self.path),
                        remedy="Choose another name.",
                    )

    def recover(self) -> None:
        """Put back what a killed run left between two renames. Call with the lock held."""
        if os.path.lexists(self.replaced):
            if os.path.lexists(self.path):
                _remove(self.replaced)
            else:
                rename(self.replaced, self.path)

    def discard(self) -> None:
        """Remove the unfinished store and its journal.

        Raises
        ------
        stackbound.errors.TargetError
            What has the unfinished store's name is something else.
        """
        if os.path.lexists(self.partial):
            if not _is_unfinished(self.partial):
                raise TargetError(
                    "This is not an unfinished store.",
                    where=str(self.partial),
                    left="It was left as it is.",
                    remedy="Move it away.",
                )
            _remove(self.partial)
        self.journal.unlink(missing_ok=True)

    def finish(self) -> None:
        """Give the complete store its name; a store that it replaces is removed after that."""
        replacing = os.path.lexists(self.path)
        if replacing:
            rename(self.path, self.replaced)
        try:
            rename(self.partial, self.path)
        except BaseException:
            if replacing:
                rename(self.replaced, self.path)
            raise
        sync_folder(self.path.parent)
        if replacing:
            _remove(self.replaced)
        self.journal.unlink(missing_ok=True)


def write_file(path: Path, parts: bytes | Iterable[bytes]) -> None:
    """Write a new file and wait until the disk has it.

    Raises
    ------
    stackbound.errors.TargetError
        The disk is full, or the file cannot be written.
    """
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        with path.open("wb") as file:
            file.writelines([parts] if isinstance(parts, bytes) else parts)
            file.flush()
            os.fsync(file.fileno())
    except OSError as error:
        raise TargetError(f"A file cannot be written ({error.strerror}).", where=str(path)) from error


def sync_folder(folder: Path) -> None:
    """Wait until the disk has the names in a folder (where the system can open folders)."""
    if os.name != "posix":
        return
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    except OSError:
        pass  # some network file systems cannot; nothing more can be done there
    finally:
        os.close(descriptor)


def sync_tree(folder: Path) -> None:
    """Wait until the disk has the names of all folders below and including `folder`."""
    for name, _, _ in os.walk(folder):
        sync_folder(Path(name))


def _is_store(path: Path) -> bool:
    if path.is_symlink() or not path.is_dir():
        return False
    if not any(path.iterdir()):
        return True
    try:
        attributes = json.loads((path / "zarr.json").read_bytes())["attributes"]
    except (OSError, ValueError, KeyError, TypeError):
        return (path / "stackbound" / "verification.jsonl").exists()
    return isinstance(attributes, dict) and "stackbound" in attributes


def _is_unfinished(path: Path) -> bool:
    names = {entry.name for entry in path.iterdir()} if path.is_dir() and not path.is_symlink() else {""}
    return names <= {"0", "OME", "stackbound", "zarr.json", ".DS_Store", "Thumbs.db", "desktop.ini"}


def _remove(path: Path) -> None:
    if path.is_dir() and not path.is_symlink():
        shutil.rmtree(path)
    else:
        path.unlink(missing_ok=True)


def rename(old: Path, new: Path) -> None:
    """Give a file or folder its final name, replacing a file that has it."""
    _patiently(lambda: old.replace(new), f"{old.name} cannot be renamed to {new.name}", new)


def _patiently(action: Callable[[], object], what: str, where: Path, attempts: int = 8) -> None:
    """Try again after a pause: on Windows another program (a virus scanner, an indexer) may have a file open."""
    for attempt in range(attempts):
        try:
            action()
        except PermissionError as error:
            if os.name == "posix" or attempt == attempts - 1:
                raise TargetError(f"{what} ({error.strerror}).", where=str(where)) from error
            time.sleep(0.05 * 2**attempt)
        except OSError as error:
            raise TargetError(f"{what} ({error.strerror}).", where=str(where)) from error
        else:
            return
