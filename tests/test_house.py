"""The house itself: names, packages, documents, the linter and the type checker."""

from __future__ import annotations

import ast
import inspect
import json
import re
import subprocess
import sys
import tomllib
import zipfile
from pathlib import Path

import click
import pytest
import stackbound
from stackbound import cli
from stackbound.config import schema
from stackbound.plugins import KINDS, registry
from stackbound.recipes import recipe_names
from stackbound.registry import Hooks

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))

TOP = {"README.md", "DEVELOPERS.md", "LICENSE", "CITATION.cff", "pyproject.toml", "requirements.lock"}
FOLDERS = {"pipeline", "plugins", "configs", "tests", "synthetic_data"}
PRODUCTS = {"dist", "build", "__pycache__"}


def texts() -> list[Path]:
    """Return every text file of the project."""
    files = [path for folder in sorted(FOLDERS | {".ci"}) for path in sorted((ROOT / folder).rglob("*"))]
    files += [ROOT / name for name in sorted(TOP)]
    return [path for path in files if path.suffix in {".py", ".md", ".toml", ".txt", ".cff", ".lock", ".json", ""}]


def code_blocks(text: str, language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```$", text, re.MULTILINE | re.DOTALL)


# ------------------------------------------------------------------------------------------------------------ layout


def test_the_top_level_holds_the_agreed_names():
    """Beside dotfiles and what builds leave, the top level holds these files and folders and nothing else."""
    found = {path.name for path in ROOT.iterdir() if not path.name.startswith(".")} - PRODUCTS

    assert TOP | FOLDERS == found


def test_source_roots_are_no_packages():
    """`pipeline` and `plugins` are folders of packages; as packages they would hold a second copy of every module."""
    assert [] == [name for name in ("pipeline", "plugins", "synthetic_data") if (ROOT / name / "__init__.py").exists()]
    assert [] == [name for name in sys.modules if name.split(".")[0] in ("pipeline", "plugins", "synthetic_data")]


def test_every_package_says_that_it_is_typed():
    """Type checkers of plugin authors find our types."""
    packages = PROJECT["tool"]["hatch"]["build"]["targets"]["wheel"]["packages"]

    assert ["py.typed"] * 3 == [(ROOT / package / "py.typed").name for package in packages]
    assert all((ROOT / package / "py.typed").exists() for package in packages)


def test_no_text_speaks_of_its_makers_machine():
    """No file names a folder of a developer's machine, or where packages are fetched from."""
    # Put together here, so that this very file does not hold them.
    words = [
        "/" + "tmp/w/",
        "/" + "work/",
        "/" + "root/",
        "/" + "home/",
        "py" + "pi",
        "python" + "hosted",
        "npm" + "js",
    ]
    found = [
        f"{path.relative_to(ROOT)}: {word}"
        for path in texts()
        if path.is_file()
        for word in words
        if word in path.read_text(encoding="utf-8").lower()
    ]

    assert [] == found


def test_text_files_have_unix_line_ends():
    """Hashes and line counts are the same on every system."""
    assert [] == [str(path.relative_to(ROOT)) for path in texts() if path.is_file() and b"\r" in path.read_bytes()]


def test_files_can_be_read_in_one_sitting():
    """No module is longer than 450 lines, but for the decoder that is copied into stores and must be one file."""
    long = {
        str(path.relative_to(ROOT)): len(path.read_text(encoding="utf-8").splitlines())
        for path in texts()
        if path.suffix == ".py" and "tests" not in path.parts and path.name != "decode.py"
    }

    assert {} == {
        name: lines for name, lines in long.items() if lines > 450 and not name.endswith("stackbound/decode.py")
    }


def test_files_are_opened_with_their_encoding():
    """Every text that the program reads or writes names its encoding, since the default differs between systems."""
    found = []
    for path in texts():
        if path.suffix != ".py" or "tests" in path.parts:
            continue
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Attribute):
                keywords = {keyword.arg for keyword in node.keywords}
                if node.func.attr in ("read_text", "write_text") and "encoding" not in keywords:
                    found.append(f"{path.relative_to(ROOT)}:{node.lineno}")
                if node.func.attr == "write_text" and "newline" not in keywords:
                    found.append(f"{path.relative_to(ROOT)}:{node.lineno} newline")

    assert [] == found


# --------------------------------------------------------------------------------------------------------- interface


def test_all_names_what_is_exported():
    """`stackbound.__all__` is what `dir` shows, each of it exists, and none of it is a module."""
    assert sorted(stackbound.__all__) == sorted(dir(stackbound))
    assert [] == [name for name in stackbound.__all__ if inspect.ismodule(getattr(stackbound, name))]


def test_functions_stay_functions_when_their_modules_are_imported():
    """`stackbound.verify` is the function, also after somebody imported the module of the same name."""
    code = "import stackbound.verify, stackbound.restore, stackbound.inspect, stackbound.demo, stackbound as s;"
    code += "print(all(callable(f) for f in (s.verify, s.restore, s.inspect, s.demo, s.open, s.compress)))"
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)

    assert "True" == run.stdout.strip()


def test_every_public_function_is_documented():
    """Every exported function and class has a docstring, and functions with parameters describe them."""
    for name in stackbound.__all__:
        item = getattr(stackbound, name)
        if not inspect.isfunction(item):
            continue
        text = inspect.getdoc(item) or ""
        parameters = list(inspect.signature(item).parameters)
        missing = [
            parameter
            for parameter in parameters
            if not re.search(rf"^{parameter}\b.* : |, {parameter}\b.* : |^{parameter},.* : ", text, re.M)
        ]

        assert [] == missing, name


def test_the_version_is_the_same_everywhere():
    """Package, metadata and citation name one version."""
    citation = (ROOT / "CITATION.cff").read_text(encoding="utf-8")

    assert PROJECT["project"]["version"] == stackbound.__version__
    assert f"\nversion: {stackbound.__version__}\n" in citation


# --------------------------------------------------------------------------------------------------------- documents


def every_option() -> list[str]:
    return sorted(
        {
            option
            for command in cli.cli.commands.values()
            for parameter in command.params
            if isinstance(parameter, click.Option)
            for option in parameter.opts
            if option.startswith("--")
        }
    )


@pytest.mark.parametrize("option", every_option())
def test_every_option_is_in_the_readme(option):
    """A user finds each option of the command line in README.md."""
    assert f"`{option}" in README or f"[{option}" in README


@pytest.mark.parametrize("command", sorted(cli.cli.commands))
def test_every_command_is_in_the_readme(command):
    """A user finds each command in README.md."""
    assert f"stackbound {command}" in README


def test_every_configuration_key_is_in_the_readme():
    """A user finds each table, each stage and each of its options in README.md."""
    names = list(schema()["properties"])
    for kind in KINDS:
        for cls in registry().classes(kind):
            names += [cls.name, *cls.Options.model_fields]

    assert [] == [name for name in names if f"`{name}`" not in README and f"[{name}]" not in README]


@pytest.mark.parametrize("name", recipe_names())
def test_every_recipe_is_in_the_readme(name):
    """A user finds each recipe in README.md, and the recipe's own file says when not to use it."""
    text = " ".join((ROOT / "configs" / f"{name}.toml").read_text(encoding="utf-8").replace("#", " ").split())

    assert f"`{name}`" in README
    assert "Not for" in text


@pytest.mark.parametrize("hook", [name for name in vars(Hooks) if not name.startswith("_")])
def test_every_hook_is_documented_and_tested(hook):
    """DEVELOPERS.md shows each hook with its arguments, and some test implements it."""
    arguments = [name for name in inspect.signature(getattr(Hooks, hook)).parameters if name != "self"]

    assert f"`{hook}({', '.join(arguments)})`" in DEVELOPERS
    assert any(f"def {hook}(" in path.read_text(encoding="utf-8") for path in (ROOT / "tests").rglob("test_*.py"))


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_of_stage_is_documented(kind):
    """DEVELOPERS.md describes each kind of stage."""
    assert f"| `{kind}` |" in DEVELOPERS


def test_the_setup_commands_come_first_in_the_readme():
    """README.md opens with one paragraph and two commands; the second is what continuous integration runs."""
    setup, tests, *_ = code_blocks(README, "sh")
    before = README[: README.index("```sh")]
    runner = (ROOT / ".ci" / "run").read_text(encoding="utf-8")

    assert "stackbound demo" in setup
    assert "pytest" in tests
    assert "README.md" in runner
    assert [1, 1] == [len(block.strip().splitlines()) for block in (setup, tests)]
    assert 6 >= len([line for line in before.splitlines() if line.strip()])


def test_the_code_of_the_readme_runs(tmp_path, monkeypatch, capfd):
    """The Python of README.md, and its commands on the file that it speaks of, run as they stand there."""
    import numpy as np
    import tifffile

    monkeypatch.chdir(tmp_path)
    data = np.random.default_rng(3).poisson(150, (14, 320, 48)).astype(np.uint16)
    tifffile.imwrite("embryo.ome.tif", data, ome=True, metadata={"axes": "ZYX"}, photometric="minisblack")
    blocks = code_blocks(README, "python")
    commands = [line for block in code_blocks(README, "sh")[2:] for line in block.splitlines()]
    for line in commands:
        words = line.partition("#")[0].split()
        assert 0 == cli.run(words[1:]), (line, capfd.readouterr().err)
    for path in ("embryo.ome.zarr", "again.ome.tif"):
        assert (tmp_path / path).exists()
    python = tmp_path / "python"
    python.mkdir()
    monkeypatch.chdir(python)
    tifffile.imwrite("embryo.ome.tif", data, ome=True, metadata={"axes": "ZYX"}, photometric="minisblack")
    for block in blocks:
        exec(compile(block, "README.md", "exec"), {})

    assert len(commands) >= 4
    assert blocks


def test_the_byte_layout_is_the_one_that_stores_carry():
    """DEVELOPERS.md holds the page that goes into every store, word for word."""
    page = (ROOT / "pipeline" / "stackbound" / "DECODE.txt").read_text(encoding="utf-8")

    assert f"```text\n{page.rstrip()}\n```" in DEVELOPERS


def test_the_plugin_of_the_guide_works(tmp_path, monkeypatch, capfd, fresh_registry):
    """The plugin that DEVELOPERS.md shows, put into a file, does what the text beside it says."""
    import numpy as np

    monkeypatch.chdir(tmp_path)
    np.save("in.npy", np.arange(4000, dtype=np.uint16).reshape(50, 80))
    (tmp_path / "bright.py").write_text(code_blocks(DEVELOPERS, "python")[0], encoding="utf-8", newline="\n")
    figures = re.search(r"`(figures = [^`]*bright-count[^`]*)`", DEVELOPERS)
    assert figures
    (tmp_path / "my.toml").write_text(f"[verify]\n{figures[1]}\n", encoding="utf-8", newline="\n")
    words = "compress in.npy out.ome.zarr --tolerance 4 --plugin bright.py --config my.toml --json".split()

    assert 0 == cli.run(words), capfd.readouterr().err
    assert {"max-error", "bright-count"} == set(json.loads(capfd.readouterr().out)["figures"])


# ---------------------------------------------------------------------------------------------------------- packages


def test_the_wheel_holds_packages_recipes_and_licence(tmp_path):
    """The wheel holds every module, the recipes, the decoder page, the licence, and none of the tests."""
    command = [sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(tmp_path)]
    subprocess.run(command, cwd=ROOT, check=True, capture_output=True)
    names = zipfile.ZipFile(next(tmp_path.glob("*.whl"))).namelist()
    modules = [
        path.relative_to(ROOT / root).as_posix()
        for root in ("pipeline", "plugins", "synthetic_data")
        for path in (ROOT / root).rglob("*.py")
        if "examples" not in path.parts
    ]

    assert [] == sorted({*modules} - {*names})
    assert recipe_names() == sorted(Path(n).stem for n in names if n.startswith("stackbound/recipes/"))
    assert {"stackbound/DECODE.txt", "stackbound/decode.py", "stackbound/py.typed"} <= {*names}
    assert any(name.endswith("licenses/LICENSE") for name in names)
    assert {"stackbound", "stackbound_stages", "stackbound_synthetic"} == {
        name.split("/")[0] for name in names if ".dist-info" not in name
    }


def test_the_lock_file_holds_every_dependency():
    """Every dependency of program, tests and linters is locked with hashes, and nothing says from where."""
    lock = (ROOT / "requirements.lock").read_text(encoding="utf-8")
    groups = PROJECT["dependency-groups"]
    wanted = list(PROJECT["project"]["dependencies"])
    wanted += [entry for group in groups.values() for entry in group if isinstance(entry, str)]
    wanted += [entry for extra in PROJECT["project"]["optional-dependencies"].values() for entry in extra]
    names = {re.split(r"[\[<>=! ]", entry)[0].lower().replace("_", "-") for entry in wanted}
    locked = re.findall(r"^([a-z0-9-]+)==\S+.*\\$", lock, re.M)

    assert set() == names - {*locked}
    assert "://" not in lock
    assert len(locked) <= lock.count("--hash=sha256:")


# ------------------------------------------------------------------------------------------------------------- tools


def test_the_linter_is_content():
    """Ruff finds nothing, and every file is formatted."""
    for words, options in ((["check"], ["--output-format", "concise"]), (["format", "--check"], [])):
        run = subprocess.run(
            [sys.executable, "-m", "ruff", *words, ".", *options], cwd=ROOT, capture_output=True, text=True
        )
        assert 0 == run.returncode, run.stdout + run.stderr


def test_the_type_checker_is_content():
    """Mypy in strict mode finds nothing."""
    run = subprocess.run([sys.executable, "-m", "mypy"], cwd=ROOT, capture_output=True, text=True)

    assert 0 == run.returncode, run.stdout + run.stderr
