"""The demo runs the whole job and touches nothing that it did not make."""

import json
from pathlib import Path

import numpy as np
import pytest
import tifffile
from stackbound.demo import PICTURE, RECORD, RESTORED, SOURCE, STORE, DemoReport, demo
from stackbound.errors import TargetError

SHAPE = (3, 64, 80)


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> DemoReport:
    """Run the demo on a tiny stack, once for all tests that only look."""
    return demo(tmp_path_factory.mktemp("demo") / "here", shape=SHAPE)


def test_the_demo_makes_what_it_says(made: DemoReport) -> None:
    """All five results exist in the folder, and the figures in the report are those of the files."""
    source, restored = tifffile.imread(made.source), tifffile.imread(made.restored)
    error = np.abs(source.astype(int) - restored.astype(int))

    assert {path.name for path in made.folder.iterdir()} >= {SOURCE, STORE, RESTORED, PICTURE, RECORD}
    assert made.shape == source.shape == (2, *SHAPE)
    assert made.largest_error == error.max() <= made.tolerance
    assert made.pixels_changed == np.count_nonzero(error) > 0
    assert made.pixels_over == 0
    assert made.pixels == source.size
    assert made.root


def test_the_report_reads_as_text_and_as_json(made: DemoReport) -> None:
    """The lines name every result, and the JSON object survives a round trip."""
    text = "\n".join(made.lines())

    for path in (made.source, made.store, made.restored, made.picture):
        assert str(path) in text
    assert made.root in text
    assert json.loads(json.dumps(made.to_json()))["schema_version"] == 1


def test_an_unchanged_demo_is_replaced(tmp_path: Path) -> None:
    """Run again on its own folder, the demo starts afresh and makes the same store."""
    first = demo(tmp_path / "d", shape=SHAPE)
    second = demo(tmp_path / "d", shape=SHAPE)

    assert first.root == second.root


def test_a_folder_with_other_files_is_refused(tmp_path: Path) -> None:
    """A file of the user keeps the demo out, and stays."""
    (tmp_path / "mine.txt").write_text("mine", encoding="utf-8")
    with pytest.raises(TargetError, match="did not make"):
        demo(tmp_path, shape=SHAPE)

    assert [path.name for path in tmp_path.iterdir()] == ["mine.txt"]


@pytest.mark.parametrize("change", ["add", "edit", "remove"])
def test_a_changed_demo_is_refused(tmp_path: Path, change: str) -> None:
    """A file added to, edited in or missing from an earlier demo keeps a new one out, and everything stays."""
    demo(tmp_path / "d", shape=SHAPE)
    picture = tmp_path / "d" / PICTURE
    if change == "add":
        (tmp_path / "d" / "notes.txt").write_text("mine", encoding="utf-8")
    elif change == "edit":
        picture.write_bytes(b"mine")
    else:
        picture.unlink()
    before = sorted(path for path in (tmp_path / "d").rglob("*"))
    with pytest.raises(TargetError, match="changed since"):
        demo(tmp_path / "d", shape=SHAPE)

    assert sorted(path for path in (tmp_path / "d").rglob("*")) == before


def test_a_file_in_place_of_the_folder_is_refused(tmp_path: Path) -> None:
    """The demo does not replace a file by a folder."""
    (tmp_path / "file").write_text("mine", encoding="utf-8")
    with pytest.raises(TargetError, match="needs a folder"):
        demo(tmp_path / "file", shape=SHAPE)
