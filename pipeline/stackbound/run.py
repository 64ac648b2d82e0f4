"""One run, in the order of the data: check everything, plan, regions, totals, log, name.

Nothing is written before the configuration, the source and the target were checked; nothing stands under the target's
name before every region was decoded again from disk and compared with the source.
"""

from __future__ import annotations

import contextlib
import dataclasses
import math
from collections.abc import Iterable, Iterator, Mapping, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from stackbound import environment
from stackbound.budget import Budget, budget
from stackbound.config import Pipeline, PipelineConfig, build, read_config
from stackbound.errors import PluginError, SourceChangedError, StackboundError, TargetError, UsageError
from stackbound.extent import channel_ranges
from stackbound.finish import complete_store
from stackbound.geometry import counts
from stackbound.journal import Journal
from stackbound.plugins import registry, use_plugin
from stackbound.promise import resolve
from stackbound.regions import RegionWorker, Result, encode_tile
from stackbound.reports import CompressReport, Progress, Quiet
from stackbound.runfile import Clock, write_run_file
from stackbound.sample import sample_tiles
from stackbound.sourcefiles import FileHashes, check_unchanged
from stackbound.sources import open_source
from stackbound.stages import Grid, OpenSource, StackInfo
from stackbound.store import ARRAY, Description, log_header, side_files
from stackbound.target import Target, write_file
from stackbound.tilecodec import TileCoder

if TYPE_CHECKING:
    from stackbound.log import Record
    from stackbound.plugins import Origin


@dataclass(frozen=True)
class Plan:
    """Everything that was decided before the first byte is written."""

    description: Description
    coder: TileCoder
    pipeline: Pipeline
    budget: Budget

    @property
    def regions(self) -> int:
        """Number of regions."""
        return math.prod(counts(self.description.info.shape, self.description.grid.region))


def compress(
    source: object,
    store: str | Path,
    *,
    tolerance: object = None,
    unit: str | None = None,
    config: str | Path | Mapping[str, Any] | PipelineConfig | None = None,
    axes: str | None = None,
    scale: Sequence[float] | Mapping[str, float] | None = None,
    plugins: Sequence[str | Path] = (),
    workers: int | None = None,
    memory: int | str | None = None,
    resume: bool = False,
    overwrite: bool = False,
    dry_run: bool = False,
    progress: Progress | None = None,
    command: str | None = None,
) -> CompressReport:
    """Compress a stack into a store under a maximum error that holds for every pixel.

    Parameters
    ----------
    source : path, list of paths or array
        A file, a folder or list of single-plane files, or an array of two to five axes.
    store : path
        Where the store goes, by custom a name ending in ``.ome.zarr``.
    tolerance : int, float, str or decimal.Decimal, optional
        For every pixel, abs(original - decoded) <= tolerance; 0 stores without loss. Wins over that of `config`.
    unit : str, optional
        Unit of `tolerance`: "stored" (stored pixel values, the default) or "range" (a fraction of each channel's own
        range, largest minus smallest finite value).
    config : path, str or mapping, optional
        A TOML file, the name of a shipped recipe, or the same as a mapping.
    axes : str, optional
        The axes of the source in its own order, such as "zcyx", where it does not say or says wrong.
    scale : sequence of float or mapping of str to float, optional
        Distance between pixels, one for each axis of the stack or by axis name; wins over the source's own.
    plugins : sequence of path, optional
        Python files with stages.
    workers : int, optional
        Threads that encode tiles; by default the processors that this process may use.
    memory : int or str, optional
        Bytes for pixels and encoded tiles ("600MiB"), interpreter and libraries apart; by default half of what this
        process may use.
    resume : bool
        Continue an unfinished run of the same source, configuration and version; start where there is none.
    overwrite : bool
        Replace an existing store once the new one is complete and verified.
    dry_run : bool
        Check and plan, estimate the size from a sample, write nothing.
    progress : Progress, optional
        Told how far the run is, in pixels.
    command : str, optional
        The command line, for the record beside the store.

    Returns
    -------
    CompressReport

    Raises
    ------
    stackbound.errors.StackboundError
        See `stackbound.errors`; says what is left on disk.
    """
    clock = Clock()
    for file in plugins:
        use_plugin(file)
    pipeline = build(read_config(config, tolerance=tolerance, unit=unit))
    workers, memory = _limits(workers, memory)
    target = Target(Path(store))
    target.check(resume=resume, overwrite=overwrite)
    with _few_threads(), open_source(source, axes=axes, registry=registry()) as opened:
        target.check_source(file.path for file in opened.files)
        plan = _plan(opened, pipeline, scale, workers, memory, progress or Quiet())
        if dry_run:
            return _report(plan, target, workers, memory, dry_run=True, store_bytes=_estimated_bytes(plan, opened))
        with target.lock:
            target.recover()
            target.check(resume=resume, overwrite=overwrite)
            report = _run(opened, plan, target, resume, progress or Quiet(), workers, memory)
    write_run_file(target.run_json, clock, report, command)
    return report


