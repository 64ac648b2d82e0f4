"""The whole command beside the codec alone, growth from 30 MB to 3 GB, and the memory ceiling.

    python tests/benchmarks/whole.py FOLDER [--sizes 30MB,300MB,3GB] [--memory 600MiB]

For each size a synthetic light-sheet stack is written as an uncompressed OME-TIFF (kept in FOLDER for the next time)
and compressed by the command, which verifies it; then one plane is read from the store. The codec alone codes and
decodes tiles of the same stack in memory in as many threads as the command has workers.
"""

from __future__ import annotations

import argparse
import json
import shutil
import sys
import time
from concurrent.futures import ThreadPoolExecutor
from dataclasses import asdict, dataclass, replace
from functools import lru_cache
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parent))

import numpy as np
from numpy.typing import NDArray
from process import STACKBOUND, run
from stackbound.config import build, read_config
from stackbound.environment import cpus, parse_size
from stackbound.geometry import whole_boxes
from stackbound.regions import cut_tile
from stackbound.sample import sample_tiles
from stackbound.sources import open_source
from stackbound.tilecodec import TileCoder, decode
from stackbound_synthetic import SyntheticStack, light_sheet, write_ome_tiff
from stacks import InMemory, Stack
from threadpoolctl import threadpool_limits

TOLERANCE = 2
PLANE = (1024, 1024)
PERIOD = 16
"""Planes after which the stack repeats itself: no coder looks that far, and 3 GB are made in seconds."""
TINY = (2, 64, 64)
"""A stack so small that the memory it takes is that of the interpreter and the libraries."""
TINY_STORE = "tiny.ome.zarr"


class Repeated(SyntheticStack):
    """A synthetic stack of any depth whose planes, noise included, repeat along z."""

    def plane(self, channel: int, z: int) -> NDArray[Any]:
        """Return the recorded plane at `z` modulo the period."""
        return recorded(replace(self, depth=PERIOD), channel, z % PERIOD)


@lru_cache(maxsize=2 * PERIOD)
def recorded(stack: SyntheticStack, channel: int, z: int) -> NDArray[Any]:
    """Return a plane and keep it for the next period."""
    return SyntheticStack.plane(stack, channel, z)


@dataclass(frozen=True)
class Whole:
    """What the command took for one stack; times in seconds, sizes in bytes."""

    pixels: int
    source_bytes: int
    store_bytes: int
    wall: float
    cpu: float
    peak: int
    """Resident size of the process, all threads."""
    above_libraries: int
    """The same, less what a tiny stack takes with the same options: interpreter, libraries, compiled kernels."""
    verify_wall: float
    verify_above_libraries: int
    plane_cpu: float
    """CPU seconds for opening the store and reading one plane of it, interpreter and imports apart."""
    plane_bytes: int | None
    """Bytes read for it, where the system counts them (Linux)."""
    encode_wall: float
    """Coding the same tiles in memory, planning included, by as many threads."""
    codec_wall: float
    """Coding and decoding them; the command does both, as it compares what the disk holds."""
    codec_cpu: float


def main(arguments: list[str] | None = None) -> int:
    """Measure all sizes; print a table and write whole.json."""
    options = parse(arguments)
    options.folder.mkdir(parents=True, exist_ok=True)
    memory = ["--memory", options.memory, "--workers", str(options.workers)]
    tiny = options.folder / "tiny.ome.tif"
    write_once(tiny, light_sheet(TINY))
    store = options.folder / TINY_STORE
    compress(tiny, store, memory)  # compiles what is not yet cached
    base = compress(tiny, store, memory).peak
    base_verify = run([STACKBOUND, "verify", str(store)]).peak
    print(f"interpreter, libraries, kernels alone: compress {mib(base)} MiB, verify {mib(base_verify)} MiB")
    print(
        f"{'pixels':>9}{'wall us/px':>12}{'cpu us/px':>11}{'ratio':>7}{'peak MiB':>10}{'own MiB':>9}{'verify own':>12}"
        f"{'plane s':>9}{'plane MB':>10}   the codec's share of the wall time (coding alone), of the CPU time"
    )
    found = []
    for size in options.sizes:
        result = measure(options.folder, size, memory, options.workers, base, base_verify)
        print(line(result), flush=True)
        found.append(result)
    threads = two_threads(options.folder, options.sizes[0])
    print(f"coding and decoding in memory: two threads are {threads:.2f} times as fast as one")
    content = {
        "two_threads": threads,
        "memory": options.memory,
        "workers": options.workers,
        "libraries": base,
        "sizes": [asdict(f) for f in found],
    }
    (options.folder / "whole.json").write_text(json.dumps(content, indent=1) + "\n", encoding="utf-8", newline="\n")
    over = [f for f in found if f.above_libraries > parse_size(options.memory)]
    for f in over:
        print(f"ABOVE THE CEILING of {options.memory}: {mib(f.above_libraries)} MiB for {f.source_bytes / 1e6:.0f} MB")
    return 3 if over else 0


