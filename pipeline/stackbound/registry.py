"""The registry of stages: which classes there are, where each comes from, and what could not be used.

Built-ins and plugins alike come through the one hook `stackbound_stages`, which returns classes. A plugin that cannot
be used never breaks the program: the failure is kept as data, for `stackbound plugins` and for the message of whoever
asks for a stage that is missing.
"""

from __future__ import annotations

import contextlib
import difflib
import inspect
import re
import sys
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import pluggy

from . import stages
from .errors import ConfigError, PluginError
from .stages import Options, Stage

__all__ = [
    "CONTRACTS",
    "GROUP",
    "KINDS",
    "STAGE_NAME",
    "Failure",
    "Hooks",
    "Origin",
    "Registry",
    "contract_problem",
    "hookimpl",
]

GROUP = "stackbound"
"""Entry point group under which distributions offer plugins, and name of the hooks' project."""

_hookspec = pluggy.HookspecMarker(GROUP)
hookimpl = pluggy.HookimplMarker(GROUP)
"""Marks a plugin's function as the implementation of the hook of the same name."""

STAGE_NAME = re.compile(r"[a-z][a-z0-9]*(-[a-z0-9]+)*")

CONTRACTS: dict[str, type[Stage]] = {
    cls.kind: cls
    for cls in vars(stages).values()
    if isinstance(cls, type) and issubclass(cls, Stage) and cls is not Stage
}
"""The abstract class of each kind of stage, in the order the data flows."""

KINDS: tuple[str, ...] = tuple(CONTRACTS)


class Hooks:
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
        self._manager.add_hookspecs(Hooks)
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
        unknown = [hook for hook in self._marked(plugin) if not hasattr(Hooks, hook)]
        for hook in unknown:
            known = ", ".join(hook for hook in vars(Hooks) if not hook.startswith("_"))
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
        problem = contract_problem(cls)
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


def contract_problem(cls: object) -> str | None:
    """Return what keeps `cls` from being a stage class, or None."""
    if not (isinstance(cls, type) and issubclass(cls, Stage)):
        return f"{cls!r} is not a stage class: it must derive from one of stackbound.stages"
    title = f"the class {cls.__name__}"
    kind: object = getattr(cls, "kind", None)
    name: object = getattr(cls, "name", None)
    if not isinstance(kind, str) or kind not in CONTRACTS or not issubclass(cls, CONTRACTS[kind]):
        return f"{title} derives from no kind of stage; the kinds are: {', '.join(KINDS)}"
    if not isinstance(name, str) or not STAGE_NAME.fullmatch(name):
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
