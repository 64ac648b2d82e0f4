"""The descriptions of many planes as one text, each told by what differs from that of the plane before.

Programs repeat some kilobytes of settings in every plane; of twenty planes of 260 kB that was 3 % of a store without
loss. One line a plane, a JSON list: a string is new text, a pair [first, count] stands for that many pieces of the
plane before, from the first (counted from 0). Pieces end after a white-space character or a semicolon.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterable

_PIECE = re.compile(r"[^\s;]*[\s;]|[^\s;]+")

Entry = str | list[int]


def pack(texts: Iterable[str]) -> bytes:
    """Return the lines for the descriptions of all planes (UTF-8)."""
    lines: list[str] = []
    before: list[str] = []
    for text in texts:
        pieces = _PIECE.findall(text)
        lines.append(json.dumps(_differences(before, pieces), ensure_ascii=False, separators=(",", ":")))
        before = pieces
    return "".join(line + "\n" for line in lines).encode()


def unpack(data: bytes) -> list[str]:
    """Return the description of every plane from what `pack` made."""
    texts: list[str] = []
    before: list[str] = []
    for line in data.decode().split("\n")[:-1]:
        pieces: list[str] = []
        for entry in json.loads(line):
            pieces += [entry] if isinstance(entry, str) else before[entry[0] : entry[0] + entry[1]]
        texts.append("".join(pieces))
        before = _PIECE.findall(texts[-1])
    return texts


def _differences(before: list[str], now: list[str]) -> list[Entry]:
    """Return `now` as new text and runs of `before`, compared place by place, from the end where lengths differ."""
    entries: list[Entry] = []
    apart = next((i for i, (a, b) in enumerate(zip(before, now, strict=False)) if a != b), min(len(before), len(now)))
    for place, piece in enumerate(now):
        at = place if place < apart else place + len(before) - len(now)
        last = entries[-1] if entries else None
        if not 0 <= at < len(before) or before[at] != piece:
            if isinstance(last, str):
                entries[-1] = last + piece
            else:
                entries.append(piece)
        elif isinstance(last, list) and last[0] + last[1] == at:
            last[1] += 1
        else:
            entries.append([at, 1])
    return entries
