"""Write the golden store of a format version: run once per version, never again for one that was released.

``python tests/golden/make_store.py`` writes ``store-v<version>.zip`` beside this file and prints its root.
"""

from __future__ import annotations

import sys
import tempfile
import zipfile
from pathlib import Path

import numpy as np
import stackbound
from stackbound.tilecodec import VERSION
from stackbound_synthetic import light_sheet

HERE = Path(__file__).parent
GRID = {"name": "grid", "tile": [1, 2, 32, 64], "region": [1, 4, 64, 64]}


def main() -> None:
    """Compress a small stack whose ends lie inside tiles and inside regions."""
    path = HERE / f"store-v{VERSION}.zip"
    if path.exists():
        sys.exit(f"{path} exists; stores of a released version are kept as they are.")
    scene = light_sheet((6, 72, 90))
    pixels = np.stack([[scene.plane(channel, z) for z in range(6)] for channel in range(2)])
    with tempfile.TemporaryDirectory() as folder:
        store = Path(folder) / "store.ome.zarr"
        report = stackbound.compress(pixels, store, tolerance=3, axes="czyx", config={"tile": GRID})
        with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive:
            for file in sorted(store.rglob("*")):
                if file.is_file():
                    archive.write(file, file.relative_to(folder))
    sys.stdout.write(f"{report.root}\n")


if __name__ == "__main__":
    main()