def parse(arguments: list[str] | None) -> argparse.Namespace:
    """Read the command line."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("folder", type=Path, help="where stacks and stores go; needs three times the largest size")
    parser.add_argument("--sizes", default="30MB,300MB,3GB", help="bytes of pixels [%(default)s]")
    parser.add_argument("--memory", default="600MiB", help="ceiling given to the command [%(default)s]")
    parser.add_argument("--workers", type=int, default=cpus(), help="threads [%(default)s]")
    options = parser.parse_args(arguments)
    options.sizes = [parse_size(size) for size in options.sizes.split(",")]
    return options


def measure(folder: Path, size: int, memory: list[str], workers: int, base: int, base_verify: int) -> Whole:
    """Measure the command, the verification, a plane and the codec for one size."""
    depth = max(1, round(size / (2 * 2 * PLANE[0] * PLANE[1])))
    one = light_sheet((depth, *PLANE))
    stack = Repeated(one.scene, one.camera, depth, one.seed, one.name)
    source, store = folder / stack_name(size), folder / "store.ome.zarr"
    write_once(source, stack)
    warm(source)
    used = compress(source, store, memory)
    report = json.loads(used.output)
    checked = run([STACKBOUND, "verify", str(store), "--json"])
    encode_wall, codec_wall, codec_cpu = codec_alone(stack.shape, source, workers)
    plane_cpu, plane_bytes = read_plane(store, folder / TINY_STORE)
    return Whole(
        pixels=int(np.prod(stack.shape)),
        source_bytes=report["source_bytes"],
        store_bytes=report["store_bytes"],
        wall=used.wall,
        cpu=used.cpu,
        peak=used.peak,
        above_libraries=max(0, used.peak - base),
        verify_wall=checked.wall,
        verify_above_libraries=max(0, checked.peak - base_verify),
        plane_cpu=plane_cpu,
        plane_bytes=plane_bytes,
        encode_wall=encode_wall,
        codec_wall=codec_wall,
        codec_cpu=codec_cpu,
    )


def line(w: Whole) -> str:
    """Return one row of the table."""
    per = w.pixels / 1e6
    read = "?" if w.plane_bytes is None else f"{w.plane_bytes / 1e6:.2f}"
    return (
        f"{per:8.0f}M{w.wall / per:12.4f}{w.cpu / per:11.4f}{w.source_bytes / w.store_bytes:7.2f}{mib(w.peak):>10}"
        f"{mib(w.above_libraries):>9}{mib(w.verify_above_libraries):>12}{w.plane_cpu:9.3f}{read:>10}"
        f"   {w.codec_wall / w.wall:.0%} ({w.encode_wall / w.wall:.0%}), {w.codec_cpu / w.cpu:.0%}"
    )


def mib(size: int) -> str:
    """Return a size in mebibytes."""
    return f"{size / 2**20:.0f}"


def write_once(path: Path, stack: SyntheticStack) -> None:
    """Write the stack unless the file is there from an earlier time, whole."""
    wanted = int(np.prod(stack.shape)) * stack.dtype.itemsize
    if path.exists() and path.stat().st_size >= wanted:
        return
    path.unlink(missing_ok=True)
    write_ome_tiff(path, stack)


def warm(path: Path) -> None:
    """Read a file once, so that the system's cache holds it where memory allows."""
    with path.open("rb") as file:
        while file.read(1 << 24):
            pass


