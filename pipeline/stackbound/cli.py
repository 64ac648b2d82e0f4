"""The command line. Results go to standard output; progress, messages and errors to standard error.

Exit codes: 0 fine; 1 a fault of the program; 2 usage, configuration or unusable input; 3 a promise or an integrity
check failed; 130 interrupted. Scientific modules are imported inside the commands, so that ``--help`` answers at once.
"""

from __future__ import annotations

import contextlib
import json
import os
import shlex
import sys
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

import click

from ._console import ConsoleProgress, announce_compilation, exit_code_of

__all__ = ["cli", "main", "run"]

CAUTION = (
    "Research use. The bound limits the change of each stored pixel value; it does not promise that a measurement or a "
    "diagnosis stays the same. Local regulation, retention rules and qualified clinical review come first."
)

_SETTINGS = {"help_option_names": ["-h", "--help"], "max_content_width": 100}
_JSON = click.option("--json", "as_json", is_flag=True, help="Print one JSON object instead of text.")


def main() -> None:
    """Run the command line with the arguments of this process, and exit."""
    sys.exit(run(sys.argv[1:]))


def run(arguments: Sequence[str]) -> int:
    """Run the command line; return the exit code."""
    try:
        result = cli.main(list(arguments), prog_name="stackbound", standalone_mode=False)
        sys.stdout.flush()
    except BrokenPipeError:
        # The reader of our output has gone ("stackbound schema | head"): nothing is wrong, and no more can be said.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except BaseException as error:  # noqa: BLE001  # every error ends as a message and an exit code
        return exit_code_of(error)
    return result if isinstance(result, int) else 0


def _show_version(context: click.Context, _: click.Parameter, wanted: bool) -> None:
    if wanted:
        import importlib.metadata

        click.echo(f"stackbound {importlib.metadata.version('stackbound')}")
        context.exit()


@click.group(context_settings=_SETTINGS, epilog=CAUTION)
@click.option(
    "--version", is_flag=True, expose_value=False, is_eager=True, callback=_show_version, help="Show the version."
)
def cli() -> None:
    """Compress image stacks under a maximum error that holds for every pixel, and prove it.

    A store is an OME-Zarr folder with a log of every comparison that was made. Anyone can read it with zarr where
    stackbound is installed, and verify it again years later.
    """


@cli.command(short_help="Compress a source into a store, and verify every pixel.", epilog=CAUTION)
@click.argument("words", metavar="SOURCE... STORE", nargs=-1, required=True)
@click.option(
    "--tolerance",
    metavar="N",
    help="The largest change that any pixel may suffer; 0 stores without loss. Kept exactly as written.",
)
@click.option(
    "--unit",
    metavar="U",
    help="Unit of the tolerance: stored (stored pixel values, the default) or range (a fraction of each channel's own"
    " range, largest minus smallest value).",
)
@click.option("--config", metavar="FILE|NAME", help="A TOML file, or the name of a shipped recipe.")
@click.option("--axes", metavar="A", help="Axes of the source in stored order, such as tzyx, where it does not say.")
@click.option("--plugin", "plugins", metavar="FILE", multiple=True, help="A Python file with stages; may be repeated.")
@click.option("--workers", metavar="N", type=click.IntRange(min=1), help="Threads; by default all usable processors.")
@click.option(
    "--memory", metavar="SIZE", help="Ceiling, such as 600MiB or 2GB; by default half of what this process may use."
)
@click.option("--resume", is_flag=True, help="Continue a run that was interrupted; start where there is none.")
@click.option("--overwrite", is_flag=True, help="Replace an existing store, once the new one is whole.")
@click.option("--dry-run", is_flag=True, help="Check everything and say what would be done; write nothing.")
@_JSON
def compress(words: tuple[str, ...], *, as_json: bool, **options: Any) -> int:
    """Compress SOURCE into STORE, verify every pixel from disk, and log it.

    SOURCE is a TIFF, NPY or Zarr, a folder of single-plane TIFFs or a quoted pattern such as 'plane_*.tif'. STORE ends
    in .ome.zarr. With several sources STORE is a folder, and each source becomes its own store in it.
    """
    from . import _batch

    if len(words) < 2:
        raise click.UsageError("Missing STORE: give at least one SOURCE, and the STORE to write.")
    *sources, store = words
    announce_compilation()
    options["command"] = _command_line()
    jobs, many = _batch.plan(sources, Path(store), overwrite=options["overwrite"], resume=options["resume"])
    if many:
        outcome: _batch.Outcome = _work(_batch.compress_all, jobs, options, ConsoleProgress())
        _print(outcome.to_json, outcome.text, as_json)
        return outcome.exit_code
    report = _work(_batch.compress_one, jobs[0], options, ConsoleProgress())
    _print(report.to_json, lambda: _text().compress(report), as_json)
    return 0


@cli.command(short_help="Check that a store is whole and that its promise stands.")
@click.argument("store", metavar="STORE")
@click.option("--against", metavar="SOURCE", help="The original: measure the errors of all pixels again.")
@click.option("--root", metavar="HEX", help="The root that compress printed, kept elsewhere since.")
@click.option("--record", metavar="FILE", help="Write a record of this check to a new file outside the store.")
@_JSON
def verify(store: str, *, as_json: bool, against: str | None, root: str | None, record: str | None) -> int:
    """Check that STORE is complete and unchanged and that its promise still stands.

    Nothing inside STORE is written. Without the original this proves that what decodes today is exactly what was
    compared with the original then. Exit code 3 means damage, and the output names the place.
    """
    import stackbound

    announce_compilation()
    source = _one_source(against) if against is not None else None
    options = {"against": source, "root": root, "record": record, "progress": ConsoleProgress()}
    report = _work(stackbound.verify, store, **options)
    _print(report.to_json, lambda: _text().verify(report), as_json)
    return 0 if report.ok else 3


