"""How long the command takes before it does anything: its help, and the first coded tile.

    python tests/benchmarks/startup.py

Wall times as multiples of what this interpreter needs to do nothing; the best of several runs in turn.
"""

from __future__ import annotations

import sys
import tempfile
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent))

from process import STACKBOUND, run
from stackbound_synthetic import light_sheet, write_ome_tiff

REPEAT = 5

# The command with a stop-watch: prints the seconds from the start of the process to the end of the first tile's coding.
FIRST_TILE = """
import os, sys, time
from stackbound import cli, tilecodec
encode = tilecodec.TileCoder.encode
def timed(self, *arguments, **options):
    encode(self, *arguments, **options)
    os.write(1, str(time.monotonic() - float(os.environ["BEGAN"])).encode())  # sys.stdout is not its own while it runs
    os._exit(0)
tilecodec.TileCoder.encode = timed
sys.exit(cli.run(sys.argv[1:]))
"""


def main() -> int:
    """Print the ratios."""
    nothing = best([sys.executable, "-c", "pass"])
    help_ = best([STACKBOUND, "--help"])
    print(f"python -c pass: {nothing * 1e3:.0f} ms; stackbound --help: {help_ / nothing:.1f} times that, {help_:.3f} s")
    with tempfile.TemporaryDirectory() as folder:
        source = Path(folder) / "small.ome.tif"
        write_ome_tiff(source, light_sheet((4, 512, 512)))
        command = [
            STACKBOUND,
            "compress",
            str(source),
            str(Path(folder) / "s.ome.zarr"),
            "--tolerance",
            "2",
            "--overwrite",
        ]
        run(command)  # compiles the kernels where they are not cached
        tile = min(first_tile(command[1:]) for _ in range(REPEAT))
        small = best(command)
        fresh = {"NUMBA_CACHE_DIR": str(Path(folder) / "cache")}
        first = run(command, fresh).wall
    print(f"from the command to the first coded tile: {tile / nothing:.0f} times, {tile:.2f} s")
    print(f"a stack of 4 MB from the command to a verified store: {small / nothing:.0f} times, {small:.2f} s")
    print(f"the same with no kernel compiled yet: {first / nothing:.0f} times, {first:.1f} s")
    return 0


def first_tile(arguments: list[str]) -> float:
    """Return the seconds from the start of the command to its first coded tile."""
    command = [sys.executable, "-c", FIRST_TILE, *arguments]
    return float(run(command, {"BEGAN": repr(time.monotonic())}).output)


def best(command: list[str]) -> float:
    """Return the shortest wall time of a command, in seconds."""
    return min(run(command).wall for _ in range(REPEAT))


if __name__ == "__main__":
    sys.exit(main())
