"""Reports as people read them: plain text, one fact a line, the same on a terminal and in a file."""

from __future__ import annotations

import shutil
import sys
import textwrap
from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any

from .environment import format_size

if TYPE_CHECKING:
    from ._batch import Outcome, Result
    from .reports import CompressReport, RestoreReport, VerifyReport
    from .testing import Findings

_WIDTH = 100
_LABEL = 12

FIGURE_NAMES = {
    "max-error": "largest error",
    "mean-error": "mean error",
    "rmse": "RMSE",
    "psnr": "PSNR (dB)",
    "ssim": "SSIM",
    "changed-share": "share of pixels changed",
}


def compress(report: CompressReport) -> str:
    """Return what a run did, or would do."""
    if report.dry_run:
        rows = [
            ("source", _stack(report.kind, report.axes, report.shape, report.dtype, report.source_bytes)),
            ("tiles", f"{_shape(report.tile)}, in {_many(report.regions, 'region')} of {_shape(report.region)}"),
            ("store", f"about {format_size(report.store_bytes)}, {_ratio(report)}, judged from a sample"),
            ("promise", report.promise["words"]),
            ("limits", f"{_many(report.workers, 'worker')}, {format_size(report.memory)} of memory"),
            ("dry run", "nothing was written"),
        ]
        return _block(str(report.store), [*rows, *_notes(report.notes)])
    rows = [
        ("source", _stack(report.kind, report.axes, report.shape, report.dtype, report.source_bytes)),
        ("store", f"{format_size(report.store_bytes)}, {_ratio(report)}"),
        ("promise", report.promise["words"]),
        ("found", _found(report.largest_error, report.promise, report.pixels, report.pixels_changed)),
        ("figures", _figures(report.figures)),
        ("root", f"{report.root}"),
        ("", "Keep this line elsewhere: with it anyone can tell later whether the store was replaced."),
    ]
    if report.resumed:
        rows.insert(
            1, ("resumed", f"{report.resumed} of {_many(report.regions, 'region')} kept from the interrupted run")
        )
    return _block(str(report.store), [*rows, *_notes(report.notes)])


def batch(outcome: Outcome) -> str:
    """Return the summary of several sources."""
    lines = [str(outcome.folder)]
    width = max(len(result.job.store.name) for result in outcome.results)
    for result in outcome.results:
        text, *more = _batch_lines(result)
        lines.append(f"  {result.job.store.name:<{width}}  {text}")
        lines += [f"  {'':<{width}}  {line}" for line in more]
    reports = [result.report for result in outcome.results if result.report is not None]
    before = sum(report.source_bytes for report in reports)
    after = sum(report.store_bytes for report in reports)
    total = f"{len(outcome.results) - outcome.failed} of {len(outcome.results)} sources done"
    total += f": {format_size(before)} became {format_size(after)}" if reports else ""
    total += f"; {outcome.failed} failed" if outcome.failed else ""
    lines.append(f"{total}.")
    if reports and not reports[0].dry_run:
        lines.append("Keep the roots elsewhere: with them anyone can tell later whether a store was replaced.")
    return "\n".join(lines)


def _batch_lines(result: Result) -> list[str]:
    report = result.report
    if report is None:
        return ["finished by an earlier run"] if result.finished_before else [f"failed: {result.error}"]
    if report.dry_run:
        return [f"about {format_size(report.store_bytes)}, {_ratio(report)}"]
    first = f"{format_size(report.store_bytes)}, {_ratio(report)}, largest error {report.largest_error}"
    return [first, f"root {report.root}", *(f"note: {note}" for note in report.notes)]


def verify(report: VerifyReport) -> str:
    """Return what a check found, which checks were made, and what they cannot prove."""
    verdict = "whole and unchanged; its promise stands" if report.ok else "DAMAGED"
    rows: list[tuple[str, str]] = [("problem", str(problem)) for problem in report.problems]
    if report.promise is not None:
        rows.append(("promise", str(report.promise["words"])))
    if report.largest_error is not None:
        measured = "measured again now" if report.against else "as recorded when the store was made"
        rows.append(("error", f"{report.largest_error} at most, {measured}"))
    rows.append(("decoded", f"{_many(report.pixels, 'pixel')} in {_many(report.regions, 'region')}"))
    rows += [("checked", check) for check in report.checks]
    rows += [("notice", notice) for notice in report.notices]
    rows += [("not proven", limit) for limit in report.cannot_prove]
    if report.root is not None:
        rows.append(("root", report.root))
    return _block(f"{report.store}: {verdict}", rows)


def restore(report: RestoreReport) -> str:
    """Return what was restored, with the cautions of whoever goes on working with it."""
    from .storetext import CAUTIONS

    rows = [("stack", _stack(report.kind, report.axes, report.shape, report.dtype, report.bytes))]
    return _block(str(report.target), [*rows, *_notes(report.notes), *(("caution", text) for text in CAUTIONS[:3])])


