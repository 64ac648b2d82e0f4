"""Configurations: what is read, what is refused and how, and their records."""

from __future__ import annotations

import json
import pickle
from decimal import Decimal
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from stackbound.config import PipelineConfig, build, read_config, schema
from stackbound.errors import ConfigError, UsageError
from stackbound.plugins import registry, use_plugin
from stackbound.recipes import recipe_names, recipe_path
from stackbound.tolerance import UNITS, exact_decimal


def write(path: Path, text: str) -> Path:
    path.write_text(text, encoding="utf-8", newline="\n")
    return path


# --------------------------------------------------------------------------------------------------------- tolerance


@pytest.mark.parametrize(
    ("given_", "kept"),
    [
        (4, "4"),
        (0, "0"),
        ("0", "0"),
        (-0.0, "0"),
        (0.1, "0.1"),
        ("0.10", "0.1"),
        ("0.1000000000000000000000000000000001", "0.1000000000000000000000000000000001"),
        ("1e3", "1000"),
        (1e-3, "0.001"),
        (Decimal("2.50"), "2.5"),
        (np.float32(0.1), "0.1"),
        (np.int16(7), "7"),
        (np.array(3), "3"),
        (" 4 ", "4"),
        (10**30, "1" + "0" * 30),
    ],
)
def test_a_tolerance_is_kept_exactly_as_written(given_, kept):
    """The tolerance is the decimal number that was written, in one form for each value."""
    assert Decimal(kept) == exact_decimal(given_)
    assert exact_decimal(kept) == exact_decimal(str(exact_decimal(given_)))


@given(st.decimals(min_value=0, allow_nan=False, allow_infinity=False))
def test_every_decimal_survives_its_text(number):
    """Any decimal number reads back from its own text as the same number, in the same form."""
    kept = exact_decimal(number)

    assert number == kept
    assert str(kept) == str(exact_decimal(str(kept)))


@pytest.mark.parametrize(
    ("value", "match"),
    [
        (-1, "negative"),
        ("-0.5", "negative"),
        (float("nan"), "finite"),
        ("nan", "finite"),
        (float("inf"), "finite"),
        ("Infinity", "finite"),
        (True, "not true"),
        (np.bool_(True), "not true"),
        ("four", "not a number"),
        ("1_000", "not a number"),
        ("0x10", "not a number"),
        ("", "not a number"),
        (None, "No tolerance was given"),
        ([4], "is a number"),
        (1j, "is a number"),
    ],
)
def test_a_tolerance_that_is_none_is_refused(value, match):
    """Negative, infinite, missing and non-numbers are usage errors that say what to give, --tolerance 0 included."""
    with pytest.raises(UsageError, match=match) as caught:
        read_config(None, tolerance=value)
    assert "--tolerance 0 " in str(caught.value)


@pytest.mark.parametrize("text", ["value = true", 'value = "4"', "value = -1", "value = nan", "value = inf"])
def test_a_tolerance_in_a_file_is_as_strict(tmp_path, text):
    """In TOML too `true` is not 1 and "4" is not 4, and the error names the key and the file."""
    path = write(tmp_path / "my.toml", f"[tolerance]\n{text}\n")

    with pytest.raises(ConfigError, match=r"my\.toml: tolerance\.value"):
        read_config(path)


def test_a_tolerance_in_a_file_is_exact(tmp_path):
    """A number in TOML keeps all its digits, beyond those of a float."""
    path = write(tmp_path / "my.toml", "[tolerance]\nvalue = 0.10000000000000000000001\n")

    assert Decimal("0.10000000000000000000001") == read_config(path).tolerance.value


def test_the_given_tolerance_wins_in_the_unit_of_the_file(tmp_path):
    """An explicit tolerance replaces the file's; without an explicit unit the file's unit stays."""
    unit = UNITS[-1]
    path = write(tmp_path / "my.toml", f'[tolerance]\nunit = "{unit}"\n')

    assert {"value": "0.5", "unit": unit} == read_config(path, tolerance="0.5").tolerance.record()
    assert {"value": "2", "unit": "stored"} == read_config(path, tolerance=2, unit="stored").tolerance.record()


