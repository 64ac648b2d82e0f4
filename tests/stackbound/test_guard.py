"""Third-party stages that misbehave: the promise holds, or the run ends with an error that names them."""

from __future__ import annotations

import json
import pickle
import sys

import numpy as np
import pytest
import stackbound
from stackbound import cli, use_plugin
from stackbound.config import build, read_config
from stackbound.errors import PluginError
from stackbound.plugins import registry

QUANTIZER = '''
import itertools
import sys
import time

import numpy as np

from stackbound import hookimpl
from stackbound.stages import Quantize, Transform

calls = itertools.count()


class Odd(Quantize):
    """A quantizer that misbehaves."""

    name = "odd"

    def indices(self, coefficients, steps, tolerance):
        """Answer."""
        nearest = np.rint(coefficients / steps)
        {body}


@hookimpl
def stackbound_stages():
    """Return the stage."""
    return [Odd]
'''

WITHIN = {
    "zero": "return np.zeros(coefficients.shape, np.int32)",
    "seeded noise": "return np.random.default_rng(7).integers(-(2**31), 2**31, coefficients.shape, dtype=np.int32)",
    "largest": "return np.full(coefficients.shape, 2**31 - 1, np.int32)",
    "smallest": "return np.full(coefficients.shape, -(2**31), np.int32)",
    "a view of its input": "return coefficients.view(np.int32)",
    "slow": "time.sleep(0.02); return nearest.astype(np.int32)",
    "holds the lock": "sum(range(300_000)); return nearest.astype(np.int32)",
    "loud": "print('hello'); return nearest.astype(np.int32)",
    "keeps its answer": "self.kept = nearest.astype(np.int32); return self.kept",
    "spread out": "return nearest.astype(np.int32)[..., ::-1]",
}

REFUSED = {
    "raises": ("raise ValueError('no idea')", "ValueError: no idea"),
    "exits": ("sys.exit(0)", "SystemExit"),
    "another shape": ("return np.zeros((3, 3), np.int32)", r"shape \(3, 3\)"),
    "another type": ("return nearest.astype(np.int64)", "int64"),
    "floats": ("return nearest * np.nan", "float"),
    "nothing": ("return None", "NoneType"),
    "changes its input": ("coefficients[...] = 0; return nearest.astype(np.int32)", "read-only"),
    "changes the steps": ("steps[...] = 1; return nearest.astype(np.int32)", "read-only"),
    "another answer": ("return (nearest + next(calls)).astype(np.int32)", "answered differently"),
    "an error only in the run": (
        "if next(calls) > 40: raise KeyError('late')\n        return nearest.astype(np.int32)",
        "late",
    ),
}


@pytest.fixture
def here(tmp_path, monkeypatch, fresh_registry):
    """Work in a folder with a small stack."""
    monkeypatch.chdir(tmp_path)
    np.save("in.npy", np.random.default_rng(3).poisson(200, (9, 64, 72)).astype(np.uint16))
    (tmp_path / "my.toml").write_text(
        '[tile]\ntile = [1, 64, 72]\n[predict]\nname = "transform"\n[quantize]\nname = "odd"\n'
    )
    return tmp_path


def write(folder, body: str) -> None:
    (folder / "odd.py").write_text(QUANTIZER.replace("{body}", body), encoding="utf-8", newline="\n")


@pytest.mark.parametrize("body", WITHIN.values(), ids=WITHIN)
def test_the_bound_holds_whatever_a_quantizer_answers(here, body):
    """Wrong, extreme, slow or loud answers change the size of a store, never its error."""
    write(here, body)
    report = stackbound.compress("in.npy", "out.ome.zarr", tolerance=2, config="my.toml", plugins=["odd.py"])
    decoded = stackbound.open("out.ome.zarr")[...]

    assert 0 == report.pixels_over
    assert 2 >= np.abs(decoded.astype(int) - np.load("in.npy")).max()


