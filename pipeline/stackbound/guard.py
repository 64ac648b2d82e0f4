"""A third-party stage behind a guard: whatever it does ends in a good answer or in an error that names it.

The guard is a subclass of the stage's own class whose methods of the contract first hand over read-only inputs, turn
whatever is raised into a `PluginError`, ask the first and every 64th question twice, and keep copies of the answers. So
a stage cannot change the pixels that its answer is measured against, nor its answer afterwards. The bound itself needs
no guard: it holds whatever the answers are.
"""

from __future__ import annotations

import dataclasses
import itertools
import pickle
from collections.abc import Callable, Mapping
from functools import cache, wraps
from typing import Any

import numpy as np

from .errors import PluginError, StackboundError
from .registry import CONTRACTS, Origin, Registry
from .stages import Options, Stage

__all__ = ["guarded", "make", "same"]

EVERY = 64
"""Every so many questions one is asked twice, the first too: answers that differ would make runs differ."""

REPEATABLE = {"tile", "transform", "quantize", "predict", "encode"}
"""Kinds of stage whose answers decide the bytes of a store."""


def make(source: Registry, kind: str, name: str, options: Options | None = None, **parts: Stage | None) -> Any:
    """Return a stage of a registry, behind a guard where it is not built in.

    Parameters
    ----------
    source : Registry
        Where the class is looked up.
    kind, name : str
        Which stage.
    options : Options, optional
        Its defaults without.
    **parts : Stage or None
        The stages that a predict stage composes.

    Raises
    ------
    stackbound.errors.PluginError
        The stage raised while it was made; names it and where it comes from.
    """
    cls = source.get(kind, name)
    origin = source.origin(cls)
    try:
        return (cls if origin.builtin else guarded(cls, origin))(options, **parts)
    except StackboundError as error:
        raise error.at(f"{kind} stage '{name}'") from error.__cause__
    except (Exception, SystemExit) as error:
        what = f"The {kind} stage '{name}' ({origin}) raised {type(error).__name__}: {error}."
        raise PluginError(what, remedy="Tell the plugin's author.") from error


@cache
def guarded(cls: type[Stage], origin: Origin) -> type[Stage]:
    """Return a subclass of a third-party stage class whose contract is watched.

    Parameters
    ----------
    cls : type
        The stage class.
    origin : Origin
        Where it comes from, for messages.
    """
    title = f"{cls.kind} stage '{cls.name}' ({origin})"
    namespace: dict[str, Any] = {
        "__doc__": cls.__doc__,
        "__module__": cls.__module__,
        "__reduce__": _reduce(origin),
        "title": property(lambda self: title),
    }
    for name, member in vars(CONTRACTS[cls.kind]).items():
        if not name.startswith("_") and callable(member):
            namespace[name] = _watched(getattr(cls, name), title, cls.kind in REPEATABLE)
        elif not name.startswith("_") and isinstance(member, property):
            namespace[name] = property(_watched(_getter(cls, name), title, cls.kind in REPEATABLE))
    return type(cls.__name__, (cls,), namespace)


def _getter(cls: type[Stage], name: str) -> Callable[[Any], Any]:
    attribute = getattr(cls, name)
    getter = attribute.fget if isinstance(attribute, property) else None
    return (lambda self: attribute) if getter is None else getter


def _watched(method: Callable[..., Any], title: str, repeatable: bool) -> Callable[..., Any]:
    asked = itertools.count()

    @wraps(method)
    def ask(self: Any, *args: Any, **keywords: Any) -> Any:
        answer = _answer(method, title, self, args, keywords)
        if repeatable and next(asked) % EVERY == 0:
            again = _answer(method, title, self, args, keywords)
            if not same(answer, again):
                what = f"The {title} answered differently when it was asked for '{method.__name__}' again."
                raise PluginError(what, remedy="A stage may depend on its arguments and options alone.")
        return answer

    return ask


def _answer(
    method: Callable[..., Any], title: str, stage: Any, args: tuple[Any, ...], keywords: Mapping[str, Any]
) -> Any:
    try:
        shielded = [_shielded(arg) for arg in args]
        answer = method(stage, *shielded, **{key: _shielded(value) for key, value in keywords.items()})
    except StackboundError:
        raise
    except (Exception, SystemExit) as error:  # whatever a plugin raises gets its name
        hint = "Its inputs are read-only: work on a copy. " if "read-only" in str(error) else ""
        reason = " ".join(f"{type(error).__name__}: {error}".split())
        raise PluginError(
            f"The {title} raised {reason} in '{method.__name__}'.", remedy=f"{hint}Tell the plugin's author."
        ) from error
    return answer.copy() if isinstance(answer, np.ndarray) else answer


def _shielded(value: Any) -> Any:
    """Return `value` with all its arrays read-only."""
    if isinstance(value, np.ndarray):
        view = value.view()
        view.flags.writeable = False
        return view
    if isinstance(value, list | tuple) and type(value) in (list, tuple):
        return type(value)(_shielded(item) for item in value)
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        arrays = {
            field.name: _shielded(getattr(value, field.name))
            for field in dataclasses.fields(value)
            if isinstance(getattr(value, field.name), np.ndarray)
        }
        return dataclasses.replace(value, **arrays) if arrays else value
    return value


def same(one: Any, other: Any) -> bool:
    """Return whether two answers are equal, bit for bit in arrays."""
    if isinstance(one, np.ndarray) and isinstance(other, np.ndarray):
        return (one.shape, one.dtype, one.tobytes()) == (other.shape, other.dtype, other.tobytes())
    if type(one) is not type(other):
        return False
    if dataclasses.is_dataclass(one):
        fields = dataclasses.fields(one)
        return all(same(getattr(one, field.name), getattr(other, field.name)) for field in fields)
    if isinstance(one, Mapping):
        return list(one) == list(other) and all(same(one[key], other[key]) for key in one)
    if isinstance(one, list | tuple):
        return len(one) == len(other) and all(map(same, one, other))
    return bool(one == other) or pickle.dumps(one) == pickle.dumps(other)


def _reduce(origin: Origin) -> Callable[[Any], tuple[Any, ...]]:
    # A class that is made here cannot be found by its name; it is made again from the plugin's own.
    def reduce(self: Any) -> tuple[Any, ...]:
        return _restored, (type(self).__mro__[1], origin), vars(self)

    return reduce


def _restored(cls: type[Stage], origin: Origin) -> Stage:
    return object.__new__(guarded(cls, origin))
