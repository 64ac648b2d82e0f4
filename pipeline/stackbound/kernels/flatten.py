"""Write the flat cosine kernels: per block length one straight line of sums and products.

``python -m stackbound.kernels.flatten`` writes `forward_flat.py` and `inverse_flat.py` anew; a test compares them.

The transform of length N splits into halves: with s = x[i] + x[N-1-i] and d = x[i] - x[N-1-i], the even coefficients
are the transform of length N/2 of s and the odd ones the products of d with the odd rows of the basis. The inverse runs
backwards. (The symmetry of cos((2x+1) u pi / 2N) about the block's middle; ITU-T T.81 A.3.3 defines the transform.)
"""

from __future__ import annotations

from math import cos, pi, sqrt
from pathlib import Path

from stackbound.kernels.basis import SCALE_BITS, cosine
from stackbound.kernels.blocks import LANES

LENGTHS = (2, 4, 8, 16, 32)
TERMS_PER_LINE = 4


def forward_lines(names: list[str], out: list[str]) -> list[str]:
    """Return the statements that make the coefficients `out` from the pixels `names`."""
    n, half = len(names), len(names) // 2
    if n == 1:
        return [f"{out[0]} = {names[0]} * np.float32({sqrt(0.5)!r})"]
    sums, differences = [f"s{n}_{i}" for i in range(half)], [f"d{n}_{i}" for i in range(half)]
    lines = [f"{sums[i]} = {names[i]} + {names[n - 1 - i]}" for i in range(half)]
    lines += [f"{differences[i]} = {names[i]} - {names[n - 1 - i]}" for i in range(half)]
    lines += forward_lines(sums, out[0::2])
    for u in range(1, n, 2):
        factors = [f"np.float32({cos((2 * i + 1) * u * pi / (2 * n))!r})" for i in range(half)]
        lines += _sum_of_products(out[u], differences, factors)
    return lines


def inverse_lines(names: list[str], out: list[str]) -> list[str]:
    """Return the statements that make the pixels `out` from the coefficients `names`."""
    n, half = len(names), len(names) // 2
    basis = cosine(n)
    if n == 1:
        return [f"{out[0]} = {names[0]} * {round(sqrt(0.5) * 2**SCALE_BITS)}.0"]
    even, odd = [f"e{n}_{i}" for i in range(half)], [f"o{n}_{i}" for i in range(half)]
    lines = inverse_lines(names[0::2], even)
    for i in range(half):
        lines += _sum_of_products(odd[i], names[1::2], [f"{basis[u, i]}.0" for u in range(1, n, 2)])
    for i in range(half):
        lines.append(f"{out[i]} = {even[i]} + {odd[i]}")
        lines.append(f"{out[n - 1 - i]} = {even[i]} - {odd[i]}")
    return lines


def _sum_of_products(name: str, values: list[str], factors: list[str]) -> list[str]:
    """Return ``name = value * factor + ...`` from left to right, a few terms a line."""
    terms = [f"{value} * {factor}" for value, factor in zip(values, factors, strict=True)]
    lines = []
    for start in range(0, len(terms), TERMS_PER_LINE):
        head = f"{name} + " if start else ""
        lines.append(f"{name} = {head}" + " + ".join(terms[start : start + TERMS_PER_LINE]))
    return lines


def function(kind: str, n: int) -> str:
    """Return the source of one kernel: a pass of length `n` over the middle axis of `data` (outer, n, inner)."""
    forward = kind == "forward"
    real = "np.float32" if forward else "np.float64"
    places, outs = [f"x{i}" for i in range(n)], [f"y{i}" for i in range(n)]
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
        *(f"                {name} = source[{i}, k]" for i, name in enumerate(places)),
        *(f"                {line}" for line in body),
        *(f"                target[{i}, k] = {name}" for i, name in enumerate(outs)),
        f"            for i in range({n}):",
        "                for k in range(LANES):",
        f"                    data[o, i, j + k] = {back}",
    ]
    return "\n".join(lines)


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