# -------------------------------------------------------------------------------------------------------------- plan


def _limits(workers: int | None, memory: int | str | None) -> tuple[int, int]:
    if workers is not None and workers < 1:
        raise UsageError(f"{workers!r} workers cannot work.", where="--workers", remedy="Give 1 or more.")
    chosen = environment.cpus() if workers is None else workers
    return chosen, environment.memory() // 2 if memory is None else environment.parse_size(memory)


@contextlib.contextmanager
def _few_threads() -> Iterator[None]:
    # Tiles are what runs side by side; a matrix library that starts threads of its own only disturbs them.
    from threadpoolctl import threadpool_limits  # type: ignore[import-untyped]

    with threadpool_limits(limits=1, user_api="blas"):
        yield


def _plan(
    opened: OpenSource,
    pipeline: Pipeline,
    scale: Sequence[float] | Mapping[str, float] | None,
    workers: int,
    memory: int,
    progress: Progress,
) -> Plan:
    """Decide everything that the bytes of the store depend on, from the source and the configuration alone."""
    import stackbound

    info = _with_scale(opened.info, scale)
    grid = pipeline.tile.grid(info, opened)
    _check_grid(grid, info, pipeline.tile.name)
    limits = budget(memory, workers, info, grid)
    tolerance = pipeline.config.tolerance
    ranges = channel_ranges(opened, info, grid, progress) if tolerance.unit == "range" else None
    promise = resolve(tolerance, info, ranges)
    coder = TileCoder(pipeline.predict, pipeline.encode)
    progress.start("planning", 2)
    try:
        sample = sample_tiles(opened, info, grid)
        progress.advance(1)
        tolerances = [promise.for_tile(box.start, grid.tile) for box, _ in sample]
        coder = coder.planned([tile for _, tile in sample], tolerances)
        progress.advance(1)
    finally:
        progress.end()
    description = Description(
        version=stackbound.__version__,
        info=info,
        grid=grid,
        promise=promise,
        configuration=pipeline.config.record(),
        plan=dict(coder.plan),
        plugins=[_origin_record(key, origin) for key, origin in sorted(pipeline.origins.items())],
        plugin_files=_plugin_files(pipeline.origins.values()),
    )
    return Plan(description, coder, pipeline, limits)


def _plugin_files(origins: Iterable[Origin]) -> dict[str, bytes]:
    """Return the text of each plugin file by its name, as the store keeps it."""
    files: dict[str, bytes] = {}
    for origin in origins:
        if origin.file is None or origin.source is None:
            continue
        if files.setdefault(origin.file.name, origin.source) != origin.source:
            raise PluginError(
                "Two different plugin files of this name are in use, and a store keeps each by its name.",
                where=str(origin.file),
                remedy="Rename one of them.",
            )
    return files


def _origin_record(stage: str, origin: Origin) -> dict[str, Any]:
    record = {"stage": stage, "distribution": origin.distribution, "version": origin.version}
    return record if origin.sha256 is None else {**record, "sha256": origin.sha256}


def _with_scale(info: StackInfo, scale: Sequence[float] | Mapping[str, float] | None) -> StackInfo:
    if scale is None:
        return info
    if isinstance(scale, Mapping):
        known = dict(zip(info.axes, info.scale or (None,) * len(info.axes), strict=True))
        if set(scale) - set(known):
            raise UsageError(f"The stack has the axes {info.axes}, not {''.join(scale)}.", where="scale")
        factors = [{**known, **scale}[axis] for axis in info.axes]
    else:
        factors = list(scale)
    if len(factors) != len(info.axes):
        raise UsageError(f"{len(factors)} distances for the axes {info.axes}.", where="scale", remedy="Give one each.")
    for factor in factors:
        if factor is not None and not (math.isfinite(factor) and factor > 0):
            raise UsageError(f"{factor} is no distance between pixels.", where="scale")
    return dataclasses.replace(info, scale=tuple(None if factor is None else float(factor) for factor in factors))


def _check_grid(grid: Grid, info: StackInfo, stage: str) -> None:
    for shape in (grid.tile, grid.region):
        if len(shape) != len(info.shape) or min(shape) < 1:
            raise PluginError(f"The tile stage '{stage}' gave the shape {shape} for a stack of {info.shape}.")
    if any(region % tile for region, tile in zip(grid.region, grid.tile, strict=True)):
        raise PluginError(f"The tile stage '{stage}' gave regions {grid.region} that are no multiple of {grid.tile}.")


# --------------------------------------------------------------------------------------------------------------- run


