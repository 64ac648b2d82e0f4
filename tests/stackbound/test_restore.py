"""A store back to a file."""

import shutil

import numpy as np
import pytest
import stackbound
from stackbound.errors import SourceError, StackboundError, TargetError, TileError, UsageError


def test_npy(kept, tmp_path, pixels):
    """The restored file holds the decoded pixels, all of them."""
    report = stackbound.restore(kept[1], tmp_path / "again.npy")
    again = np.load(tmp_path / "again.npy")

    np.testing.assert_array_equal(np.asarray(stackbound.open(kept[1])), again)
    assert 4 == np.abs(again.astype(int) - pixels).max()
    assert ("npy", (tmp_path / "again.npy").stat().st_size) == (report.kind, report.bytes)
    assert ["again.npy"] == [path.name for path in tmp_path.iterdir()]


def test_the_ending_decides(kept, tmp_path):
    """The longest ending that fits names the format; an unknown one is refused with those that are known."""
    assert "ome-tiff" == stackbound.restore(kept[1], tmp_path / "a.ome.tif").kind
    assert "tiff" == stackbound.restore(kept[1], tmp_path / "a.TIF").kind
    with pytest.raises(UsageError, match=r"\.npy"):
        stackbound.restore(kept[1], tmp_path / "a.xyz")


def test_an_existing_file_is_kept(kept, tmp_path):
    """A file is replaced only when asked for; a folder never."""
    (tmp_path / "a.npy").write_bytes(b"mine")
    with pytest.raises(TargetError, match="--overwrite"):
        stackbound.restore(kept[1], tmp_path / "a.npy")
    assert b"mine" == (tmp_path / "a.npy").read_bytes()
    stackbound.restore(kept[1], tmp_path / "a.npy", overwrite=True)
    assert (6, 100, 120) == np.load(tmp_path / "a.npy").shape
    (tmp_path / "b.npy").mkdir()
    with pytest.raises(TargetError, match="folder"):
        stackbound.restore(kept[1], tmp_path / "b.npy", overwrite=True)


def test_a_target_inside_the_store_is_refused(kept):
    """Nothing is written into a store."""
    with pytest.raises(TargetError, match="inside the store"):
        stackbound.restore(kept[1], kept[1] / "a.npy")


def test_damage_stops_and_leaves_nothing(kept, tmp_path):
    """A damaged tile is found while it is read; no file is left, and an existing one stays."""
    shutil.copytree(kept[1], tmp_path / "s")
    shard = tmp_path / "s" / "0" / "c" / "1" / "1" / "1"
    data = bytearray(shard.read_bytes())
    data[5] ^= 1
    shard.write_bytes(data)
    (tmp_path / "a.npy").write_bytes(b"mine")
    with pytest.raises(TileError):
        stackbound.restore(tmp_path / "s", tmp_path / "a.npy", overwrite=True)

    assert b"mine" == (tmp_path / "a.npy").read_bytes()
    assert ["a.npy", "s"] == sorted(path.name for path in tmp_path.iterdir())


def test_a_missing_store_is_named(tmp_path):
    """A store that is not there is said to be so."""
    with pytest.raises(TargetError, match="no such store"):
        stackbound.restore(tmp_path / "s", tmp_path / "a.npy")


def test_metadata_come_back(tmp_path):
    """What the loader found comes back to the saver: axes, scale, units, OME-XML, headers."""
    tifffile = pytest.importorskip("tifffile")
    source = tmp_path / "a.ome.tif"
    pixels = np.random.default_rng(0).integers(0, 99, (2, 3, 40, 50), dtype=np.uint16)
    metadata = {"axes": "CZYX", "PhysicalSizeX": 0.2, "PhysicalSizeXUnit": "µm", "Channel": {"Name": ["a", "b"]}}
    tifffile.imwrite(source, pixels, ome=True, metadata=metadata)
    report = stackbound.compress(source, tmp_path / "s", tolerance=2)
    from stackbound.sources import open_source

    with open_source(source) as opened:
        before = opened.info
    after = stackbound.open(report.store).info

    assert before.ome_xml == after.ome_xml == (report.store / "OME" / "METADATA.ome.xml").read_bytes()
    assert (before.axes, before.shape, before.scale, before.units) == (
        after.axes,
        after.shape,
        after.scale,
        after.units,
    )
    assert dict(before.headers) == dict(after.headers)
    assert dict(before.attributes) == dict(after.attributes)
    assert before.channel_names == after.channel_names
    assert stackbound.verify(report.store, against=source).ok


def test_errors_of_a_saver_leave_nothing(kept, tmp_path, monkeypatch):
    """A saver that fails half-way leaves no file, whatever it raised."""
    from stackbound.plugins import registry

    saver = registry().get("save", "npy")
    for error in (RuntimeError("bug"), OSError(28, "disk full"), SourceError("x")):

        def failing(self, target, source, error=error):
            target.write_bytes(b"half")
            raise error

        monkeypatch.setattr(saver, "write", failing)
        with pytest.raises(StackboundError):
            stackbound.restore(kept[1], tmp_path / "a.npy")
        assert [] == list(tmp_path.iterdir())
