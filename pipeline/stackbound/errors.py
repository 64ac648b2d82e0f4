"""The errors of stackbound, each also a standard exception, each with the exit code of the command line.

::

    StackboundError
    ├── UsageError        (ValueError)    2  an option, a configuration or a tolerance cannot be used
    │   └── ConfigError                      a configuration file or recipe; carries the TOML path
    ├── SourceError       (ValueError)    2  a source is missing, damaged, unsupported or ambiguous
    │   └── SourceChangedError               a source changed while it was read
    ├── TargetError       (OSError)       2  a target exists, is locked or cannot be written
    ├── PluginError       (RuntimeError)  2  a stage is missing, broken or breaks its contract
    └── IntegrityError    (ValueError)    3  stored bytes or a promise do not hold
        ├── TileError                        the bytes of one tile
        └── PromiseError                     a pixel outside its tolerance

Anything else that escapes is a fault of the program itself (exit code 1).
"""

from __future__ import annotations


class StackboundError(Exception):
    """Base of the family: what happened, where, what is left on disk, and what to do.

    Parameters
    ----------
    what : str
        One sentence that says what is wrong.
    where : str, optional
        File, plane, tile, option or TOML path.
    left : str, optional
        What is on disk now, where that is not "nothing new".
    remedy : str, optional
        What the user can do.
    """

    exit_code = 2

    def __init__(
        self, what: str, *, where: str | None = None, left: str | None = None, remedy: str | None = None
    ) -> None:
        self.what = what
        self.where = where
        self.left = left
        self.remedy = remedy
        super().__init__(what)

    def __str__(self) -> str:
        head = f"{self.where}: {self.what}" if self.where else self.what
        return " ".join(_sentence(part) for part in (head, self.left, self.remedy) if part)

    def at(self, where: str) -> StackboundError:
        """Return this error with `where` put before the place that it already names."""
        self.where = f"{where}, {self.where}" if self.where else where
        return self

    def __reduce__(self) -> tuple[object, ...]:
        # Keyword-only arguments: the default would call the class with `args` alone and lose the place (process pools).
        return (_rebuild, (type(self), self.what, self.where, self.left, self.remedy))


def _sentence(text: str) -> str:
    return text if text[-1] in ".?!" else f"{text}."


def _rebuild(
    cls: type[StackboundError], what: str, where: str | None, left: str | None, remedy: str | None
) -> StackboundError:
    return cls(what, where=where, left=left, remedy=remedy)


class UsageError(StackboundError, ValueError):
    """An option, a configuration or a tolerance cannot be used."""


class ConfigError(UsageError):
    """A configuration file or a recipe is wrong; `where` is the file and the TOML path."""


class SourceError(StackboundError, ValueError):
    """A source is missing, damaged, unsupported or ambiguous."""


class SourceChangedError(SourceError):
    """A source changed while it was read."""


class TargetError(StackboundError, OSError):
    """A target exists already, is locked by another run or cannot be written."""


class PluginError(StackboundError, RuntimeError):
    """A stage is missing, failed to load, raised, or broke its contract."""


class IntegrityError(StackboundError, ValueError):
    """Stored bytes are not what they were, or a promise does not hold."""

    exit_code = 3


class TileError(IntegrityError):
    """The bytes of one tile are damaged, or would decode to other pixels."""


class PromiseError(IntegrityError):
    """A decoded pixel lies outside its tolerance."""