def test_a_unit_without_a_tolerance_is_refused():
    """--unit alone would give the file's number another meaning."""
    with pytest.raises(UsageError, match="without a tolerance"):
        read_config({"tolerance": {"value": 4}}, unit="stored")


def test_an_unknown_unit_is_refused():
    """An unknown unit is named together with the known ones."""
    with pytest.raises(UsageError, match=r"'pixels'.*stored"):
        read_config(None, tolerance=1, unit="pixels")


# -------------------------------------------------------------------------------------------------------- documents


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("[predikt]", r"predikt: unknown key; did you mean 'predict'\?"),
        ('[predict]\nnme = "none"', r"predict\.nme: unknown key; did you mean 'name'\?"),
        ('[predict]\nname = "nonne"', r"predict: There is no predict stage 'nonne'; did you mean 'none'\?"),
        ("[predict]\nname = 3", r"predict: name must be text"),
        ('predict = "none"', r"predict: must be a table"),
        ('[predict]\nname = "transform"\nblok = [8, 8]', r"predict\.blok: unknown key; did you mean 'block'\?"),
        ('[predict]\nname = "transform"\nstep = "4"', r"predict\.step: .*not '4'"),
        ('[predict]\nname = "transform"\nstep = true', r"predict\.step: .*not True"),
        ("[verify]\nfigure = []", r"verify\.figure: unknown key; did you mean 'figures'\?"),
        ('[verify]\nfigures = ["rmsee"]', r"verify\.figures\[0\]: There is no verify stage 'rmsee'; did you mean"),
        ('[verify]\nfigures = ["rmse", "rmse"]', r"verify\.figures: 'rmse' is there more than once"),
        ('[verify]\nfigures = [{name = "rmse", k = 1}]', r"verify\.figures\[0\]\.k: unknown key"),
        ("[predict]\nblock = [8, 8]", r"predict\.block: unknown key; the keys of 'best' are: name, among"),
        ('[tolerance]\nunit = "stord"', r"tolerance\.unit: There is no unit 'stord'"),
        ("[tolerance]\nvalu = 4", r"tolerance\.valu: unknown key; did you mean 'value'\?"),
        ("tolerance = 4", r"tolerance: must be a table"),
        ("[predict\n", r"not TOML: .*line 1"),
        ("a = 1\na = 2\n", r"not TOML: .*line 2"),
    ],
)
def test_what_is_wrong_in_a_file_is_named_with_its_path(tmp_path, text, match):
    """Every error names the file and the TOML path, and unknown words come with the nearest known one."""
    path = write(tmp_path / "my.toml", text)

    with pytest.raises(ConfigError, match=match) as caught:
        read_config(path, tolerance=1)
    assert str(path) in str(caught.value)


def test_all_errors_of_a_file_come_at_once(tmp_path):
    """One message names everything that is wrong."""
    path = write(tmp_path / "my.toml", "[tile]\nfoo = 1\n[encode]\nbar = 2\n")

    with pytest.raises(ConfigError, match=r"(?s)tile\.foo.*encode\.bar"):
        read_config(path, tolerance=1)


@pytest.mark.parametrize(
    ("content", "match"),
    [(b"\xff\xfe[tile]", "not UTF-8"), (None, "does not exist"), ("folder", "cannot be read")],
)
def test_a_file_that_cannot_be_read_is_refused(tmp_path, content, match):
    """Missing files, folders and other encodings get their own message."""
    path = tmp_path / "my.toml"
    if content == "folder":
        path.mkdir()
    elif content is not None:
        path.write_bytes(content)

    with pytest.raises(ConfigError, match=match):
        read_config(path, tolerance=1)


def test_a_byte_order_mark_is_no_error(tmp_path):
    """Editors of some systems put a byte order mark first."""
    path = tmp_path / "my.toml"
    path.write_bytes(b"\xef\xbb\xbf[tolerance]\nvalue = 3\n")

    assert Decimal(3) == read_config(str(path)).tolerance.value


def test_an_unknown_recipe_is_suggested():
    """A name that is neither recipe nor file comes with the nearest recipe."""
    name = recipe_names()[0]

    with pytest.raises(ConfigError, match=f"did you mean '{name}'"):
        read_config(name[:-1], tolerance=1)


