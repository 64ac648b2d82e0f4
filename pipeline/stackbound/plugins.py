"""Where stages come from: built-in modules, installed plugins and single files, each loaded in its own try.

Installed plugins are found by their entry points in the group ``stackbound``; one Python file is loaded by `use_plugin`
or, in every process that inherits it, by the environment variable STACKBOUND_PLUGIN_FILES.
"""

from __future__ import annotations

import contextlib
import difflib
import hashlib
import importlib
import importlib.metadata
import inspect
import os
import sys
import threading
from collections.abc import Callable
from pathlib import Path
from types import ModuleType

from .errors import PluginError, UsageError
from .registry import GROUP, KINDS, Failure, Origin, Registry, hookimpl
from .stages import Stage

__all__ = ["KINDS", "Failure", "Origin", "Registry", "hookimpl", "plugin_report", "registry", "stages_of", "use_plugin"]

SWITCH = "STACKBOUND_PLUGINS"
"""Environment variable: ``off`` runs without third-party plugins."""

FILES = "STACKBOUND_PLUGIN_FILES"
"""Environment variable: plugin files for every process that inherits it, ``FILE`` or ``FILE#sha256=HEX``, joined by
the separator of PATH."""

_lock = threading.RLock()
_registry: Registry | None = None


def registry() -> Registry:
    """Return the stages of this process; loaded at the first call: built-ins, installed plugins, plugin files.

    Raises
    ------
    stackbound.errors.UsageError
        The environment variable STACKBOUND_PLUGINS has an unknown value.
    """
    global _registry
    with _lock:
        if _registry is None:
            fresh = Registry()
            _load_builtin(fresh)
            if third_party_allowed():
                _load_installed(fresh)
                _load_listed_files(fresh)
            _registry = fresh
        return _registry


def third_party_allowed() -> bool:
    """Return whether plugins other than the built-ins may be loaded (environment variable STACKBOUND_PLUGINS)."""
    value = os.environ.get(SWITCH, "").strip().lower()
    if value not in ("", "on", "off"):
        raise UsageError(f"The environment variable {SWITCH} is '{value}'.", remedy="Use 'off', 'on' or nothing.")
    return value != "off"


def _load(target: Registry, name: str, origin: Origin, load: Callable[[], object]) -> list[Failure]:
    before = len(target.failures)
    try:
        # What a plugin prints must not land in the results on standard output.
        with contextlib.redirect_stdout(sys.stderr):
            plugin = load()
    except (Exception, SystemExit) as error:  # noqa: BLE001  # whatever a plugin raises becomes data
        target.fail_import(name, origin, error)
    else:
        target.add(plugin, name, origin)
    return list(target.failures[before:])


def _load_builtin(target: Registry) -> None:
    import stackbound_stages

    origin = Origin("stackbound", importlib.metadata.version("stackbound"), builtin=True)
    for module in stackbound_stages.BUILTIN:
        name = f"stackbound_stages.{module}"
        _load(target, name, origin, lambda name=name: importlib.import_module(name))  # type: ignore[misc]


def _load_installed(target: Registry) -> None:
    points = importlib.metadata.entry_points(group=GROUP)
    # Sorted, so that failures and listings do not depend on the order of folders on sys.path.
    for point in sorted(points, key=lambda point: (_distribution(point)[0], point.name)):
        origin = Origin(*_distribution(point))
        _load(target, f"{origin.distribution}:{point.name}", origin, point.load)


def _distribution(point: importlib.metadata.EntryPoint) -> tuple[str, str]:
    if point.dist is None:
        return ("unknown distribution", "without version")
    return (point.dist.name, point.dist.version)


def _load_listed_files(target: Registry) -> None:
    for entry in filter(None, os.environ.get(FILES, "").split(os.pathsep)):
        path, _, sha256 = entry.partition("#sha256=")
        try:
            _load_file(target, Path(path), sha256 or None)
        except PluginError as error:
            target.fail_import(path, Origin(Path(path).name, "not loaded"), error)