def _run(
    opened: OpenSource, plan: Plan, target: Target, resume: bool, progress: Progress, workers: int, memory: int
) -> CompressReport:
    journal = Journal(target.journal)
    header = log_header(plan.description)
    kept = _kept_regions(target, journal, header) if resume else {}
    if not kept:
        target.discard()
    finished = dict(kept)
    try:
        files = side_files(plan.description)
        for name, data in files.items():
            write_file(target.partial / name, data)
        journal.start(header, kept)
        with FileHashes(opened.files) as hashes:
            results = _regions(opened, plan, target, journal, finished, progress)
            source_files = hashes.result()
        check_unchanged(opened.files)
        outcome = complete_store(target, plan.description, plan.pipeline.figures, header, results, files, source_files)
    except BaseException as error:
        journal.close()
        if not finished or isinstance(error, SourceChangedError):
            target.discard()
        elif isinstance(error, StackboundError) and error.left is None:
            error.left = f"{len(finished)} finished regions are kept in {target.partial.name} for --resume."
        raise
    journal.close()
    try:
        target.finish()
    except StackboundError as error:
        error.left = f"The complete and verified store is {target.partial.name}."
        raise
    return _report(plan, target, workers, memory, resumed=len(kept), **outcome)


def _kept_regions(target: Target, journal: Journal, header: Record) -> dict[int, Record]:
    """Return what an interrupted run left that can be kept; refuse one of something else."""
    if not target.partial.is_dir():
        return {}
    old, entries = journal.read()
    if old is not None and old != header:
        names = {"version": "version of stackbound", "plugins": "set of stages", "source": "source"}
        differing = [names.get(key, key) for key in header if old.get(key) != header[key]]
        raise TargetError(
            f"The unfinished run is of another {', '.join(differing) or 'kind'}.",
            where=str(target.partial),
            left="It was left as it is.",
            remedy="Use the same source, configuration and version, or start again with --overwrite.",
        )
    return entries


def _regions(
    opened: OpenSource, plan: Plan, target: Target, journal: Journal, finished: dict[int, Record], progress: Progress
) -> list[Result]:
    """Work through all regions, some at once; return the results in index order."""
    import zarr

    description = plan.description
    results: dict[int, Result] = {}
    progress.start("compressing", math.prod(description.info.shape))
    with (
        zarr.config.set({"async.concurrency": plan.budget.reads}),
        ThreadPoolExecutor(plan.budget.workers, "tile") as tiles,
        ThreadPoolExecutor(plan.budget.regions, "region") as regions,
    ):
        worker = RegionWorker(
            folder=target.partial,
            source=opened,
            info=description.info,
            grid=description.grid,
            promise=description.promise,
            coder=plan.coder,
            figures=plan.pipeline.figures,
            array=zarr.open_array(target.partial / ARRAY, mode="r"),
            tiles=tiles,
        )
        waiting = iter(range(plan.regions))
        running: set[Future[Result]] = set()
        try:
            while True:
                while len(running) < plan.budget.regions and (index := next(waiting, None)) is not None:
                    running.add(regions.submit(worker.work, index, finished.get(index)))
                if not running:
                    break
                done, running = wait(running, return_when=FIRST_COMPLETED)
                for future in done:
                    result = future.result()
                    entry = {key: result.record[key] for key in ("index", "source_sha256", "file_sha256")}
                    if finished.get(result.record["index"]) != entry:
                        journal.add(entry)
                        finished[result.record["index"]] = entry
                    results[result.record["index"]] = result
                    progress.advance(result.record["pixels"])
        finally:
            tiles.shutdown(wait=False, cancel_futures=True)
            regions.shutdown(wait=True, cancel_futures=True)
            progress.end()
    return [results[index] for index in range(plan.regions)]


# ------------------------------------------------------------------------------------------------------------ report


def _estimated_bytes(plan: Plan, opened: OpenSource) -> int:
    info, grid = plan.description.info, plan.description.grid
    sample = sample_tiles(opened, info, grid)
    coded = sum(len(encode_tile(plan.coder, plan.description.promise, tile, box)) for box, tile in sample)
    tiles = math.prod(counts(info.shape, grid.tile))
    return coded * tiles // len(sample) + sum(map(len, side_files(plan.description).values()))


def _report(plan: Plan, target: Target, workers: int, memory: int, **outcome: Any) -> CompressReport:
    description = plan.description
    info = description.info
    pixels = math.prod(info.shape)
    source_bytes = pixels * info.dtype.itemsize
    store_bytes = outcome["store_bytes"]
    return CompressReport(
        store=target.path,
        kind=info.kind,
        axes=info.axes,
        shape=info.shape,
        dtype=info.dtype.name,
        tile=description.grid.tile,
        region=description.grid.region,
        promise=description.promise.record(),
        source_bytes=source_bytes,
        ratio=source_bytes / store_bytes,
        bits_per_pixel=8 * store_bytes / pixels,
        regions=plan.regions,
        workers=workers,
        memory=memory,
        notes=info.notes,
        **outcome,
    )
