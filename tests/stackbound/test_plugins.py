"""The registry of stages and the loading of plugins."""

from __future__ import annotations

import hashlib
import pickle
import subprocess
import sys
import textwrap
from pathlib import Path

import pytest
from stackbound import plugins
from stackbound.errors import ConfigError, PluginError, UsageError
from stackbound.plugins import KINDS, registry, use_plugin

FIGURE = """
from stackbound.plugins import hookimpl
from stackbound.stages import Options, Verify


class SpotOptions(Options):
    threshold: int = 3


class Spots(Verify):
    "Count spots."

    name = "{name}"
    Options = SpotOptions

    def measure(self, original, decoded, info):
        return int((original > self.options.threshold).sum())

    def combine(self, parts, info):
        return str(sum(parts))


@hookimpl
def stackbound_stages():
    return [Spots]
"""

pytestmark = pytest.mark.usefixtures("fresh_registry")


def write_plugin(path: Path, text: str) -> Path:
    path.write_text(textwrap.dedent(text), encoding="utf-8", newline="\n")
    return path


@pytest.fixture
def install(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    """Return a function that puts a third-party distribution on sys.path, as pip would install it."""
    site = tmp_path / "site"
    site.mkdir()
    monkeypatch.syspath_prepend(site)

    def add(distribution: str, module: str, text: str, *, version: str = "1.2") -> None:
        write_plugin(site / f"{module}.py", text)
        info = site / f"{distribution.replace('-', '_')}-{version}.dist-info"
        info.mkdir()
        (info / "METADATA").write_text(f"Metadata-Version: 2.1\nName: {distribution}\nVersion: {version}\n")
        (info / "entry_points.txt").write_text(f"[stackbound]\n{module} = {module}\n")

    yield add
    for path in site.glob("*.py"):
        sys.modules.pop(path.stem, None)


def reasons() -> list[str]:
    return [failure.reason for failure in registry().failures]


def test_no_built_in_stage_fails_to_load():
    """Every built-in module is there and offers its stage."""
    found = registry()

    assert () == found.failures
    assert all(found.classes(kind) for kind in KINDS)
    assert all(found.origin(cls).builtin for kind in KINDS for cls in found.classes(kind))


def test_listing_stages_imports_nothing_heavy():
    """The registry loads without numba, zarr, scipy and what else is slow to import."""
    code = (
        "import sys; from stackbound.plugins import registry; registry();"
        "print([n for n in ('numba', 'zarr', 'scipy', 'PIL', 'pydicom') if n in sys.modules])"
    )
    result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)

    assert "[]" == result.stdout.strip()


def test_installed_plugin_is_found_with_its_origin(install):
    """A distribution with an entry point in the group "stackbound" adds its stages and is named as their origin."""
    install("spot-tools", "spot_tools", FIGURE.format(name="spots"))
    cls = registry().get("verify", "spots")

    assert ("spot-tools", "1.2", False) == (
        registry().origin(cls).distribution,
        registry().origin(cls).version,
        registry().origin(cls).builtin,
    )
    assert [] == reasons()


def test_switched_off_plugins_are_not_loaded(install, monkeypatch):
    """STACKBOUND_PLUGINS=off leaves the built-ins alone, and refuses a plugin file that is asked for."""
    install("spot-tools", "spot_tools", FIGURE.format(name="spots"))
    monkeypatch.setenv(plugins.SWITCH, "off")

    assert "spots" not in registry().names("verify")
    with pytest.raises(UsageError, match="STACKBOUND_PLUGINS=off"):
        use_plugin("anything.py")


def test_an_unknown_switch_is_refused(monkeypatch):
    """A value of STACKBOUND_PLUGINS that means nothing is an error, not a silent yes."""
    monkeypatch.setenv(plugins.SWITCH, "none")

    with pytest.raises(UsageError, match="STACKBOUND_PLUGINS"):
        registry()


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("import no_such_module_anywhere", "needs the module 'no_such_module_anywhere'"),
        ("raise ValueError('broken at import')", "ValueError: broken at import"),
        ("import sys\nsys.exit(7)", "SystemExit: 7"),
        ("x = (", "SyntaxError"),
        ("x = 1", "no function is marked"),
        ("from stackbound.plugins import hookimpl\n@hookimpl\ndef stackbound_stags():\n    return []", "unknown hook"),
        (
            "from stackbound.plugins import hookimpl\n@hookimpl\ndef stackbound_stages(colour):\n    return []",
            "colour",
        ),
        (
            "from stackbound.plugins import hookimpl\n@hookimpl\ndef stackbound_stages():\n    return 3",
            "must return a list",
        ),
        (
            "from stackbound.plugins import hookimpl\n@hookimpl\ndef stackbound_stages():\n    return [dict]",
            "not a stage class",
        ),
        (FIGURE.format(name="Not A Name"), "needs a 'name'"),
        (FIGURE.format(name="max-error"), "already"),
        (FIGURE.format(name="spots").replace("def combine", "def combin"), "lacks the methods combine"),
        (FIGURE.format(name="spots").replace("class SpotOptions(Options)", "class SpotOptions"), "must derive from"),
        (FIGURE.format(name="spots").replace("threshold: int = 3", "name: str = ''"), "option 'name'"),
    ],
)
def test_a_broken_plugin_is_kept_as_data(install, text, reason):
    """Whatever is wrong with a plugin, the built-ins work, and the failure names plugin, version and reason."""
    install("broken-thing", "broken_thing", text)

    assert "max-error" in registry().names("verify")
    assert any(reason in found for found in reasons()), reasons()
    assert {("broken-thing", "1.2")} == {(f.origin.distribution, f.origin.version) for f in registry().failures}


