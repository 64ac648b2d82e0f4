from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from stackbound.errors import PluginError, SourceError, UsageError
from stackbound.plugins import use_plugin
from stackbound.sources import expand_sources, natural_key, open_source


def test_natural_order_counts() -> None:
    """Plane 10 comes after plane 9, whatever the zeros in front."""
    assert ["p1", "p2", "p9", "p010", "p11"] == sorted(["p11", "p010", "p9", "p1", "p2"], key=natural_key)


def test_a_pattern_is_one_source_in_natural_order(tmp_path: Path) -> None:
    """A quoted pattern that matches several files is one source: its planes in natural order."""
    for number in (10, 2, 1):
        (tmp_path / f"p{number}.tif").write_bytes(b"x")

    found = expand_sources([str(tmp_path / "p*.tif")])

    assert [[tmp_path / "p1.tif", tmp_path / "p2.tif", tmp_path / "p10.tif"]] == found


def test_files_given_singly_stay_several_sources(tmp_path: Path) -> None:
    """Files and folders that are named one by one are one source each."""
    (tmp_path / "a.tif").write_bytes(b"x")
    (tmp_path / "planes").mkdir()

    words = [str(tmp_path / "a.tif"), str(tmp_path / "planes")]

    assert [Path(word) for word in words] == expand_sources(words)


def test_a_file_named_like_a_pattern_is_that_file(tmp_path: Path) -> None:
    """A name that exists is taken as it stands, even with brackets in it."""
    odd = tmp_path / "cell[1].npy"
    np.save(odd, np.zeros((20, 20), np.uint8))

    assert [odd] == expand_sources([str(odd)])


@pytest.mark.parametrize(("word", "said"), [("none.tif", "no such file"), ("none*.tif", "no file matches the pattern")])
def test_what_is_not_there_is_said(tmp_path: Path, word: str, said: str) -> None:
    """A missing file and a pattern without matches are errors that name the word."""
    with pytest.raises(SourceError, match=said) as caught:
        expand_sources([str(tmp_path / word)])

    assert str(tmp_path / word) == caught.value.where


def test_unknown_content_names_the_loaders(tmp_path: Path) -> None:
    """A file that no loader recognises is an error that names the loaders that were tried."""
    path = tmp_path / "notes.txt"
    path.write_text("nothing", encoding="utf-8")

    with pytest.raises(SourceError, match=r"\.txt.*tried: .*tiff.*npy"):
        open_source(path)


def test_an_unknown_object_names_its_type() -> None:
    """An object that no loader knows is refused by its type's name."""
    with pytest.raises(SourceError, match="object of type complex"):
        open_source(1j)


@pytest.mark.parametrize(
    ("make", "said"),
    [
        (lambda path: path.write_bytes(b""), "the file is empty"),
        (lambda path: path.mkdir(), "the folder is empty"),
        (lambda path: None, "no such file or folder"),
    ],
)
def test_nothing_to_open_is_said(tmp_path: Path, make: object, said: str) -> None:
    """An empty file, an empty folder and a missing path each have their own message."""
    path = tmp_path / "x.tif"
    make(path)  # type: ignore[operator]

    with pytest.raises(SourceError, match=said):
        open_source(path)


@pytest.mark.parametrize(
    ("axes", "said"),
    [
        ("qyx", "'q', which is none of t, c, z, y, x"),
        ("zzyx", "names an axis twice"),
        ("zty", "needs y and x"),
        ("tczyx", "names 5 axes, but the source stores 3"),
    ],
)
def test_axes_that_make_no_sense_are_refused(tmp_path: Path, axes: str, said: str) -> None:
    """The user's axes must be known letters, each once, with y and x, one per stored axis."""
    path = tmp_path / "a.npy"
    np.save(path, np.zeros((5, 20, 20), np.uint8))

    with pytest.raises(UsageError, match=said):
        open_source(path, axes=axes)


def test_a_loader_can_be_named(tmp_path: Path) -> None:
    """A named loader opens the source whatever its name looks like."""
    path = tmp_path / "a.dat"
    np.save(tmp_path / "a.npy", np.zeros((20, 20), np.uint8))
    (tmp_path / "a.npy").rename(path)

    with open_source(path, load="npy") as source:
        assert "yx" == source.info.axes


@pytest.mark.usefixtures("fresh_registry")
def test_a_loader_of_others_that_raises_is_named(tmp_path: Path) -> None:
    """A plugin's loader that raises is named with where it comes from; it does not take the program down."""
    plugin = tmp_path / "odd_loader.py"
    plugin.write_text(
        """
from stackbound import hookimpl
from stackbound.stages import Load


class Odd(Load):
    name = "odd"

    def recognises(self, source):
        raise RuntimeError("made up")

    def open(self, source, *, axes=None):
        raise RuntimeError("made up")


@hookimpl
def stackbound_stages():
    return [Odd]
""",
        encoding="utf-8",
    )
    use_plugin(plugin)
    np.save(tmp_path / "a.npy", np.zeros((20, 20), np.uint8))

    with pytest.raises(PluginError, match=r"odd.*made up"):
        open_source(tmp_path / "a.npy", load="odd")
