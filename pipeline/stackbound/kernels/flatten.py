"""Write the flat cosine kernels: per block length one straight line of sums and products.

``python -m stackbound.kernels.flatten`` writes `forward_flat.py` and `inverse_flat.py` anew; a test compares them.

The transform of length N splits into halves: with s = x[i] + x[N-1-i] and d = x[i] - x[N-1-i], the even coefficients
are the transform of length N/2 of s and the odd ones the products of d with the odd rows of the basis. The inverse runs
backwards. (The symmetry of cos((2x+1) u pi / 2N) about the block's middle; ITU-T T.81 A.3.3 defines the transform.)
"""

from __future__ import annotations

from math import cos, pi, sqrt
from pathlib import Path

from stackbound.kernels.basis import SCALE_BITS
from stackbound.kernels.blocks import LANES

LENGTHS = (2, 4, 8, 16, 32)
LONGEST = 32
TERMS_PER_LINE = 5


def forward_lines(names: list[str], out: list[str]) -> list[str]:
    """Return the statements that make the coefficients `out` from the pixels `names`."""
    n, half = len(names), len(names) // 2
    if n == 1:
        return [f"{out[0]} = {names[0]} * C{LONGEST // 2}"]
    sums, differences = [f"s{n}_{i}" for i in range(half)], [f"d{n}_{i}" for i in range(half)]
    lines = [f"{sums[i]} = {names[i]} + {names[n - 1 - i]}" for i in range(half)]
    lines += [f"{differences[i]} = {names[i]} - {names[n - 1 - i]}" for i in range(half)]
    lines += forward_lines(sums, out[0::2])
    for u in range(1, n, 2):
        lines += _sum_of_products(out[u], [(name, *_cosine(n, u, x)) for x, name in enumerate(differences)])
    return lines


def inverse_lines(names: list[str], out: list[str]) -> list[str]:
    """Return the statements that make the pixels `out` from the coefficients `names`."""
    n, half = len(names), len(names) // 2
    if n == 1:
        return [f"{out[0]} = {names[0]} * C{LONGEST // 2}"]
    even, odd = [f"e{n}_{i}" for i in range(half)], [f"o{n}_{i}" for i in range(half)]
    lines = inverse_lines(names[0::2], even)
    for x in range(half):
        lines += _sum_of_products(odd[x], [(names[u], *_cosine(n, u, x)) for u in range(1, n, 2)])
    for x in range(half):
        lines.append(f"{out[x]} = {even[x]} + {odd[x]}")
        lines.append(f"{out[n - 1 - x]} = {even[x]} - {odd[x]}")
    return lines


def _cosine(n: int, u: int, x: int) -> tuple[str, str]:
    """Return sign and name of cos((2x+1) u pi / 2n), the constants being C<k> = cos(k pi / 64), k from 1 to 31."""
    k = (2 * x + 1) * u * (LONGEST // n) % (4 * LONGEST)
    k = min(k, 4 * LONGEST - k)
    return ("+", f"C{k}") if k < LONGEST else ("-", f"C{2 * LONGEST - k}")


def _sum_of_products(name: str, terms: list[tuple[str, str, str]]) -> list[str]:
    """Return ``name = value * factor + ...`` from left to right, a few terms a line."""
    lines = []
    for start in range(0, len(terms), TERMS_PER_LINE):
        text = "".join(f" {sign} {value} * {factor}" for value, sign, factor in terms[start : start + TERMS_PER_LINE])
        text = (
            name + text if start else text[1:].removeprefix("+ ").replace("- ", "-", 1 if text.startswith(" -") else 0)
        )
        lines.append(f"{name} = {text}")
    return lines


def function(kind: str, n: int) -> str:
    """Return the source of one kernel: a pass of length `n` over the middle axis of `data` (outer, n, inner)."""
    forward = kind == "forward"
    real = "np.float32" if forward else "np.float64"
    # What is used twice gets a name; what is used once stays in its array.
    places = [f"source[{i}, k]" if forward else f"x{i}" for i in range(n)]
    outs = [f"y{i}" if forward else f"target[{i}, k]" for i in range(n)]
    scale = f"np.float32({sqrt(2 / n)!r})" if forward else repr(2.0**-SCALE_BITS)
    body = forward_lines(places, outs) if forward else inverse_lines(places, outs)
    back = "target[i, k]" if forward else "(target[i, k] + ROUND) - ROUND"
    lines = [
        "@kernel",
        f"def {kind}_{n}(data: Any) -> None:",
        f'    """Transform length {n} along the middle axis, in place."""',
        f"    source = np.empty(({n}, LANES), {real})",
        f"    target = np.empty(({n}, LANES), {real})",
        "    for o in range(data.shape[0]):",
        "        for j in range(0, data.shape[2], LANES):",
        f"            for i in range({n}):",
        "                for k in range(LANES):",
        f"                    source[i, k] = data[o, i, j + k] * {scale}",
        "            for k in range(LANES):",
        *(f"                {name} = source[{i}, k]" for i, name in enumerate(places) if not forward),
        *(f"                {line}" for line in body),
        *(f"                target[{i}, k] = {name}" for i, name in enumerate(outs) if forward),
        f"            for i in range({n}):",
        "                for k in range(LANES):",
        f"                    data[o, i, j + k] = {back}",
    ]
    return "\n".join(lines)


def _constant(kind: str, k: int) -> str:
    exact = cos(k * pi / (2 * LONGEST))
    return f"np.float32({exact!r})" if kind == "forward" else f"{round(exact * 2**SCALE_BITS)}.0"


def source(kind: str) -> str:
    """Return the whole text of one generated module."""
    what = {
        "forward": "Forward cosine passes in float32, every operation in the order written here.",
        "inverse": "Inverse cosine passes: whole numbers in float64, each pass rounded half to even and so exact.",
    }[kind]
    head = [
        f'"""{what}',
        "",
        "Written by `stackbound.kernels.flatten`; do not edit.",
        '"""',
        "# fmt: off",
        "",
        "from typing import Any",
        "",
        "import numpy as np",
        "",
        "from stackbound.kernels.jit import kernel",
        "",
        f"LANES = {LANES}",
        "# cos(k pi / 64)" + ("" if kind == "forward" else ", times 2**14 and rounded"),
        *(f"C{k} = {_constant(kind, k)}" for k in range(1, LONGEST)),
    ]
    if kind == "inverse":
        head += ["# Adding and subtracting 1.5 * 2**52 rounds a float64 of magnitude below 2**51 to a whole number.",
                 "ROUND = 6755399441055744.0"]  # fmt: skip
    return "\n".join(head) + "\n\n\n" + "\n\n\n".join(function(kind, n) for n in LENGTHS) + "\n"


def main() -> None:
    """Write both modules beside this one."""
    for kind in ("forward", "inverse"):
        path = Path(__file__).with_name(f"{kind}_flat.py")
        path.write_text(source(kind), encoding="utf-8", newline="\n")


if __name__ == "__main__":
    main()
