"""What the functions of the public interface return; each knows how to become one JSON object."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any, Protocol

SCHEMA_VERSION = 1


class Progress(Protocol):
    """Told how far something is; called from one thread."""

    def start(self, what: str, total: int) -> None:
        """Begin something that takes `total` steps."""

    def advance(self, n: int) -> None:
        """Say that `n` more steps are done."""

    def end(self) -> None:
        """Say that it is over, done or not."""


class Quiet:
    """A `Progress` that nobody watches."""

    def start(self, what: str, total: int) -> None:
        """Do nothing."""

    def advance(self, n: int) -> None:
        """Do nothing."""

    def end(self) -> None:
        """Do nothing."""


class _Report:
    def to_json(self) -> dict[str, Any]:
        """Return the report as one JSON object."""
        values = {name: _plain(value) for name, value in asdict(self).items()}  # type: ignore[call-overload]
        return {"schema_version": SCHEMA_VERSION, **values}


def _plain(value: Any) -> Any:
    if isinstance(value, Path):
        return str(value)
    if isinstance(value, Mapping):
        return {key: _plain(entry) for key, entry in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(entry) for entry in value]
    return value


@dataclass(frozen=True)
class CompressReport(_Report):
    """What a run did, or, of a dry run, would do.

    Attributes
    ----------
    store : Path
        The finished store.
    kind, axes, shape, dtype : str, str, tuple, str
        The source.
    tile, region : tuple of int
        Shapes chosen for it.
    promise : mapping
        The tolerance as asked for (`value`, `unit`), in numbers (`stored`) and in `words`.
    source_bytes, store_bytes : int
        Bytes of the source's pixels, and of all files of the store (of a dry run: estimated from the sample).
    ratio, bits_per_pixel : float
        Of `source_bytes` to `store_bytes`, and bits of the store per pixel.
    regions, resumed : int
        Regions in all, and those kept from an interrupted run.
    pixels, pixels_changed, pixels_over : int
        Compared; different from their original; outside the tolerance (0).
    largest_error : str
        The largest error found in what was read back from disk. None of a dry run.
    figures : mapping of str to str
        Figures of the configuration by name.
    root : str or None
        Hash that stands for the whole store; to be kept elsewhere.
    workers, memory : int
        What the run was allowed to use.
    dry_run : bool
        Whether nothing was written.
    notes : tuple of str
        What the user should be told.
    """

    store: Path
    kind: str
    axes: str
    shape: tuple[int, ...]
    dtype: str
    tile: tuple[int, ...]
    region: tuple[int, ...]
    promise: Mapping[str, Any]
    source_bytes: int
    store_bytes: int
    ratio: float
    bits_per_pixel: float
    regions: int
    workers: int
    memory: int
    resumed: int = 0
    pixels: int = 0
    pixels_changed: int = 0
    pixels_over: int = 0
    largest_error: str | None = None
    figures: Mapping[str, str] = field(default_factory=dict)
    root: str | None = None
    dry_run: bool = False
    notes: tuple[str, ...] = ()


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong with a store.

    Attributes
    ----------
    what : str
        One sentence.
    where : str
        File inside the store, and the box of pixels where it is known.
    """

    what: str
    where: str

    def __str__(self) -> str:
        return f"{self.where}: {self.what}"


@dataclass(frozen=True)
class VerifyReport(_Report):
    """What a check of a store found.

    Attributes
    ----------
    store : Path
        The store.
    ok : bool
        Whether no problem was found.
    root : str or None
        Hash that stands for the whole store; None where the log is damaged.
    checks : tuple of str
        Which checks were made.
    problems : tuple of Problem
        Everything that is wrong, in the order in which it was found.
    notices : tuple of str
        What is worth knowing and no damage.
    cannot_prove : tuple of str
        What these checks say nothing about.
    against : bool
        Whether the source was compared again.
    regions, pixels : int
        Regions decoded, pixels in them.
    largest_error : str or None
        Largest error: measured again where `against`, otherwise as recorded in an intact log.
    promise : mapping or None
        The tolerance as recorded.
    """

    store: Path
    ok: bool
    root: str | None
    checks: tuple[str, ...]
    problems: tuple[Problem, ...]
    notices: tuple[str, ...]
    cannot_prove: tuple[str, ...]
    against: bool
    regions: int
    pixels: int
    largest_error: str | None
    promise: Mapping[str, Any] | None


@dataclass(frozen=True)
class RestoreReport(_Report):
    """What was restored.

    Attributes
    ----------
    store, target : Path
        From and to.
    kind : str
        Name of the save stage.
    axes, shape, dtype : str, tuple, str
        The stack.
    bytes : int
        Size of the target.
    notes : tuple of str
        What the user should be told.
    """

    store: Path
    target: Path
    kind: str
    axes: str
    shape: tuple[int, ...]
    dtype: str
    bytes: int
    notes: tuple[str, ...] = ()
