"""Where stages come from: the hook, the loader of plugins and the registry of stages.

Built-in stages, installed plugins (entry point group ``stackbound``) and single files (`use_plugin`) all come through
the one hook `stackbound_stages`, which returns classes. A plugin that cannot be loaded never breaks the program: the
failure is kept as data, for `stackbound plugins` and for the message of whoever asks for a stage that is missing.
"""

from __future__ import annotations

import contextlib
import difflib
import hashlib
import importlib
import importlib.metadata
import inspect
import os
import re
import sys
import threading
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from types import ModuleType

import pluggy

from . import stages
from .errors import ConfigError, PluginError, UsageError
from .stages import Options, Stage

__all__ = [
    "GROUP",
    "KINDS",
    "Failure",
    "Origin",
    "Registry",
    "hookimpl",
    "plugin_report",
    "registry",
    "use_plugin",
]

GROUP = "stackbound"
"""Entry point group under which distributions offer plugins."""

SWITCH = "STACKBOUND_PLUGINS"
"""Environment variable: ``off`` runs without third-party plugins."""

FILES = "STACKBOUND_PLUGIN_FILES"
"""Environment variable: plugin files for every process that inherits it, ``FILE`` or ``FILE#sha256=HEX``, joined by
the separator of PATH."""

_hookspec = pluggy.HookspecMarker(GROUP)
hookimpl = pluggy.HookimplMarker(GROUP)
"""Marks a plugin's function as the implementation of the hook of the same name."""

_STAGE_NAME = re.compile(r"[a-z][a-z0-9]*(-[a-z0-9]+)*")

CONTRACTS: dict[str, type[Stage]] = {
    cls.kind: cls
    for cls in vars(stages).values()
    if isinstance(cls, type) and issubclass(cls, Stage) and cls is not Stage
}
"""The abstract class of each kind of stage, in the order the data flows."""

KINDS: tuple[str, ...] = tuple(CONTRACTS)


class _Hooks:
    """The hook specifications."""

    @_hookspec
    def stackbound_stages(self) -> Sequence[type[Stage]]:  # type: ignore[empty-body]
        """Return the stage classes that this plugin offers."""


@dataclass(frozen=True)
class Origin:
    """Where a stage class comes from.

    Attributes
    ----------
    distribution : str
        Name of the distribution; for a plugin file the name of the file without its folder.
    version : str
        Version of the distribution; for a plugin file the first 12 digits of its hash.
    builtin : bool
        Whether the class ships with stackbound.
    file : pathlib.Path or None
        The plugin file, where the class comes from one.
    sha256 : str or None
        Hash of that file.
    source : bytes or None
        Content of that file as it was executed.
    """

    distribution: str
    version: str
    builtin: bool = False
    file: Path | None = None
    sha256: str | None = None
    source: bytes | None = field(default=None, repr=False, compare=False)

    def __str__(self) -> str:
        return f"{self.distribution} {self.version}"


@dataclass(frozen=True)
class Failure:
    """A plugin, or a part of one, that could not be used.

    Attributes
    ----------
    plugin : str
        Entry point, module or file.
    origin : Origin
        Distribution or file that it belongs to.
    reason : str
        What went wrong, in one sentence.
    stage : tuple of str or None
        Kind and name of the stage that is missing for it, where these are known.
    """

    plugin: str
    origin: Origin
    reason: str
    stage: tuple[str, str] | None = None

    def __str__(self) -> str:
        return f"{self.plugin} ({self.origin}): {self.reason}"


