"""Compare stackbound with the near-lossless standard and with rounding + zstd on a folder of stacks.

    python tests/benchmarks/run.py FOLDER

prints a table and ratios, and writes benchmark.json, .md and .png into --out. Everything runs in turn in one
process on one core. Times are CPU times, so other work on the machine disturbs them little; compare them only within
one run.
"""

from __future__ import annotations

import argparse
import json
import platform
import sys
from collections.abc import Iterator
from importlib.metadata import version
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parent))

import report
import whole
from coders import Coder, NearLosslessStandard, RoundShuffleZstd, TileCodec
from compare import Measurement, compare, noise_tolerances, one_core
from stacks import Stack, find, load, synthetic


def main(arguments: list[str] | None = None) -> int:
    """Run the benchmark."""
    options = parse(arguments)
    if options.plugin:
        from stackbound.plugins import use_plugin

        for file in options.plugin:
            use_plugin(file)
    coders = chosen_coders(options)
    rows: list[Measurement] = []
    print("\n".join(report.table([])))
    with one_core() as core:
        for stack in chosen_stacks(options):
            new = measure(stack, coders, options)
            print("\n".join(list(report.table(new))[1:]), flush=True)
            rows += new
    found = report.summaries(rows)
    for lines in (report.summary_table(found), report.floor_table(rows)):
        print("\n" + "\n".join(lines))
    options.out.mkdir(parents=True, exist_ok=True)
    code = 3 if any(r.note.startswith("BROKEN") for r in rows) else 0
    more = {}
    if options.whole:
        print("\nthe whole command on synthetic stacks")
        code = max(code, whole.main([str(options.whole), "--sizes", "30MB,300MB,3GB" if options.growth else "30MB"]))
        more["whole"] = json.loads((options.whole / "whole.json").read_text(encoding="utf-8"))
    about = about_this_run(options, core)
    report.write_json(options.out / "benchmark.json", rows, about, summary=found, **more)
    text = "\n".join(report.markdown(rows, found, coders[0].name)) + "\n"
    (options.out / "benchmark.md").write_text(text, encoding="utf-8", newline="\n")
    report.plot(options.out / "benchmark.png", rows)
    return code


def parse(arguments: list[str] | None) -> argparse.Namespace:
    """Read the command line."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("folder", type=Path, help="each sub-folder or image file in it is one stack")
    parser.add_argument("--only", action="append", metavar="NAME", help="only this stack (may be repeated)")
    parser.add_argument("--synthetic", action="store_true", help="with --only: the synthetic camera stacks as well")
    parser.add_argument("--real-only", action="store_true", help="leave the synthetic camera stacks out")
    parser.add_argument(
        "--tolerances", default="0,0.5,1,2", metavar="M,M,...", help="multiples of the measured noise [%(default)s]"
    )
    parser.add_argument(
        "--noise", action="append", default=[], metavar="NAME=SIGMA", help="use this noise instead of the measured one"
    )
    parser.add_argument(
        "--extra",
        action="append",
        default=[],
        metavar="NAME=TOLERANCE",
        help="one more tolerance for a stack, in stored values or, with a trailing r, as a fraction of its range;"
        " outside the means",
    )
    parser.add_argument(
        "--config", action="append", default=[], metavar="FILE|NAME", help="measure this configuration as well"
    )
    parser.add_argument(
        "--stage",
        action="append",
        default=[],
        metavar="KIND=NAME[,KIND=NAME...]",
        help="measure the default configuration with these stages instead as well (quantize=mine,predict=transform)",
    )
    parser.add_argument(
        "--plugin", action="append", default=[], type=Path, metavar="FILE", help="load stages from FILE"
    )
    parser.add_argument("--repeat", type=int, default=3, help="repetitions; the best time counts [%(default)s]")
    parser.add_argument("--ours-only", action="store_true", help="leave the other coders out")
    parser.add_argument(
        "--whole", type=Path, metavar="FOLDER", help="measure the whole command too; stacks and stores go to FOLDER"
    )
    parser.add_argument("--growth", action="store_true", help="with --whole: from 30 MB to 3 GB; FOLDER needs 10 GB")
    parser.add_argument("--out", type=Path, default=Path("benchmark"), help="folder for JSON and plot [%(default)s]")
    options = parser.parse_args(arguments)
    options.multiples = [float(m) for m in options.tolerances.split(",")]
    options.noise = {name: float(value) for name, value in (word.rsplit("=", 1) for word in options.noise)}
    return options


def chosen_coders(options: argparse.Namespace) -> list[Coder]:
    """Return the default configuration, those asked for, and the coders that they are compared with."""
    coders: list[Coder] = [TileCodec("stackbound")]
    coders += [TileCodec(Path(config).stem, config) for config in options.config]
    for words in options.stage:
        stages = dict(word.split("=", 1) for word in words.split(","))
        coders.append(TileCodec(words, {kind: {"name": name} for kind, name in stages.items()}))
    return coders if options.ours_only else [*coders, NearLosslessStandard(), RoundShuffleZstd()]


def chosen_stacks(options: argparse.Namespace) -> Iterator[Stack]:
    """Yield the stacks of the folder, one in memory at a time, then the synthetic ones."""
    for path in find(options.folder):
        if not options.only or path.name in options.only:
            yield load(path)
    if options.synthetic or not (options.only or options.real_only):
        yield from synthetic()


def measure(stack: Stack, coders: list[Coder], options: argparse.Namespace) -> list[Measurement]:
    """Measure one stack at all its tolerances."""
    noise, tolerances = noise_tolerances(stack, options.multiples, options.noise.get(stack.name))
    for name, value in (word.rsplit("=", 1) for word in options.extra):
        if name == stack.name:
            span = float(stack.pixels.max()) - float(stack.pixels.min())
            tolerances.append((None, float(value[:-1]) * span if value.endswith("r") else float(value)))
    return compare(stack, coders, tolerances, noise=noise, repeat=options.repeat)


def about_this_run(options: argparse.Namespace, core: int | None) -> dict[str, Any]:
    """Return what someone needs to judge the figures."""
    return {
        "command": sys.argv[1:],
        "python": platform.python_version(),
        "processor": platform.machine(),
        "core": core,
        "repetitions": options.repeat,
        "versions": {name: version(name) for name in ("stackbound", "numpy", "numba", "pyjpegls", "zstandard")},
    }


if __name__ == "__main__":
    sys.exit(main())
