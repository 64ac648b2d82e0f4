"""The conformance suite finds what is wrong and nothing else; new projects pass it."""

from __future__ import annotations

import importlib
import itertools
import json
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from stackbound import cli
from stackbound.errors import TargetError, UsageError
from stackbound.newplugin import new_plugin
from stackbound.plugins import KINDS, registry
from stackbound.stages import Options, Quantize, Save, Transform, Verify
from stackbound.testing import assert_conforms, check_stage


def template(kind: str) -> type:
    return importlib.import_module(f"stackbound.templates.{kind}").MyStage


@pytest.mark.parametrize("kind", KINDS)
def test_every_template_keeps_its_contract(kind):
    """The stage from which a project of each kind starts has no finding."""
    assert_conforms(template(kind))


@pytest.mark.parametrize("kind", ["verify", "tile", "save", "load"])
def test_built_in_stages_keep_their_contract(kind):
    """Our own stages have no finding either (those that code are under test everywhere)."""
    for cls in registry().classes(kind):
        assert_conforms(cls)


# ------------------------------------------------------------------------------------------------- what it has to find


class Undocumented(Options):
    """Options."""

    number: int = 1


class Required(Options):
    """Options."""

    number: int
    """A number."""


class Good(Quantize):
    """Round."""

    name = "good"

    def indices(self, coefficients, steps, tolerance):
        return np.clip(np.rint(coefficients / steps), -(2**30), 2**30).astype(np.int32)


class Undescribed(Good):
    """Round."""

    Options = Undocumented


class NeedsOptions(Good):
    """Round."""

    Options = Required


class Changes(Good):
    """Round, in place."""

    def indices(self, coefficients, steps, tolerance):
        np.divide(coefficients, steps, out=coefficients)
        return np.clip(np.rint(coefficients), -(2**30), 2**30).astype(np.int32)


class Counts(Good):
    """Round, and count."""

    calls = itertools.count()

    def indices(self, coefficients, steps, tolerance):
        return super().indices(coefficients, steps, tolerance) + np.int32(next(self.calls))


class Views(Good):
    """Look at the bits."""

    def indices(self, coefficients, steps, tolerance):
        return coefficients.view(np.int32)


class WrongType(Good):
    """Round to another type."""

    def indices(self, coefficients, steps, tolerance):
        return super().indices(coefficients, steps, tolerance).astype(np.int16)


class Prints(Good):
    """Round aloud."""

    def indices(self, coefficients, steps, tolerance):
        print("hello")
        return super().indices(coefficients, steps, tolerance)


class Raises(Good):
    """Round, but not everything."""

    def indices(self, coefficients, steps, tolerance):
        if not coefficients.any():
            raise ZeroDivisionError("nothing here")
        return super().indices(coefficients, steps, tolerance)


class NoWeight(Good):
    """Weigh nothing."""

    def weights(self, block):
        return np.zeros(block)


class HoldsALock(Good):
    """Keep something that cannot be pickled."""

    def __init__(self, options=None):
        super().__init__(options)
        self.file = open(os.devnull)  # noqa: PTH123, SIM115

    def __del__(self):
        self.file.close()


class Foreign(Transform):
    """Another basis than what takes the blocks apart."""

    name = "foreign"

    def basis(self, axis, length, fitted):
        return np.eye(length).astype(np.int64) * 2**14

    def forward(self, blocks, fitted):
        return np.ascontiguousarray(blocks[:, :, ::-1]) * np.float32(2)


class NumberFigure(Verify):
    """A figure that is no text."""

    name = "number"

    def measure(self, original, decoded, info):
        return 1

    def combine(self, parts, info):
        return sum(parts)


class LazySaver(Save):
    """Write nothing."""

    name = "lazy"
    suffixes = (".lazy",)

    def check(self, info):
        pass

    def write(self, target, source):
        pass


@pytest.mark.parametrize(
    ("cls", "finding"),
    [
        (Undescribed, "option 'number' has no description"),
        (NeedsOptions, "number have no default"),
        (Changes, "changes its input"),
        (Counts, "differently when it is asked again"),
        (Counts, "differently from several threads"),
        (Views, "view of its input"),
        (WrongType, "It returned int16"),
        (Prints, "prints to standard output"),
        (Raises, "ZeroDivisionError: nothing here"),
        (NoWeight, "not above zero"),
        (HoldsALock, "cannot be pickled"),
        (Foreign, "brings back only"),
        (NumberFigure, "Return the number as text"),
        (LazySaver, "left no file"),
        (dict, "not a stage class"),
    ],
    ids=lambda value: getattr(value, "__name__", value),
)
def test_a_broken_stage_is_found(cls, finding):
    """Each usual mistake is found and named, with how to mend it."""
    result = check_stage(cls)

    assert not result.ok
    assert any(finding in str(found) for found in result.findings), result.findings
    assert all(found.remedy for found in result.findings)


