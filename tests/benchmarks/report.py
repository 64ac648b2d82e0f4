"""What the benchmark tells: tables for people, JSON for programs, one plot."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any

from compare import Measurement

STANDARD = "14495-1"


def table(rows: Sequence[Measurement]) -> Iterable[str]:
    """Yield one line per stack, tolerance and coder."""
    yield (
        f"{'stack':26}{'noise':>7}{'x noise':>8}{'tol.':>8}  {'coder':12}{'bits/px':>8}{'floor+':>8}"
        f"{'enc Mpx/s':>10}{'dec Mpx/s':>10}{'plan':>6}  largest error"
    )
    previous = None
    for r in rows:
        same = previous is not None and (previous.stack, previous.tolerance) == (r.stack, r.tolerance)
        multiple = "" if r.multiple is None else f"{r.multiple:g}"
        head = f"{'':49}" if same else f"{r.stack[:25]:26}{r.noise:7.2f}{multiple:>8}{r.tolerance:8.4g}"
        yield f"{head}  {_figures(r)}"
        previous = r


def _figures(r: Measurement) -> str:
    if math.isnan(r.bits):
        return f"{r.coder:12}{r.note}"
    above = "" if r.floor is None else f"{r.bits - r.floor:+.3f}"
    planning = f"{r.planning:.0%}" if r.planning else ""
    speeds = f"{r.encode:10.1f}{r.decode:10.1f}{planning:>6}"
    return f"{r.coder:12}{r.bits:8.3f}{above:>8}{speeds}  {r.largest_error:g} {r.note}"


def summaries(rows: Sequence[Measurement], against: str = STANDARD) -> list[dict[str, Any]]:
    """Compare every other coder with `against`, per multiple of the noise, over all stacks that both could code."""
    reference = {(r.stack, r.multiple): r for r in rows if r.coder == against and not math.isnan(r.bits)}
    found = []
    for coder in dict.fromkeys(r.coder for r in rows if r.coder != against):
        for multiple in sorted({r.multiple for r in rows if r.multiple is not None}):
            pairs = [
                (r, reference[r.stack, r.multiple])
                for r in rows
                if r.coder == coder and r.multiple == multiple and (r.stack, r.multiple) in reference
            ]
            pairs = [(r, s) for r, s in pairs if not math.isnan(r.bits)]
            if pairs:
                found.append(_summary(coder, multiple, pairs))
    return found


def _summary(coder: str, multiple: float, pairs: list[tuple[Measurement, Measurement]]) -> dict[str, Any]:
    smaller = {r.stack: s.bits / r.bits for r, s in pairs}
    two_byte = [(r, s) for r, s in pairs if r.dtype == "uint16"] or pairs
    encode = {r.stack: r.encode / s.encode for r, s in two_byte}
    decode = {r.stack: r.decode / s.decode for r, s in two_byte}
    return {
        "coder": coder,
        "multiple": multiple,
        "stacks": len(pairs),
        "smaller": geometric_mean(smaller.values()),
        "smaller_worst": _lowest(smaller),
        "encode_faster": geometric_mean(encode.values()),
        "encode_faster_worst": _lowest(encode),
        "decode_faster": geometric_mean(decode.values()),
        "decode_faster_worst": _lowest(decode),
        "planning_mean": sum(r.planning for r, _ in pairs) / len(pairs),
        "planning_most": max(r.planning for r, _ in pairs),
    }


def _lowest(ratios: dict[str, float]) -> list[Any]:
    name = min(ratios, key=ratios.__getitem__)
    return [name, ratios[name]]


def geometric_mean(values: Iterable[float]) -> float:
    """Return the geometric mean of positive numbers."""
    logs = [math.log(v) for v in values]
    return math.exp(sum(logs) / len(logs))


def summary_table(found: Sequence[dict[str, Any]], against: str = STANDARD) -> Iterable[str]:
    """Yield the ratios to `against`: how many times smaller, how many times faster (speeds over uint16 stacks)."""
    yield f"against {against}: geometric mean (worst stack); speeds over the uint16 stacks, one core"
    for s in found:
        worst = {k: f"{s[k][1]:.2f} {s[k][0]}" for k in ("smaller_worst", "encode_faster_worst", "decode_faster_worst")}
        yield (
            f"{s['coder']:14}{s['multiple']:g} x noise, {s['stacks']} stacks:"
            f"  {s['smaller']:.3f} times smaller ({worst['smaller_worst']})"
            f"  encode x{s['encode_faster']:.2f} ({worst['encode_faster_worst']})"
            f"  decode x{s['decode_faster']:.2f} ({worst['decode_faster_worst']})"
            f"  planning {s['planning_mean']:.0%} (most {s['planning_most']:.0%})"
        )


def floor_table(rows: Sequence[Measurement]) -> Iterable[str]:
    """Yield, per synthetic stack and coder, the bits per pixel above the entropy of the known noise."""
    known = [r for r in rows if r.floor is not None and r.multiple is not None and not math.isnan(r.bits)]
    if not known:
        return
    yield "bits per pixel above the entropy of the known noise in bins centred on the known signal, at multiples of it"
    for stack, coder in dict.fromkeys((r.stack, r.coder) for r in known):
        cells = [
            f"{r.multiple:g}: {r.bits - (r.floor or 0):+.3f}" for r in known if (r.stack, r.coder) == (stack, coder)
        ]
        yield f"{stack[:30]:32}{coder:14}{'  '.join(cells)}"


def markdown(rows: Sequence[Measurement], found: Sequence[dict[str, Any]], coder: str) -> Iterable[str]:
    """Yield the figures of one coder as Markdown: every stack against the others, then the means."""
    others = [name for name in dict.fromkeys(r.coder for r in rows) if name != coder]
    yield (
        "| stack | noise | tolerance | bits/px | "
        + " | ".join(f"vs {name}" for name in others)
        + (f" | encode vs {STANDARD} | decode vs {STANDARD} | planning |")
    )
    yield "|---|---|---|---|" + "---|" * (len(others) + 3)
    by_place = {(r.stack, r.tolerance, r.coder): r for r in rows}
    for r in (r for r in rows if r.coder == coder and not math.isnan(r.bits)):
        beside = [by_place.get((r.stack, r.tolerance, name)) for name in others]
        smaller = ["" if o is None or math.isnan(o.bits) else f"{o.bits / r.bits:.2f}" for o in beside]
        s = by_place.get((r.stack, r.tolerance, STANDARD))
        speeds = (
            ["", ""]
            if s is None or math.isnan(s.bits)
            else [f"{r.encode / s.encode:.2f}", f"{r.decode / s.decode:.2f}"]
        )
        floor = "" if r.floor is None else f" ({r.bits - r.floor:+.3f})"
        cells = [
            r.stack,
            f"{r.noise:.2f}",
            f"{r.tolerance:g}",
            f"{r.bits:.3f}{floor}",
            *smaller,
            *speeds,
            f"{r.planning:.0%}",
        ]
        yield "| " + " | ".join(cells) + " |"
    yield ""
    yield f"| tolerance / noise | times smaller than {STANDARD} | worst | encode | worst | decode | worst | planning |"
    yield "|---|---|---|---|---|---|---|---|"
    for s in (s for s in found if s["coder"] == coder):
        pairs = [
            f"{s[key]:.2f} | {s[key + '_worst'][1]:.2f} {s[key + '_worst'][0]}"
            for key in ("smaller", "encode_faster", "decode_faster")
        ]
        yield (
            f"| {s['multiple']:g} | " + " | ".join(pairs) + f" | {s['planning_mean']:.0%} ({s['planning_most']:.0%}) |"
        )


def write_json(path: Path, rows: Sequence[Measurement], about: dict[str, Any], **more: Any) -> None:
    """Write everything that was measured."""
    content = {"schema_version": 1, "about": about, "measurements": [_without_nan(asdict(r)) for r in rows], **more}
    path.write_text(json.dumps(content, indent=1, allow_nan=False) + "\n", encoding="utf-8", newline="\n")


def _without_nan(record: dict[str, Any]) -> dict[str, Any]:
    return {k: None if isinstance(v, float) and not math.isfinite(v) else v for k, v in record.items()}


def plot(path: Path, rows: Sequence[Measurement]) -> None:
    """Draw bits per pixel over the tolerance in units of the noise, one panel per stack."""
    import matplotlib as mpl

    mpl.use("agg")
    import matplotlib.pyplot as plt

    rows = [r for r in rows if r.multiple is not None and not math.isnan(r.bits)]
    names = list(dict.fromkeys(r.stack for r in rows))
    coders = list(dict.fromkeys(r.coder for r in rows))
    columns = min(4, len(names))
    figure, panels = plt.subplots(
        -(-len(names) // columns), columns, figsize=(3.6 * columns, 2.9 * -(-len(names) // columns)), squeeze=False
    )
    for panel, name in zip(panels.flat, names, strict=False):
        for number, coder in enumerate(coders):
            points = [(r.multiple, r.bits) for r in rows if r.stack == name and r.coder == coder]
            if points:
                look = {"marker": "osv^D<>*"[number % 8], "color": f"C{number}"}
                panel.plot(*zip(*points, strict=True), label=coder, **look)
        floors = sorted({(r.multiple, r.floor) for r in rows if r.stack == name and r.floor is not None})
        if floors:
            panel.plot(*zip(*floors, strict=True), "k:", label="entropy of the known noise")
        panel.set_title(name, fontsize=9)
        panel.set_ylim(bottom=0)
        panel.grid(alpha=0.3)
    for panel in list(panels.flat)[len(names) :]:
        panel.set_visible(False)
    figure.supxlabel("tolerance / measured noise")
    figure.supylabel("bits per pixel")
    labelled: dict[str, Any] = {}
    for panel in panels.flat:
        for handle, label in zip(*panel.get_legend_handles_labels(), strict=True):
            labelled.setdefault(label, handle)
    figure.legend(labelled.values(), labelled.keys(), loc="upper center", ncols=len(labelled), frameon=False)
    figure.tight_layout(rect=(0.01, 0, 1, 0.96))
    figure.savefig(path, dpi=110)
    plt.close(figure)
