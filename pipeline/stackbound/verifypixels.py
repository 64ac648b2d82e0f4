"""The part of a check that decodes: every region through zarr, compared with the log and, where given, the source."""

from __future__ import annotations

import threading
from collections import deque
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path
from typing import TYPE_CHECKING, Any

from stackbound.errors import IntegrityError, StackboundError, TileError
from stackbound.geometry import Box, whole_boxes
from stackbound.hashes import sha256_file, sha256_pixels
from stackbound.log import Record
from stackbound.numbers import decimal
from stackbound.regions import first_over, measure, read_back, read_source
from stackbound.reports import Problem
from stackbound.shard import read_shard
from stackbound.store import ARRAY
from stackbound.verifyfiles import file_fault

if TYPE_CHECKING:
    from stackbound.budget import Budget
    from stackbound.reports import Progress
    from stackbound.stages import OpenSource
    from stackbound.verifyfiles import Expected, Findings


@dataclass(frozen=True)
class Outcome:
    """What one region gave: its problems, the pixels decoded, their largest error where the source was compared."""

    problems: list[Problem]
    pixels: int = 0
    largest: int | float = 0


class PixelCheck:
    """Check the shards of a store and what they decode to.

    Parameters
    ----------
    store : Path
        The store.
    expected : Expected
        What should be there.
    findings : Findings
        Where problems go.
    source : OpenSource or None
        The source, to measure the errors again.
    through_zarr : bool
        Whether the array's metadata are fit for zarr; without, tiles are decoded one by one, to find the damaged ones.
    """

    def __init__(
        self, store: Path, expected: Expected, findings: Findings, source: OpenSource | None, through_zarr: bool
    ) -> None:
        assert expected.info is not None
        assert expected.grid is not None
        assert expected.promise is not None
        self.store, self.expected, self.findings, self.source = store, expected, findings, source
        self.info, self.grid, self.promise = expected.info, expected.grid, expected.promise
        self.array = self._open() if through_zarr else None
        self._reading = threading.Lock()
        self._regions_by_hash = {record.get("file_sha256"): index for index, record in expected.regions.items()}

    def run(self, limits: Budget, progress: Progress) -> tuple[int, str | None]:
        """Check all regions; return the number of pixels decoded and the largest error known."""
        import zarr

        pixels, largest = 0, Fraction(0)
        infinite = False
        waiting = iter(range(self.expected.count))
        running: deque[Future[Outcome]] = deque()
        progress.start("verifying", sum(self.expected.place(i)[0].pixels for i in range(self.expected.count)))
        with (
            zarr.config.set({"async.concurrency": limits.reads}),
            ThreadPoolExecutor(limits.regions, "verify") as pool,
        ):
            try:
                while True:
                    while len(running) < limits.regions and (index := next(waiting, None)) is not None:
                        running.append(pool.submit(self._check, index))
                    if not running:
                        break
                    outcome = running.popleft().result()
                    self.findings.problems.extend(outcome.problems)
                    pixels += outcome.pixels
                    infinite |= outcome.largest == float("inf")
                    largest = max(largest, Fraction(0 if infinite else outcome.largest))
                    progress.advance(outcome.pixels)
            finally:
                pool.shutdown(wait=True, cancel_futures=True)
                progress.end()
        self._say(pixels)
        if self.source is not None:
            return pixels, "inf" if infinite else decimal(largest)
        return pixels, self.expected.largest_error if self.expected.intact else None

    def _open(self) -> Any:
        import zarr

        try:
            return zarr.open_array(self.store / ARRAY, mode="r")
        except Exception as error:  # noqa: BLE001  # zarr raises many kinds for metadata that are not what they should be
            self.findings.problem(f"{ARRAY}/zarr.json", f"zarr cannot open the array ({error})")
            return None

    def _say(self, pixels: int) -> None:
        checks = self.findings.checks
        checks.append(f"Shards: each of {self.expected.count} against its hash, then decoded ({pixels} pixels).")
        if self.expected.regions:
            checks.append(
                "Decoded pixels: by hash, against those that were compared with the source when it was stored."
            )
        if self.source is not None:
            checks.append(
                "Source: every pixel compared with the decoded one again, and with the hash of the source then."
            )

    # ------------------------------------------------------------------------------------------------- one region

    def _check(self, index: int) -> Outcome:
        box, name = self.expected.place(index)
        record = self.expected.regions.get(index)
        where = f"{name}, pixels {box}"
        path = self.store / name
        if not path.is_file():
            return Outcome([Problem("the shard is missing; zarr would read zeros here", where)])
        problems: list[Problem] = []
        if record is not None:
            fault = file_fault(path, record, "file_bytes", "file_sha256")
            if fault is not None:
                other = self._other_region(path, index)
                problems += [Problem(other, where)] if other else self._damage(path, box, name, fault)
        if self.array is None:
            if not problems:
                problems += self._damaged_tiles(path, box, name)
            return Outcome(problems)
        try:
            decoded = read_back(self.array, box)
        except IntegrityError as error:
            return Outcome(problems or self._damage(path, box, name, error.what))
        if record is not None and not problems and sha256_pixels(decoded) != record.get("decoded_sha256"):
            problems.append(Problem("what decodes today is not what was compared with the source then", where))
        largest: int | float = 0
        if self.source is not None:
            more, largest = self._compare(decoded, box, where, record)
            problems += more
        return Outcome(problems, box.pixels, largest)

    def _compare(self, decoded: Any, box: Box, where: str, record: Record | None) -> tuple[list[Problem], int | float]:
        assert self.source is not None
        with self._reading:
            original = read_source(self.source, self.info, box)
        problems = []
        if record is not None and sha256_pixels(original) != record.get("source_sha256"):
            problems.append(Problem("the source given has other pixels here than the one that was compressed", where))
        errors, _, outside = measure(original, decoded, box, self.promise)
        if outside:
            first = first_over(original, decoded, box, self.promise)
            problems.append(Problem(f"{outside} pixels are outside their tolerance, the first at {first}", where))
        return problems, errors.largest

    def _other_region(self, path: Path, index: int) -> str | None:
        other = self._regions_by_hash.get(sha256_file(path), index)
        return None if other == index else f"the file holds the shard of pixels {self.expected.place(other)[0]}"

    def _damage(self, path: Path, box: Box, name: str, what: str) -> list[Problem]:
        """Return one problem for each damaged tile, or one for the whole file where no tile complains by itself."""
        return self._damaged_tiles(path, box, name) or [Problem(what, f"{name}, pixels {box}")]

    def _damaged_tiles(self, path: Path, box: Box, name: str) -> list[Problem]:
        from stackbound.tilecodec import decode

        tiles = whole_boxes(box.start, self.grid.region, self.grid.tile)
        try:
            payloads = read_shard(path.read_bytes(), len(tiles))
        except StackboundError as error:
            return [Problem(error.what, f"{name}, pixels {box}")]
        except OSError as error:
            return [Problem(f"the file cannot be read ({error.strerror})", f"{name}, pixels {box}")]
        problems = []
        for tile, payload in zip(tiles, payloads, strict=True):
            if any(a >= n for a, n in zip(tile.start, self.info.shape, strict=True)):
                continue
            stop = tuple(min(b, n) for b, n in zip(tile.stop, self.info.shape, strict=True))
            where = f"{name}, pixels {Box(tile.start, stop)}"
            if payload is None:
                problems.append(Problem("the tile is missing; zarr would read zeros here", where))
                continue
            try:
                decode(payload, self.grid.tile, self.info.dtype)
            except TileError as error:
                problems.append(Problem(error.what, where))
        return problems