def test_a_good_stage_has_no_finding():
    """A plain quantizer passes, and its speed and size are told."""
    result = check_stage(Good)

    assert () == result.findings
    assert any("times as long" in note for note in result.notes)


@pytest.mark.parametrize(
    ("change", "finding"),
    [
        (("if status.st_size != ", "if 0 > "), "A truncated file"),
        (("return np.array(box, self.info.dtype)", "return box"), "int16|uint16|same memory"),
        (("return file.read(len(MAGIC)) == MAGIC", "return True"), "recognises what is not its own"),
        (("[tuple(map(slice, start, stop))]", "[tuple(map(slice, start, stop))][::-1]"), "is not that part"),
    ],
)
def test_a_broken_loader_is_found(tmp_path, change, finding):
    """A loader that reads wrongly, or trusts a truncated file, is found with an example file."""
    import re

    source = Path(sys.modules[template("load").__module__].__file__ or "").read_text(encoding="utf-8")
    assert change[0] in source
    names: dict[str, object] = {"__name__": "broken_loader"}
    exec(source.replace(*change), names)
    example = tmp_path / "example.my-stage"
    header = b'{"my-stage": 1, "shape": [8, 9, 10], "dtype": "uint16"}\n'
    example.write_bytes(header + np.arange(720, dtype="<u2").tobytes())
    result = check_stage(names["MyStage"], example=example)

    assert any(re.search(finding, str(found)) for found in result.findings), result.findings


def test_a_failing_check_fails_the_test():
    """`assert_conforms` raises with all findings."""
    with pytest.raises(AssertionError, match=r"(?s)quantize good breaks its contract.*int16"):
        assert_conforms(WrongType)


# ------------------------------------------------------------------------------------------------------- new projects


@pytest.mark.parametrize("kind", ["load", "verify"])
def test_a_new_project_passes_its_own_test(kind, tmp_path, monkeypatch, capfd):
    """What new-plugin writes is a project whose test passes as it is."""
    monkeypatch.chdir(tmp_path)
    assert 0 == cli.run(["new-plugin", kind, "my-thing"])
    assert "pip install ./my-thing" in capfd.readouterr().out
    project = tmp_path / "my-thing"
    environment = os.environ | {"PYTHONPATH": str(project)}
    command = [sys.executable, "-m", "pytest", "-q", "-p", "no:cacheprovider", "tests"]
    run = subprocess.run(command, cwd=project, env=environment, capture_output=True, text=True)

    assert 0 == run.returncode, run.stdout + run.stderr
    assert {"pyproject.toml", "README.md", "my_thing", "tests"} == {path.name for path in project.iterdir()}


@pytest.mark.parametrize("kind", KINDS)
def test_a_new_project_of_each_kind_is_a_plugin(kind, tmp_path, fresh_registry):
    """Each project's module can be loaded as a plugin file and offers the stage under its name."""
    project = new_plugin(kind, "my-thing", tmp_path / "project")
    from stackbound import use_plugin

    use_plugin(project / "my_thing" / "__init__.py")

    assert "MyThing" == registry().get(kind, "my-thing").__name__
    assert "my_stage" not in "".join(path.read_text(encoding="utf-8") for path in project.rglob("*.*"))


@pytest.mark.parametrize(
    ("kind", "name", "match"),
    [("quantise", "x", "no kind"), ("quantize", "My_Thing", "cannot name"), ("quantize", "uniform", "already")],
)
def test_a_project_that_makes_no_sense_is_refused(kind, name, match, tmp_path):
    """Unknown kinds, impossible names and names that are taken are refused before anything is written."""
    with pytest.raises(UsageError, match=match):
        new_plugin(kind, name, tmp_path / "project")
    assert [] == list(tmp_path.iterdir())


def test_an_existing_folder_is_left_alone(tmp_path):
    """A folder that exists is never written into."""
    (tmp_path / "project").mkdir()

    with pytest.raises(TargetError, match="exists already"):
        new_plugin("verify", "my-thing", tmp_path / "project")


def test_check_plugin_tells_by_its_exit_code(tmp_path, monkeypatch, capfd, fresh_registry):
    """check-plugin ends with 0 for a good file and 2 for one with findings; unknown names are suggested."""
    monkeypatch.chdir(tmp_path)
    project = new_plugin("verify", "my-thing", tmp_path / "project")
    module = project / "my_thing" / "__init__.py"

    assert 0 == cli.run(["check-plugin", str(module)])
    assert "keeps its contract" in capfd.readouterr().out
    text = module.read_text(encoding="utf-8").replace("str(sum(parts))", "sum(parts)").replace("my-thing", "my-other")
    (tmp_path / "other.py").write_text(text, encoding="utf-8", newline="\n")
    assert 2 == cli.run(["check-plugin", "other.py", "--json"])
    (result,) = json.loads(capfd.readouterr().out)["stages"]
    assert "as text" in result["findings"][0]["remedy"]
    assert 2 == cli.run(["check-plugin", "unifrom"])
    assert "did you mean 'uniform'" in capfd.readouterr().err
