"""From the words of `stackbound compress` to runs: one source into a store, or several into a folder of stores."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ._console import exit_code_of, message
from .errors import SourceError, StackboundError, TargetError, UsageError

if TYPE_CHECKING:
    from .reports import CompressReport, Progress

STORE_SUFFIXES = (".ome.zarr", ".zarr")
_SOURCE_SUFFIXES = (".ome.tiff", ".ome.tif", ".ome.zarr", ".tiff", ".tif", ".npy", ".zarr", ".dcm")


@dataclass(frozen=True)
class Job:
    """One source and the store that it becomes."""

    source: Any
    label: str
    store: Path


@dataclass(frozen=True)
class Result:
    """What became of one job: a report, an error with its exit code, or a store that was finished before."""

    job: Job
    report: CompressReport | None = None
    error: str = ""
    exit_code: int = 0

    @property
    def finished_before(self) -> bool:
        """Whether a run that was continued had finished this store already."""
        return self.report is None and self.exit_code == 0

    def to_json(self) -> dict[str, Any]:
        """Return the result as plain JSON values."""
        facts: dict[str, Any] = {"source": self.job.label, "store": str(self.job.store), "exit_code": self.exit_code}
        if self.report is not None:
            return facts | {"report": self.report.to_json()}
        return facts | ({"finished_before": True} if self.finished_before else {"error": self.error})


@dataclass(frozen=True)
class Outcome:
    """What became of several sources."""

    folder: Path
    results: tuple[Result, ...]

    @property
    def failed(self) -> int:
        """Number of sources that ended with an error."""
        return sum(result.exit_code != 0 for result in self.results)

    @property
    def exit_code(self) -> int:
        """The gravest of all exit codes: a broken promise, then a fault of the program, then unusable input."""
        codes = {result.exit_code for result in self.results}
        return next((code for code in (3, 1, 2) if code in codes), 0)

    def to_json(self) -> dict[str, Any]:
        """Return the summary as plain JSON values."""
        results = [result.to_json() for result in self.results]
        return {"schema_version": 1, "sources": len(results), "failed": self.failed, "results": results}

    def text(self) -> str:
        """Return the summary for people."""
        from . import _text

        return _text.batch(self)


def plan(words: Sequence[str], store: Path, *, overwrite: bool, resume: bool) -> tuple[list[Job], bool]:
    """Return the jobs that the words of the command line mean, and whether they are several sources for a folder.

    Raises
    ------
    stackbound.errors.UsageError, stackbound.errors.SourceError, stackbound.errors.TargetError
        No source, two sources for one store, or a target that cannot be a folder of stores; found before any run.
    """
    from .sources import expand_sources

    sources = expand_sources(words)
    if not sources:
        raise SourceError("Nothing matches.", where=" ".join(words))
    if len(sources) == 1:
        return [Job(sources[0], _label(sources[0]), store)], False
    if store.name.lower().endswith(STORE_SUFFIXES) or (store / "zarr.json").exists():
        raise UsageError(
            f"There are {len(sources)} sources, and each becomes a store of its own.",
            where=str(store),
            remedy="Name a folder for the stores; for one stack of many planes give a folder or a quoted pattern.",
        )
    if store.exists() and not store.is_dir():
        raise TargetError("The target is a file; several sources need a folder.", where=str(store))
    jobs = [Job(source, _label(source), store / f"{_stem(source)}.ome.zarr") for source in sources]
    _refuse_collisions(jobs)
    if not (overwrite or resume):
        taken = [job.store.name for job in jobs if job.store.exists()]
        if taken:
            raise TargetError(
                f"These stores exist already: {', '.join(taken)}.",
                where=str(store),
                remedy="Nothing was changed. Name another folder, or use --overwrite.",
            )
    return jobs, True


def _refuse_collisions(jobs: list[Job]) -> None:
    seen: dict[str, Job] = {}
    for job in jobs:
        # Compared without case: some file systems do not tell a.ome.zarr from A.ome.zarr.
        other = seen.setdefault(job.store.name.lower(), job)
        if other is not job:
            raise UsageError(
                f"{other.label} and {job.label} would both become {job.store.name}.",
                remedy="Compress them in separate runs.",
            )


def _label(source: Any) -> str:
    if isinstance(source, list | tuple):
        return f"{source[0]} and {len(source) - 1} more" if len(source) > 1 else str(source[0])
    return str(source)


def _stem(source: Any) -> str:
    first = source[0] if isinstance(source, list | tuple) else source
    name = Path(str(first)).name or "stack"
    for suffix in _SOURCE_SUFFIXES:
        if name.lower().endswith(suffix) and len(name) > len(suffix):
            return name[: -len(suffix)]
    return name


def compress_one(job: Job, options: Mapping[str, Any], progress: Progress) -> CompressReport:
    """Run one job with the options of the command line."""
    import stackbound

    try:
        return stackbound.compress(job.source, job.store, progress=progress, **options)
    except KeyboardInterrupt:
        progress.end()
        partial = job.store.with_name(job.store.name + ".partial")
        if partial.exists():
            message(f"What is finished is kept in {partial.name}; the same command with --resume continues there.")
        raise


def compress_all(jobs: list[Job], options: Mapping[str, Any], progress: Progress) -> Outcome:
    """Run all jobs, one after the other; a failure is told at once and the rest goes on."""
    results: list[Result] = []
    folder = jobs[0].store.parent
    if not options["dry_run"]:
        folder.mkdir(parents=True, exist_ok=True)
    for number, job in enumerate(jobs, start=1):
        message(f"[{number}/{len(jobs)}] {job.label}")
        try:
            if options["resume"] and not options["overwrite"] and _finished(job.store, options):
                results.append(Result(job))
            else:
                results.append(Result(job, compress_one(job, options, progress)))
        except StackboundError as error:
            results.append(Result(job, error=str(error), exit_code=exit_code_of(error)))
        except Exception as error:  # noqa: BLE001  # one bad source must not cost a night's run of the others
            results.append(Result(job, error=f"{type(error).__name__}: {error}", exit_code=exit_code_of(error)))
        finally:
            progress.end()
    return Outcome(folder, tuple(results))


def _finished(store: Path, options: Mapping[str, Any]) -> bool:
    """Return whether a store was finished with the same configuration by the same version."""
    import stackbound

    from .config import read_config
    from .inspect import is_store
    from .store import read_store

    if not is_store(store):
        return False
    for plugin in options["plugins"]:
        stackbound.use_plugin(plugin)
    config = read_config(options["config"], tolerance=options["tolerance"], unit=options["unit"])
    attributes = read_store(store).attributes
    return (attributes["configuration"], attributes["version"]) == (config.record(), stackbound.__version__)