def plugins(facts: Mapping[str, Any]) -> str:
    """Return the table of all stages and the plugins that failed to load."""
    lines = []
    for kind in dict.fromkeys(stage["kind"] for stage in facts["stages"]):
        lines.append(kind)
        for stage in (stage for stage in facts["stages"] if stage["kind"] == kind):
            origin = "built in" if stage["builtin"] else f"{stage['distribution']} {stage['version']}"
            lines += _wrapped(f"  {stage['name']:<20}", f"{stage['summary']} ({origin})")
            if stage["options"]:
                lines += _wrapped(" " * 22, f"options: {', '.join(stage['options'])}")
    if not facts["third_party"]:
        lines.append("Plugins are switched off by STACKBOUND_PLUGINS=off.")
    if facts["failures"]:
        lines.append("failed to load")
        for failure in facts["failures"]:
            lines.append(f"  {failure['distribution']} {failure['version']} ({failure['plugin']}): {failure['reason']}")
    return "\n".join(lines)


def findings(result: Findings) -> str:
    """Return the outcome of the conformance suite for one stage."""
    rows = [("checked", ", ".join(result.checks))]
    rows += [("finding", str(finding)) for finding in result.findings]
    verdict = "keeps its contract" if result.ok else "BREAKS ITS CONTRACT"
    return _block(f"{result.stage}: {verdict}", [*rows, *_notes(result.notes)])


def inspect(facts: Mapping[str, Any]) -> str:
    """Return the facts about a source or a store."""
    rows = []
    for key, value in facts.items():
        unknown = value in (None, "", []) or (isinstance(value, list) and all(item is None for item in value))
        if key in ("schema_version", "path", "axes") or unknown:
            continue
        if key == "notes":
            rows += _notes(value)
        elif key in ("shape", "tile", "region"):
            rows.append((key, _named(facts["axes"], value)))
        else:
            rows.append((key.replace("_", " "), _value(key, value)))
    return _block(str(facts["path"]), rows, label=26)


def _value(key: str, value: Any) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, int):
        exact = f" ({_count(value)} bytes)" if value >= 1000 else ""
        return f"{format_size(value)}{exact}" if key.endswith("bytes") else _count(value)
    if isinstance(value, float):
        return f"{value:.4g}"
    if isinstance(value, Mapping):
        return ", ".join(f"{name} {_value('', item)}" for name, item in value.items())
    if isinstance(value, Sequence) and not isinstance(value, str):
        return ", ".join("unknown" if item is None else _value("", item) for item in value)
    return str(value)


# ------------------------------------------------------------------------------------------------------------- pieces


def _block(title: str, rows: Iterable[tuple[str, str]], label: int = _LABEL) -> str:
    lines = [title]
    for name, text in rows:
        lines += _wrapped(f"  {name:<{label}}", text)
    return "\n".join(lines)


def _wrapped(lead: str, text: str) -> list[str]:
    indent = " " * len(lead)
    width = min(_WIDTH, shutil.get_terminal_size().columns) if sys.stdout.isatty() else _WIDTH
    width = max(width, len(lead) + 20)
    return textwrap.wrap(
        text, width, initial_indent=lead, subsequent_indent=indent, break_long_words=False, break_on_hyphens=False
    ) or [lead.rstrip()]


def _stack(kind: str, axes: str, shape: Sequence[int], dtype: str, size: int) -> str:
    return f"{kind}; {_named(axes, shape)}; {dtype}; {format_size(size)}"


def _named(axes: str, shape: Sequence[int]) -> str:
    return ", ".join(f"{axis} {length}" for axis, length in zip(axes, shape, strict=True))


def _shape(shape: Sequence[int]) -> str:
    return " x ".join(map(str, shape))


def _ratio(report: CompressReport) -> str:
    if report.ratio >= 1:
        return f"{report.ratio:.2f} times smaller ({report.bits_per_pixel:.2f} bits per pixel)"
    return f"{1 / report.ratio:.2f} times larger ({report.bits_per_pixel:.2f} bits per pixel)"


def _found(largest: str | None, promise: Mapping[str, Any], pixels: int, changed: int) -> str:
    bounds = promise["stored"]
    bound = bounds[0] if len(bounds) == 1 else "the tolerance of each channel"
    return (
        f"largest error {largest} (allowed: {bound}); all {_many(pixels, 'pixel')} were read back from disk and "
        f"compared, {100 * changed / pixels:.3g} % of them changed"
    )


def _figures(figures: Mapping[str, str]) -> str:
    return ", ".join(f"{FIGURE_NAMES.get(name, name)} {_short(value)}" for name, value in figures.items()) or "none"


def _short(value: str) -> str:
    try:
        return f"{float(value):.6g}"
    except ValueError:
        return value


def _notes(notes: Iterable[str]) -> list[tuple[str, str]]:
    return [("note", note) for note in notes]


def _count(number: int) -> str:
    return f"{number:,}"


def _many(number: int, what: str) -> str:
    return f"{_count(number)} {what}" if number == 1 else f"{_count(number)} {what}s"