@pytest.mark.parametrize("name", recipe_names())
def test_every_recipe_is_valid(name):
    """Every shipped recipe is a valid configuration, found by its name and by its path."""
    assert read_config(name, tolerance=1) == read_config(recipe_path(name), tolerance=1)


def test_a_mapping_and_a_configuration_are_taken_as_files_are():
    """Python callers hand in mappings or what read_config returned."""
    config = read_config({"predict": {"name": "none"}, "tolerance": {"value": 0.25}})

    assert ("none", Decimal("0.25")) == (config.predict.name, config.tolerance.value)
    assert config == read_config(config)
    assert Decimal(7) == read_config(config, tolerance=7).tolerance.value


# ---------------------------------------------------------------------------------------------------- records, stages


def only_whole_numbers_and_strings(value: object) -> bool:
    if isinstance(value, dict):
        return all(isinstance(key, str) and only_whole_numbers_and_strings(item) for key, item in value.items())
    if isinstance(value, list):
        return all(map(only_whole_numbers_and_strings, value))
    return value is None or isinstance(value, str | int)


FLOATS = '''
from stackbound.plugins import hookimpl
from stackbound.stages import Options, Verify


class WeighedOptions(Options):
    """Options of every kind that TOML knows."""

    weight: float = 0.1
    """A number."""
    matrix: list[list[float]] = [[0.5, 2.0]]
    label: str | None = None
    quick: bool = False


class Weighed(Verify):
    """A weighed figure."""

    name = "weighed"
    Options = WeighedOptions

    def measure(self, original, decoded, info):
        return 0

    def combine(self, parts, info):
        return "0"


@hookimpl
def stackbound_stages():
    return [Weighed]
'''


@pytest.fixture
def weighed(tmp_path, fresh_registry):
    """Load a plugin whose options are floats."""
    use_plugin(write(tmp_path / "weighed.py", FLOATS))


def test_a_record_makes_the_same_configuration(weighed):
    """A record holds whole numbers and strings only, goes through JSON, and makes an equal configuration."""
    figure = {"name": "weighed", "weight": 1 / 3, "matrix": [[1e-300, 3.5]], "label": "0.5", "quick": True}
    config = read_config({"verify": {"figures": ["rmse", figure]}}, tolerance="0.1")
    record = config.record()

    assert only_whole_numbers_and_strings(record)
    assert config == PipelineConfig.from_record(json.loads(json.dumps(record)))
    assert 1 / 3 == config.figures[1].options.weight
    assert "0.1" == record["tolerance"]["value"]


def test_a_configuration_can_be_pickled():
    """Other processes get the configuration as it is."""
    config = read_config(None, tolerance=4)

    assert config == pickle.loads(pickle.dumps(config))


@pytest.mark.parametrize("value", ["inf", "nan", "true", '"3"', "1979-05-27"])
def test_options_of_plugins_are_strict(weighed, tmp_path, value):
    """A plugin's number is neither text nor truth nor infinite."""
    path = write(tmp_path / "my.toml", f'[verify]\nfigures = [{{name = "weighed", weight = {value}}}]\n')

    with pytest.raises(ConfigError, match=r"verify\.figures\[0\]\.weight"):
        read_config(path, tolerance=1)


def test_the_schema_holds_every_key_and_the_options_of_plugins(weighed):
    """The schema describes all tables, all stages, and the plugin's options with their docstrings."""
    text = json.dumps(schema())

    assert {"tolerance", "tile", "predict", "transform", "quantize", "encode", "verify"} == set(schema()["properties"])
    for name in [name for kind in ("tile", "predict", "verify") for name in registry().names(kind)]:
        assert f'"{name}"' in text
    assert "A number." in text


def test_the_stages_of_a_configuration_are_made_with_their_options(weighed):
    """`build` makes every stage with its options and says where each comes from."""
    config = read_config({"predict": {"name": "transform"}, "verify": {"figures": ["weighed"]}}, tolerance=1)
    pipeline = build(config)

    assert ("grid", "transform", "dct", "uniform", "rans") == (
        pipeline.tile.name,
        pipeline.predict.name,
        pipeline.predict.transform.name,
        pipeline.predict.quantize.name,
        pipeline.encode.name,
    )
    assert 0.1 == pipeline.figures[0].options.weight
    assert "weighed.py" == pipeline.origins["verify:weighed"].distribution