def use_plugin(path: str | os.PathLike[str], sha256: str | None = None) -> None:
    """Load the stages of one Python file into this process.

    Parameters
    ----------
    path : path
        A Python file with hook implementations.
    sha256 : str, optional
        The hash that the file must have, in hexadecimal digits (as a store or a log names it).

    Raises
    ------
    stackbound.errors.PluginError
        The file cannot be read, has another hash, breaks, or offers a stage that exists already.
    stackbound.errors.UsageError
        Plugins are switched off by the environment variable STACKBOUND_PLUGINS.

    Notes
    -----
    The same content loaded again changes nothing; changed content replaces what the file offered before. Processes
    started with "spawn" must call this too, or inherit the environment variable STACKBOUND_PLUGIN_FILES.
    """
    if not third_party_allowed():
        raise UsageError(f"A plugin file was given, but {SWITCH}=off runs without plugins.", where=str(path))
    with _lock:
        failures = _load_file(registry(), Path(path), sha256)
    if failures:
        raise PluginError("; ".join(failure.reason for failure in failures) + ".", where=str(path))


def _load_file(target: Registry, path: Path, sha256: str | None) -> list[Failure]:
    try:
        source = path.read_bytes()
    except OSError as error:
        raise PluginError(f"The plugin file cannot be read ({error.strerror}).", where=str(path)) from error
    found = hashlib.sha256(source).hexdigest()
    if sha256 is not None and sha256.lower() != found:
        raise PluginError(
            f"The plugin file has the SHA-256 {found}, not {sha256.lower()} as required.",
            where=str(path),
            remedy="Use the very file that is meant, or leave the hash out.",
        )
    module_name = f"stackbound_plugin_{found[:16]}"
    if target.has(module_name):
        return []
    target.drop_file(path.absolute())
    origin = Origin(path.name, found[:12], file=path.absolute(), sha256=found, source=source)

    def execute() -> ModuleType:
        module = ModuleType(module_name)
        module.__file__ = str(path)
        # Registered as a module, so that its classes can be pickled within this process.
        sys.modules[module_name] = module
        try:
            exec(compile(source, str(path), "exec"), module.__dict__)
        except BaseException:
            del sys.modules[module_name]
            raise
        return module

    return _load(target, module_name, origin, execute)


def plugin_report(source: Registry | None = None) -> dict[str, object]:
    """Return what is loaded and what failed, as plain JSON values (`stackbound plugins --json`)."""
    source = registry() if source is None else source
    loaded = [
        {
            "kind": kind,
            "name": cls.name,
            "summary": (inspect.getdoc(cls) or "").partition("\n")[0],
            "options": sorted(cls.Options.model_fields),
            "distribution": source.origin(cls).distribution,
            "version": source.origin(cls).version,
            "builtin": source.origin(cls).builtin,
            "sha256": source.origin(cls).sha256,
        }
        for kind in KINDS
        for cls in source.classes(kind)
    ]
    failed = [
        {
            "plugin": failure.plugin,
            "distribution": failure.origin.distribution,
            "version": failure.origin.version,
            "reason": failure.reason,
        }
        for failure in source.failures
    ]
    return {"schema_version": 1, "stages": loaded, "failures": failed, "third_party": third_party_allowed()}


def stages_of(what: str) -> list[type[Stage]]:
    """Return the stage classes that a file, a distribution or a stage's name means.

    Raises
    ------
    stackbound.errors.PluginError
        The file or distribution failed to load.
    stackbound.errors.UsageError
        Nothing of that name is there.
    """
    path = Path(what)
    if path.suffix == ".py" or path.is_file():
        use_plugin(path)
    found = registry()
    every = [cls for kind in KINDS for cls in found.classes(kind)]
    chosen = [
        cls
        for cls in every
        if what in (cls.name, f"{cls.kind}:{cls.name}", found.origin(cls).distribution)
        or found.origin(cls).file == path.absolute()
    ]
    if chosen:
        return chosen
    broken = [failure for failure in found.failures if what in (failure.origin.distribution, failure.plugin)]
    if broken:
        raise PluginError("; ".join(failure.reason for failure in broken) + ".", where=what)
    names = {found.origin(cls).distribution for cls in every} | {cls.name for cls in every}
    near = difflib.get_close_matches(what, sorted(names), n=1)
    hint = f"; did you mean '{near[0]}'?" if near else "."
    raise UsageError(
        f"There is no plugin file, distribution or stage '{what}'{hint}", remedy="See 'stackbound plugins'."
    )
