"""Write a plugin project that is ready to be installed, with a test that passes."""

from __future__ import annotations

import keyword
from importlib import resources
from pathlib import Path

from .errors import TargetError, UsageError
from .plugins import registry
from .registry import KINDS, STAGE_NAME

__all__ = ["new_plugin"]

_PROJECT = """\
[build-system]
requires = ["hatchling>=1.27"]
build-backend = "hatchling.build"

[project]
name = "{name}"
version = "0.1.0"
description = "The {kind} stage {name} for stackbound"
readme = "README.md"
requires-python = ">=3.11"
dependencies = ["numpy", "pydantic", "stackbound"]

# stackbound finds the plugin by this entry.
[project.entry-points.stackbound]
{module} = "{module}"

[dependency-groups]
test = ["pytest"]

[tool.hatch.build.targets.wheel]
packages = ["{module}"]
"""

_README = """\
# {name}

The {kind} stage `{name}` for stackbound.

```sh
pip install .                        # stackbound finds it from now on
stackbound plugins                   # it is in the list
stackbound check-plugin {name}
python -m pytest tests
```

{use}
"""

_USE = {
    "load": "Files of its format are recognised by their first bytes: `stackbound compress FILE out.ome.zarr ...`.",
    "save": "Its ending says the format: `stackbound restore in.ome.zarr out.{name}`.",
    "verify": 'In a configuration: `figures = ["max-error", "{name}"]` under `[verify]`.',
}
_USE_OTHERS = 'In a configuration: `name = "{name}"` under `[{kind}]`.'

_TEST = '''\
"""The stage keeps the contract of its kind."""

from stackbound.testing import assert_conforms

from {module} import {stage}


def test_the_contract_is_kept{arguments}:
    """The conformance suite of stackbound finds nothing."""
{body}
'''

_LOAD_BODY = """\
    example = tmp_path / "example.{name}"
    header = b'{{"{name}": 1, "shape": [2, 3, 4], "dtype": "uint16"}}\\n'
    example.write_bytes(header + bytes(range(48)))

    assert_conforms({stage}, example=example)"""


def new_plugin(kind: str, name: str, folder: str | Path | None = None) -> Path:
    """Write a plugin project with one stage.

    Parameters
    ----------
    kind : str
        Kind of the stage.
    name : str
        Name of the stage, of the distribution, and, with "_" for "-", of the module.
    folder : path, optional
        Where the project goes; by default a new folder of that name here.

    Returns
    -------
    pathlib.Path
        The project's folder.

    Raises
    ------
    stackbound.errors.UsageError
        There is no such kind, the name cannot be used, or such a stage exists.
    stackbound.errors.TargetError
        The folder exists or cannot be written.
    """
    if kind not in KINDS:
        raise UsageError(f"There is no kind of stage '{kind}'; the kinds are: {', '.join(KINDS)}.", where="KIND")
    module = name.replace("-", "_")
    if not STAGE_NAME.fullmatch(name) or keyword.iskeyword(module):
        raise UsageError(f"'{name}' cannot name a stage.", where="NAME", remedy="Use lower-case letters and hyphens.")
    if name in registry().names(kind):
        raise UsageError(f"There is a {kind} stage '{name}' already.", where="NAME", remedy="Choose another name.")
    target = Path(name) if folder is None else Path(folder)
    files = _files(kind, name, module)
    try:
        target.mkdir(parents=True)
        for path, text in files.items():
            (target / path).parent.mkdir(exist_ok=True)
            (target / path).write_text(text, encoding="utf-8", newline="\n")
    except FileExistsError:
        raise TargetError("The folder exists already.", where=str(target), left="It was left as it is.") from None
    except OSError as error:
        raise TargetError(f"The project cannot be written ({error.strerror}).", where=str(target)) from error
    return target


def _files(kind: str, name: str, module: str) -> dict[str, str]:
    """Return the text of each file of a project by its path."""
    stage = "".join(part.capitalize() for part in name.split("-"))
    words = {"kind": kind, "name": name, "module": module, "stage": stage}
    template = resources.files("stackbound").joinpath("templates", f"{kind}.py").read_text(encoding="utf-8")
    body, arguments = "    assert_conforms({stage})", "()"
    if kind == "load":
        body, arguments = _LOAD_BODY, "(tmp_path)"
    return {
        "pyproject.toml": _PROJECT.format(**words),
        "README.md": _README.format(use=_USE.get(kind, _USE_OTHERS).format(**words), **words),
        f"{module}/__init__.py": template.replace("MyStage", stage).replace("my-stage", name),
        f"tests/test_{module}.py": _TEST.format(arguments=arguments, body=body.format(**words), **words),
    }
