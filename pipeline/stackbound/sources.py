"""From what the user hands in to an open source: which words are sources, and which loader is the one for each."""

from __future__ import annotations

import glob
import re
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from stackbound.axes import check_axes
from stackbound.errors import SourceError, StackboundError
from stackbound.guard import make
from stackbound.stages import Load, OpenSource

if TYPE_CHECKING:
    from stackbound.plugins import Registry

_LITTER = {".ds_store", "thumbs.db", "desktop.ini", "__macosx"}
"""What operating systems leave in folders."""


def is_litter(name: str) -> bool:
    """Return whether a file is one that the operating system, not the user, put into a folder."""
    return name.lower() in _LITTER or name.startswith("._")


def natural_key(path: str | Path) -> tuple[object, ...]:
    """Return a sorting key under which plane 10 comes after plane 9, whatever the zeros; ties go by the plain text."""
    text = str(path)
    parts = re.split(r"(\d+)", text.casefold())
    return (*((int(part), "") if place % 2 else (-1, part) for place, part in enumerate(parts)), (-1, text))


def expand_sources(args: Sequence[str]) -> list[object]:
    """Return the sources that command-line words stand for.

    A file or a folder is one source. A pattern (``"planes/*.tif"``, in quotes so that the shell leaves it alone) that
    matches several files is one source, a list of planes in natural order; one that matches folders is one source each.

    Raises
    ------
    stackbound.errors.SourceError
        Nothing is there.
    """
    found: list[object] = []
    for word in args:
        path = Path(word)
        if path.exists():
            found.append(path)
            continue
        matches = sorted((Path(name) for name in glob.glob(word, recursive=True)), key=natural_key)  # noqa: PTH207
        matches = [match for match in matches if not is_litter(match.name)]
        if not matches:
            is_pattern = glob.has_magic(word)
            raise SourceError(
                "no file matches the pattern" if is_pattern else "there is no such file or folder",
                where=word,
                remedy="Check its spelling and the folder that you are in.",
            )
        files = [match for match in matches if match.is_file()]
        found += [match for match in matches if not match.is_file()]
        if files:
            found.append(files[0] if len(files) == 1 else files)
    return found


def open_source(
    source: object, *, axes: str | None = None, registry: Registry | None = None, load: str | None = None
) -> OpenSource:
    """Open a source with the loader that recognises it.

    Parameters
    ----------
    source : path, list of paths, array, or whatever a loader knows
        What to open.
    axes : str, optional
        The user's own word on the axes, in the stored order.
    registry : Registry, optional
        Where the loaders come from; those of this process when not given.
    load : str, optional
        Name of the loader to use, whatever the others say.

    Raises
    ------
    stackbound.errors.SourceError
        No loader knows the source, or it is missing, damaged or unsupported.
    stackbound.errors.UsageError
        `axes` cannot be understood, or does not fit the source.
    """
    if registry is None:
        from stackbound.plugins import registry as this_process

        registry = this_process()
    if axes is not None:
        axes = check_axes(axes)
    if isinstance(source, str):
        source = Path(source)
    _check_there(source)
    if load is not None:
        return _opened(make(registry, "load", load), source, axes)
    names = registry.names("load")
    for name in names:
        loader: Load = make(registry, "load", name)
        if loader.recognises(source):
            return _opened(loader, source, axes)
    failed = [str(failure) for failure in registry.failures if failure.stage is None or failure.stage[0] == "load"]
    raise SourceError(
        f"no loader recognises this {_what(source)}; tried: {', '.join(names) or 'none, there is no loader'}",
        where=str(source) if isinstance(source, Path) else None,
        remedy="Export it as TIFF, OME-TIFF, OME-Zarr or NPY, or install a plugin that loads it."
        + (f" Not loaded: {'; '.join(failed)}." if failed else ""),
    )


def _opened(loader: Load, source: object, axes: str | None) -> OpenSource:
    try:
        return loader.open(source, axes=axes)
    except StackboundError:
        raise
    except OSError as error:
        where = str(error.filename or (source if isinstance(source, Path) else "")) or None
        raise SourceError(f"cannot be read: {error.strerror or error}", where=where) from error


def _check_there(source: object) -> None:
    if isinstance(source, Path) and not source.exists():
        raise SourceError(
            "there is no such file or folder",
            where=str(source),
            remedy="Check its spelling and the folder that you are in.",
        )
    if isinstance(source, Path) and source.is_dir() and not any(source.iterdir()):
        raise SourceError("the folder is empty", where=str(source))
    if isinstance(source, Path) and source.is_file() and source.stat().st_size == 0:
        raise SourceError("the file is empty", where=str(source), remedy="Copy or export it again.")
    if isinstance(source, list | tuple) and not source:
        raise SourceError("the list of files is empty")


def _what(source: object) -> str:
    if isinstance(source, Path):
        if source.is_dir():
            suffixes = sorted({path.suffix.lower() or "no suffix" for path in source.iterdir()})
            return f"folder ({', '.join(suffixes[:6])} inside)"
        return f"file ({source.suffix.lower() or 'no suffix'})"
    if isinstance(source, list | tuple):
        return f"list of {len(source)} files"
    return f"object of type {type(source).__name__}"