def test_two_plugins_with_one_stage_name_are_both_refused(install):
    """Which of two stages of the same name is meant must not depend on the order of loading; both are named."""
    install("first-tools", "first_tools", FIGURE.format(name="spots"))
    install("second-tools", "second_tools", FIGURE.format(name="spots"))

    assert "spots" not in registry().names("verify")
    with pytest.raises(PluginError, match=r"first-tools 1\.2 and second-tools 1\.2"):
        registry().get("verify", "spots")


def test_a_missing_stage_is_suggested_and_failed_plugins_are_named(install):
    """The message for an unknown stage gives the nearest name and tells which plugins could not be loaded."""
    install("broken-thing", "broken_thing", "import no_such_module_anywhere")

    with pytest.raises(ConfigError, match=r"did you mean 'max-error'.*no_such_module_anywhere"):
        registry().get("verify", "max-eror")


def test_what_a_plugin_prints_does_not_reach_standard_output(install, capfd):
    """Results on standard output stay clean, whatever a plugin prints while it is loaded."""
    install("chatty", "chatty", "print('hello')\n" + FIGURE.format(name="spots"))
    registry()
    out, err = capfd.readouterr()

    assert "" == out
    assert "hello" in err


def test_plugin_file_is_loaded_with_its_text_and_hash(tmp_path):
    """A single file adds its stages; its origin keeps content and hash, and its options can be pickled."""
    path = write_plugin(tmp_path / "my_spots.py", FIGURE.format(name="spots"))
    sha256 = hashlib.sha256(path.read_bytes()).hexdigest()
    use_plugin(path, sha256)
    cls = registry().get("verify", "spots")
    origin = registry().origin(cls)

    assert ("my_spots.py", sha256, path.read_bytes()) == (origin.distribution, origin.sha256, origin.source)
    assert cls.Options(threshold=5) == pickle.loads(pickle.dumps(cls.Options(threshold=5)))


def test_plugin_file_again_is_the_same_and_changed_takes_its_place(tmp_path):
    """Loading the same content twice changes nothing; an edited file replaces what it offered before."""
    path = write_plugin(tmp_path / "my_spots.py", FIGURE.format(name="spots"))
    use_plugin(path)
    first = registry().get("verify", "spots")
    use_plugin(path)
    again = registry().get("verify", "spots")
    write_plugin(path, FIGURE.format(name="spots").replace("= 3", "= 4"))
    use_plugin(path)

    assert first is again
    assert 4 == registry().get("verify", "spots")().options.threshold


@pytest.mark.parametrize(
    ("text", "sha256", "match"),
    [
        (None, None, "cannot be read"),
        (FIGURE.format(name="spots"), "0" * 64, "has the SHA-256"),
        ("import no_such_module_anywhere", None, "no_such_module_anywhere"),
        (FIGURE.format(name="rmse"), None, "already"),
    ],
)
def test_a_plugin_file_that_cannot_be_used_is_an_error(tmp_path, text, sha256, match):
    """A file that was asked for and cannot be used is an error that names it."""
    path = tmp_path / "my_plugin.py"
    if text is not None:
        write_plugin(path, text)

    with pytest.raises(PluginError, match=match) as caught:
        use_plugin(path, sha256)
    assert "my_plugin.py" in str(caught.value)


def test_plugin_files_of_the_environment_reach_other_processes(tmp_path, monkeypatch):
    """A process that inherits STACKBOUND_PLUGIN_FILES has the stages of the files; a wrong hash is a failure."""
    path = write_plugin(tmp_path / "my_spots.py", FIGURE.format(name="spots"))
    code = "from stackbound.plugins import registry; print('spots' in registry().names('verify'), registry().failures)"
    answers = []
    for suffix in ("", "#sha256=" + "0" * 64):
        monkeypatch.setenv(plugins.FILES, f"{path}{suffix}")
        run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
        answers.append(run.stdout)

    assert "True ()" == answers[0].strip()
    assert "False" in answers[1]
    assert "has the SHA-256" in answers[1]


def test_the_report_names_every_stage_and_failure(install):
    """`plugins --json` holds each stage with its options and origin, and each failure with its reason."""
    install("broken-thing", "broken_thing", "import no_such_module_anywhere")
    install("spot-tools", "spot_tools", FIGURE.format(name="spots"))
    report = plugins.plugin_report()
    spots = next(stage for stage in report["stages"] if stage["name"] == "spots")

    assert (["threshold"], "Count spots.", "spot-tools") == (spots["options"], spots["summary"], spots["distribution"])
    assert ["broken-thing"] == [failure["distribution"] for failure in report["failures"]]
