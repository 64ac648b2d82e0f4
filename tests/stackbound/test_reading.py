"""Stores in the hands of other programs."""

import subprocess
import sys
import warnings

import numpy as np
import pytest
import stackbound
import zarr
from stackbound import tilecodec
from stackbound.errors import TileError

CLUSTER = """
import sys, numpy, dask.array
from dask.distributed import Client, LocalCluster

if __name__ == "__main__":
    with LocalCluster(n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None) as cluster:
        with Client(cluster):
            stack = dask.array.from_zarr(sys.argv[1] + "/0")
            print(abs(stack.astype(int) - numpy.load(sys.argv[2])).max().compute())
"""

PROCESSES = """
import sys, numpy, stackbound

if __name__ == "__main__":
    stack = stackbound.open(sys.argv[1]).to_dask()
    source = numpy.load(sys.argv[2])
    print(abs(stack.astype(int) - source).max().compute(scheduler="processes", num_workers=2))
"""


@pytest.mark.parametrize("scheduler", ["sync", "threads"])
def test_dask(kept, pixels, scheduler):
    """Dask reads a store tile by tile."""
    stack = stackbound.open(kept[1]).to_dask()

    assert (2, 32, 32) == stack.chunksize
    assert 4 == abs(stack.astype(int) - pixels).max().compute(scheduler=scheduler)


@pytest.mark.slow
@pytest.mark.parametrize("script", [PROCESSES, CLUSTER], ids=["processes", "cluster"])
def test_dask_in_other_processes(kept, tmp_path, script):
    """Worker processes find the codec by themselves."""
    source, store, _ = kept
    file = tmp_path / "script.py"
    file.write_text(script, encoding="utf-8")
    done = subprocess.run(
        [sys.executable, str(file), str(store), str(source)], capture_output=True, text=True, check=False
    )

    assert "4" == done.stdout.strip(), done.stderr


def test_ome_zarr_validates(kept):
    """The store is an image of OME-Zarr 0.5 to an independent model, and zarr has nothing to complain of."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        from ome_zarr_models.v05 import Image
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        group = zarr.open_group(kept[1], mode="r")
        image = Image.from_zarr(group)
        members = dict(group.members())
    (multiscale,) = image.ome_attributes.multiscales

    assert {"0", "OME", "stackbound"} == set(members)
    assert ["z", "y", "x"] == [axis.name for axis in multiscale.axes]
    assert ("z", "y", "x") == group["0"].metadata.dimension_names


def test_channel_names_reach_viewers(tmp_path):
    """Names of channels stand where viewers of OME-Zarr look for them, with a window that shows something."""
    tifffile = pytest.importorskip("tifffile")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        from ome_zarr_models.v05 import Image
    stack = np.random.default_rng(0).integers(100, 900, (2, 40, 50), dtype=np.uint16)
    tifffile.imwrite(tmp_path / "a.ome.tif", stack, metadata={"axes": "CYX", "Channel": {"Name": ["nuclei", "actin"]}})
    report = stackbound.compress(tmp_path / "a.ome.tif", tmp_path / "s", tolerance=3)
    group = zarr.open_group(report.store, mode="r")
    channels = group.attrs["ome"]["omero"]["channels"]

    assert Image.from_zarr(group).ome_attributes.omero is not None
    assert ["nuclei", "actin"] == [channel["label"] for channel in channels]
    assert {"min": 0, "max": 65535, "start": stack.min(), "end": stack.max()} == channels[0]["window"]
    assert ("nuclei", "actin") == stackbound.open(report.store).channel_names


def test_a_patch_decodes_only_its_tiles(kept, monkeypatch):
    """Reading a patch decodes the tiles that it touches and no others."""
    decoded = []
    real = tilecodec.decode
    monkeypatch.setattr(tilecodec, "decode", lambda *args: decoded.append(1) or real(*args))
    array = zarr.open_array(kept[1] / "0", mode="r")
    array[1, 5:25, 40:60]
    assert 1 == len(decoded)
    array[1, 30:34, 62:66]

    assert 1 + 4 == len(decoded)


def test_a_damaged_tile_is_refused(kept, tmp_path):
    """A tile that changed on disk is not read as pixels; its neighbours still are."""
    import shutil

    shutil.copytree(kept[1], tmp_path / "s")
    shard = tmp_path / "s" / "0" / "c" / "0" / "0" / "0"
    data = bytearray(shard.read_bytes())
    data[5] ^= 1
    shard.write_bytes(data)
    array = zarr.open_array(tmp_path / "s" / "0", mode="r")
    with pytest.raises(TileError):
        array[0, 0, 0]
    with pytest.raises(TileError, match="s"):
        stackbound.open(tmp_path / "s")[0, 0, 0]

    np.testing.assert_array_equal(zarr.open_array(kept[1] / "0", mode="r")[3, 40:], array[3, 40:])


def test_numpy(kept, pixels):
    """An opened store indexes like an array and becomes one."""
    stack = stackbound.open(kept[1])
    whole = np.asarray(stack)

    assert 4 == np.abs(whole.astype(int) - pixels).max()
    np.testing.assert_array_equal(whole[2, 10:50:3, -7], stack[2, 10:50:3, -7])
    np.testing.assert_array_equal(whole[..., 5], stack[..., 5])
    assert (6, 3, pixels.size) == (len(stack), stack.ndim, stack.size)
    assert np.float32 == np.asarray(stack, dtype=np.float32).dtype
    assert "tolerance 4" in repr(stack)


def test_the_package_is_quick_to_import():
    """Importing stackbound loads neither numpy nor zarr nor numba; all its names are there."""
    script = "import sys, stackbound; print([m for m in ('numpy', 'zarr', 'numba', 'pydantic') if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)

    assert "[]" == done.stdout.strip()
    assert all(getattr(stackbound, name) is not None for name in stackbound.__all__)
    with pytest.raises(AttributeError):
        stackbound.nothing  # noqa: B018


def test_functions_win_over_modules_of_the_same_name():
    """Whoever imported the module first, `stackbound.verify` is the function."""
    import importlib

    for name in ("verify", "restore", "demo", "inspect"):
        importlib.import_module(f"stackbound.{name}")

        assert callable(getattr(stackbound, name))