@pytest.mark.parametrize(("body", "match"), REFUSED.values(), ids=REFUSED)
def test_a_broken_quantizer_is_named_and_leaves_nothing(here, body, match):
    """An answer that breaks the contract ends the run with an error that names stage and plugin; no store is left."""
    write(here, body)

    with pytest.raises(PluginError, match=match) as caught:
        stackbound.compress("in.npy", "out.ome.zarr", tolerance=2, config="my.toml", plugins=["odd.py"])
    assert "quantize stage 'odd' (odd.py " in str(caught.value)
    assert not (here / "out.ome.zarr").exists()


def test_a_loud_plugin_does_not_disturb_the_results(here, capfd):
    """What a plugin prints goes to standard error; --json stays one object."""
    write(here, WITHIN["loud"])

    assert 0 == cli.run("compress in.npy out.ome.zarr --tolerance 2 --config my.toml --plugin odd.py --json".split())
    out, err = capfd.readouterr()
    assert 1 == json.loads(out)["schema_version"]
    assert "hello" in err


def test_a_guarded_stage_can_be_pickled(here):
    """Other processes get a third-party stage with its guard."""
    write(here, WITHIN["zero"])
    use_plugin("odd.py")
    stage = build(read_config("my.toml", tolerance=1)).predict.quantize
    again = pickle.loads(pickle.dumps(stage))
    question = (np.ones((2, 1, 2, 2), np.float32), np.ones((1, 2, 2)), 1)

    assert type(stage) is type(again)
    assert stage.options == again.options
    assert (0 == again.indices(*question)).all()


def test_built_in_stages_are_not_watched():
    """Our own stages run without the guard."""
    pipeline = build(read_config(None, tolerance=1))

    assert registry().get("quantize", "uniform") is type(pipeline.predict.quantize)


def test_two_plugin_files_of_one_name_are_refused(here):
    """A store keeps each plugin file by its name, so two different ones of one name cannot both be kept."""
    write(here, WITHIN["zero"])
    (here / "sub").mkdir()
    (here / "sub" / "odd.py").write_text(FIGURE.format(made="pass", measured="return 0", combined="return '0'"))
    config = {"quantize": {"name": "odd"}, "predict": {"name": "transform"}, "verify": {"figures": ["broken"]}}

    with pytest.raises(PluginError, match="Two different plugin files"):
        stackbound.compress("in.npy", "out.ome.zarr", tolerance=2, config=config, plugins=["odd.py", "sub/odd.py"])


FIGURE = '''
from stackbound import hookimpl
from stackbound.stages import Verify


class Broken(Verify):
    """A figure that misbehaves."""

    name = "broken"

    def __init__(self, options=None):
        super().__init__(options)
        {made}

    def measure(self, original, decoded, info):
        """Measure."""
        {measured}

    def combine(self, parts, info):
        """Combine."""
        {combined}


@hookimpl
def stackbound_stages():
    """Return the stage."""
    return [Broken]
'''


@pytest.mark.parametrize(
    ("made", "measured", "combined"),
    [
        ("raise ValueError('no idea')", "return 0", "return '0'"),
        ("pass", "raise ValueError('no idea')", "return '0'"),
        ("pass", "original[...] = 0", "return '0'"),
        ("pass", "return 0", "raise SystemExit(1)"),
        ("pass", "return 0", "return 0.5"),
    ],
)
def test_a_broken_figure_is_named_and_leaves_no_store(here, made, measured, combined):
    """A figure that raises, changes pixels or answers no text ends the run with an error that names it."""
    text = FIGURE.format(made=made, measured=measured, combined=combined)
    (here / "broken.py").write_text(text, encoding="utf-8", newline="\n")
    config = {"verify": {"figures": ["max-error", "broken"]}}

    with pytest.raises(PluginError, match="broken"):
        stackbound.compress("in.npy", "out.ome.zarr", tolerance=2, config=config, plugins=["broken.py"])
    assert not (here / "out.ome.zarr").exists()
    assert "broken" not in sys.modules