def compress(source: Path, store: Path, memory: list[str]) -> Any:
    """Run the command into a fresh store."""
    if store.exists():
        shutil.rmtree(store)
    return run([STACKBOUND, "compress", str(source), str(store), "--tolerance", str(TOLERANCE), *memory, "--json"])


def stack_name(size: int) -> str:
    """Return the file name of the synthetic stack of a size."""
    return f"{size // 10**6}MB.ome.tif"


def two_threads(folder: Path, size: int) -> float:
    """Return how many times faster two threads code and decode than one, both best of three in turn."""
    source = folder / stack_name(size)
    with open_source(source) as opened:
        shape = opened.info.shape
    pairs = [[codec_alone(shape, source, workers)[1] for workers in (1, 2)] for _ in range(3)]
    one, two = (min(times) for times in zip(*pairs, strict=True))
    return float(one / two)


READ_PLANE = """
import pathlib, sys, time, stackbound
counter = pathlib.Path("/proc/self/io")
def count():
    return int(counter.read_text().split()[1]) if counter.exists() else None
stackbound.open(sys.argv[2])[0, 0, :1, :1]  # imports, and compiled kernels from their cache
before, began = count(), time.process_time()
stack = stackbound.open(sys.argv[1])
plane = stack[0, stack.shape[1] // 2]
took, after = time.process_time() - began, count()
print(took, -1 if after is None else after - before)
"""


def read_plane(store: Path, warm_up: Path) -> tuple[float, int | None]:
    """Return CPU seconds and bytes for opening a store and reading a plane in the middle; `warm_up` is another."""
    took, count = run([sys.executable, "-c", READ_PLANE, str(store), str(warm_up)]).output.split()
    return float(took), None if count == "-1" else int(count)


def codec_alone(shape: tuple[int, ...], source: Path, workers: int, most: int = 64 << 20) -> tuple[float, float, float]:
    """Return wall seconds for coding, wall and CPU seconds for coding and decoding.

    They are measured on up to `most` pixels in memory and scaled to the whole stack of `shape`.
    """
    with open_source(source) as opened, threadpool_limits(1):
        info = opened.info
        depth = max(1, min(shape[1], most // int(np.prod(PLANE)) // 2))
        stop = (*info.shape[:-3], depth, *info.shape[-2:])
        pixels = opened.read((0,) * len(stop), stop)
    pipeline = build(read_config(None, tolerance=str(TOLERANCE)))
    part = Stack("part", type(info)(info.kind, info.axes, pixels.shape, pixels.dtype), pixels)
    grid = pipeline.tile.grid(part.info)
    boxes = whole_boxes((0,) * pixels.ndim, pixels.shape, grid.tile)
    outer = type(boxes[0])((0,) * pixels.ndim, pixels.shape)

    def work() -> float:
        began = time.perf_counter()
        sample = [tile for _, tile in sample_tiles(InMemory(part), part.info, grid)]
        coder = TileCoder(pipeline.predict, pipeline.encode).planned(sample, [TOLERANCE] * len(sample))
        with ThreadPoolExecutor(workers) as pool:
            payloads = list(pool.map(lambda box: coder.encode(cut_tile(pixels, outer, box), TOLERANCE), boxes))
            encoded = time.perf_counter() - began
            list(pool.map(lambda payload: decode(payload, grid.tile, pixels.dtype), payloads))
        return encoded

    work()  # compiles, and fills the caches
    scale = float(np.prod(shape)) / pixels.size
    wall, cpu = time.perf_counter(), time.process_time()
    encoded = work()
    return encoded * scale, (time.perf_counter() - wall) * scale, (time.process_time() - cpu) * scale


if __name__ == "__main__":
    sys.exit(main())