@cli.command(short_help="Write a store's stack as a common image file.", epilog=CAUTION)
@click.argument("store", metavar="STORE")
@click.argument("target", metavar="TARGET")
@_JSON
def restore(store: str, target: str, *, as_json: bool) -> int:
    """Write the stack of STORE as a common image file, with its metadata.

    The ending of TARGET says the format: .ome.tif (.ome.tiff), .tif (.tiff), .npy or .ome.zarr (plain, without our
    codec). An existing TARGET is never replaced. Every pixel lies within the store's tolerance of the original.
    """
    import stackbound

    announce_compilation()
    report = _work(stackbound.restore, store, target, progress=ConsoleProgress())
    _print(report.to_json, lambda: f"{_text().restore(report)}\n{CAUTION}", as_json)
    return 0


@cli.command(short_help="Tell what a source or a store is.")
@click.argument("path", metavar="PATH")
@_JSON
def inspect(path: str, *, as_json: bool) -> int:
    """Tell what PATH is, a source or a store: axes, shape, pixel type, promise, sizes, versions."""
    from .inspect import inspect as look

    facts = _work(look, _one_source(path))
    _print(lambda: facts, lambda: _text().inspect(facts), as_json)
    return 0


@cli.command(short_help="List the stages and the plugins that failed to load.")
@_JSON
def plugins(*, as_json: bool) -> int:
    """List all stages, where they come from and their options, and every plugin that failed to load."""
    from .plugins import plugin_report

    facts = plugin_report()
    _print(lambda: facts, lambda: _text().plugins(facts), as_json)
    return 0


@cli.command(short_help="Print the JSON Schema of a configuration file.")
def schema() -> int:
    """Print the JSON Schema of a configuration file, the options of plugins included."""
    from .config import schema as config_schema

    click.echo(json.dumps(config_schema(), indent=2))
    return 0


@cli.command(short_help="Show the whole way on an invented stack.")
@click.argument("folder", metavar="[FOLDER]", default="stackbound-demo")
def demo(folder: str) -> int:
    """Show the whole way on an invented light-sheet stack of about 100 MB.

    Generates the stack in FOLDER (by default stackbound-demo), compresses, verifies and restores it, and writes a
    picture of original, decoded and error side by side.
    """
    from .demo import demo as run_demo

    announce_compilation()
    report = _work(run_demo, Path(folder), progress=ConsoleProgress())
    click.echo("\n".join(report.lines()))
    return 0


@cli.command("new-plugin", short_help="Write a plugin project, ready to install.")
@click.argument("kind", metavar="KIND")
@click.argument("name", metavar="NAME")
def new_plugin(kind: str, name: str) -> int:
    """Write a plugin project with one stage of KIND into a new folder NAME, with a test that passes.

    KIND is load, tile, transform, quantize, predict, encode, verify or save.
    """
    from .newplugin import new_plugin as write

    folder = write(kind, name)
    click.echo(f"{folder}: a project with the {kind} stage '{name}'. Next: pip install ./{folder}")
    return 0


@cli.command("check-plugin", short_help="Check that stages keep the contract of their kind.")
@click.argument("plugin", metavar="FILE|NAME")
@click.option("--example", metavar="FILE", help="For a load stage: a file that it can read.")
@_JSON
def check_plugin(plugin: str, *, as_json: bool, example: str | None) -> int:
    """Run the conformance suite on the stages of a plugin file, a distribution, or one stage by its name.

    Each finding says what is wrong and how to mend it; any finding ends with exit code 2.
    """
    from .plugins import stages_of
    from .testing import check_stage

    results = [_work(check_stage, cls, example=example) for cls in _work(stages_of, plugin)]
    _print(
        lambda: {"schema_version": 1, "stages": [result.to_json() for result in results]},
        lambda: "\n".join(_text().findings(result) for result in results),
        as_json,
    )
    return 0 if all(result.ok for result in results) else 2


def _work(function: Callable[..., Any], *args: Any, **options: Any) -> Any:
    """Call `function`; what plugins print meanwhile goes to standard error, which leaves results alone on output."""
    with contextlib.redirect_stdout(sys.stderr):
        return function(*args, **options)


def _text() -> Any:
    from . import _text

    return _text


def _one_source(argument: str) -> object:
    """Return the source that one word of the command line means (a file, a folder, a pattern)."""
    from .errors import UsageError
    from .sources import expand_sources

    sources = expand_sources([argument])
    if len(sources) != 1:
        raise UsageError(f"This means {len(sources)} sources; one is needed.", where=argument)
    return sources[0]


def _command_line() -> str:
    return shlex.join([Path(sys.argv[0]).name, *sys.argv[1:]])


def _print(facts: Callable[[], Mapping[str, Any]], text: Callable[[], str], as_json: bool) -> None:
    click.echo(json.dumps(facts(), indent=2) if as_json else text())


if __name__ == "__main__":
    main()