class Registry:
    """The stage classes of this process by kind and name.

    Attributes
    ----------
    failures : tuple of Failure
        What could not be loaded, and why.
    """

    def __init__(self) -> None:
        self._manager = pluggy.PluginManager(GROUP)
        self._manager.add_hookspecs(_Hooks)
        self._stages: dict[tuple[str, str], type[Stage]] = {}
        self._origins: dict[type[Stage], Origin] = {}
        self._refused: dict[tuple[str, str], list[Origin]] = {}
        self.failures: tuple[Failure, ...] = ()

    # ------------------------------------------------------------------------------------------------- questions

    def get(self, kind: str, name: str) -> type[Stage]:
        """Return the class of one stage.

        Raises
        ------
        stackbound.errors.ConfigError
            No plugin offers such a stage; the message suggests the nearest name.
        stackbound.errors.PluginError
            A plugin that offers it failed to load; the message says which and why.
        """
        if (kind, name) in self._stages:
            return self._stages[kind, name]
        broken = [failure for failure in self.failures if failure.stage == (kind, name)]
        if broken:
            raise PluginError(
                f"The {kind} stage '{name}' cannot be used: " + "; ".join(map(str, broken)) + ".",
                remedy="'stackbound plugins' shows what is loaded and what failed.",
            )
        raise ConfigError(self.unknown(kind, name))

    def unknown(self, kind: str, name: str) -> str:
        """Return the sentence that says that there is no such stage, what there is, and what failed to load."""
        names = self.names(kind)
        near = difflib.get_close_matches(name, names, n=1)
        text = f"There is no {kind} stage '{name}'"
        text += f"; did you mean '{near[0]}'?" if near else f"; there are: {', '.join(names) or 'none'}."
        outside = [failure for failure in self.failures if failure.stage is None]
        if outside:
            text += " It may belong to a plugin that failed to load: " + "; ".join(map(str, outside)) + "."
        return text

    def names(self, kind: str) -> list[str]:
        """Return the names of all stages of a kind, built-ins first."""
        return [cls.name for cls in self.classes(kind)]

    def classes(self, kind: str) -> list[type[Stage]]:
        """Return all stage classes of a kind, built-ins first, each group in the order of registration."""
        if kind not in CONTRACTS:
            raise ValueError(f"There is no kind of stage '{kind}'; there are: {', '.join(KINDS)}.")
        return [cls for (its_kind, _), cls in self._stages.items() if its_kind == kind]

    def origin(self, cls: type[Stage]) -> Origin:
        """Return where a class of this registry comes from."""
        return self._origins[cls]

    # ------------------------------------------------------------------------------------------------- filling

    def add(self, plugin: object, name: str, origin: Origin) -> list[Failure]:
        """Register what `plugin`, a module or an object with hook implementations, offers; return what failed."""
        before = len(self.failures)
        unknown = [hook for hook in self._marked(plugin) if not hasattr(_Hooks, hook)]
        for hook in unknown:
            known = ", ".join(hook for hook in vars(_Hooks) if not hook.startswith("_"))
            self._fail(name, origin, f"unknown hook '{hook}'; the hooks are: {known}")
        try:
            self._manager.register(plugin, name)
            offered = self._offered(plugin)
        except (Exception, SystemExit) as error:  # noqa: BLE001  # whatever a plugin raises becomes data
            self._fail(name, origin, _reason(error))
        else:
            if offered is None and not unknown:
                self._fail(name, origin, "offers nothing: no function is marked with @stackbound.hookimpl")
            for cls in offered or ():
                self._add_stage(cls, name, origin)
        return list(self.failures[before:])

    def drop_file(self, path: Path) -> None:
        """Forget the stages of a plugin file, whose content has changed."""
        for key, cls in list(self._stages.items()):
            if self._origins[cls].file == path:
                del self._stages[key]

    def has(self, plugin_name: str) -> bool:
        """Return whether a plugin of this name is registered."""
        return self._manager.has_plugin(plugin_name)

    def fail_import(self, name: str, origin: Origin, error: BaseException) -> None:
        """Keep the failure of a plugin that could not be imported."""
        self._fail(name, origin, _reason(error))

    def _marked(self, plugin: object) -> list[str]:
        return [name for name in dir(plugin) if self._manager.parse_hookimpl_opts(plugin, name) is not None]

    def _offered(self, plugin: object) -> list[object] | None:
        for implementation in self._manager.hook.stackbound_stages.get_hookimpls():
            if implementation.plugin is plugin:
                with contextlib.redirect_stdout(sys.stderr):
                    classes = implementation.function()
                if isinstance(classes, str | bytes) or not isinstance(classes, Iterable):
                    raise TypeError("stackbound_stages must return a list of stage classes")
                return list(classes)
        return None

    def _add_stage(self, cls: object, plugin: str, origin: Origin) -> None:
        problem = _contract_problem(cls)
        if problem is not None or not isinstance(cls, type) or not issubclass(cls, Stage):
            self._fail(plugin, origin, problem or "is not a class")
            return
        key = (cls.kind, cls.name)
        holder = self._stages.get(key)
        rivals = self._refused.get(key)
        if holder is None and rivals is None:
            self._stages[key] = cls
            self._origins[cls] = origin
        elif holder is not None and (self._origins[holder].builtin or origin.file is not None):
            held = f"{self._origins[holder]} offers a {cls.kind} stage '{cls.name}' already"
            self._fail(plugin, origin, f"{held}; the plugin must choose another name")
        else:
            # Which of the two is meant cannot be known, and must not depend on the order of loading: neither is used.
            rivals = self._refused.setdefault(key, [self._origins[holder]] if holder is not None else [])
            both = " and ".join(str(rival) for rival in [*rivals, origin])
            self._fail(plugin, origin, f"{both} both offer a {cls.kind} stage '{cls.name}'; uninstall one", key)
            rivals.append(origin)
            self._stages.pop(key, None)

    def _fail(self, plugin: str, origin: Origin, reason: str, stage: tuple[str, str] | None = None) -> None:
        self.failures = (*self.failures, Failure(plugin, origin, reason, stage))


def _reason(error: BaseException) -> str:
    if isinstance(error, ModuleNotFoundError):
        return f"needs the module '{error.name}', which is not installed"
    text = " ".join(str(error).split())
    return f"{type(error).__name__}: {text}" if text else type(error).__name__


def _contract_problem(cls: object) -> str | None:
    """Return what keeps `cls` from being a stage class, or None."""
    if not (isinstance(cls, type) and issubclass(cls, Stage)):
        return f"{cls!r} is not a stage class: it must derive from one of stackbound.stages"
    title = f"the class {cls.__name__}"
    kind: object = getattr(cls, "kind", None)
    name: object = getattr(cls, "name", None)
    if not isinstance(kind, str) or kind not in CONTRACTS or not issubclass(cls, CONTRACTS[kind]):
        return f"{title} derives from no kind of stage; the kinds are: {', '.join(KINDS)}"
    if not isinstance(name, str) or not _STAGE_NAME.fullmatch(name):
        return f"{title} needs a 'name' of lower-case letters, digits and single hyphens, not {name!r}"
    if inspect.isabstract(cls):
        return f"{title} lacks the methods {', '.join(sorted(cls.__abstractmethods__))}"
    options: object = cls.Options
    if not (isinstance(options, type) and issubclass(options, Options)):
        return f"the Options of {title} must derive from stackbound.stages.Options"
    if "name" in cls.Options.model_fields:
        return f"{title} has an option 'name', which is the key of the stage itself"
    if not cls.Options.model_config.get("frozen") or cls.Options.model_config.get("extra") != "forbid":
        return f"the Options of {title} must stay frozen and keep extra='forbid'"
    return None


# ----------------------------------------------------------------------------------------------------------- loading

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
