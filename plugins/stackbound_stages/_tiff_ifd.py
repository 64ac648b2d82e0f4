"""The page table of a TIFF, read by ourselves: what is cut off or differs between pages is found before any decoding.

tifffile only logs a broken chain of pages and looks at few of the pages of a long file. Field numbers: TIFF 6.0,
section 8 and appendix A; BigTIFF has the same fields with 8-byte counts and offsets.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import IO

import numpy as np
from numpy.typing import NDArray
from stackbound.errors import SourceError

CUT = "The file was cut short or damaged; copy or export it again."

_SIZES = {1: 1, 2: 1, 3: 2, 4: 4, 5: 8, 6: 1, 7: 1, 8: 2, 9: 4, 10: 8, 11: 4, 12: 8, 13: 4, 16: 8, 17: 8, 18: 8}
_WHOLE = {1: "u1", 3: "u2", 4: "u4", 13: "u4", 16: "u8", 18: "u8"}

# Fields that all planes of one stack must share: width, length, bits, compression, fill order, samples, rows per strip,
# planar configuration, predictor, tile width and length, sample format, image and tile depth.
_SHARED = (256, 257, 258, 259, 266, 277, 278, 284, 317, 322, 323, 339, 32997, 32998)
_DEFAULTS = {259: 1, 266: 1, 277: 1, 284: 1, 317: 1, 339: 1, 32997: 1}
_OFFSETS, _COUNTS = (273, 324), (279, 325)
_PLACES = frozenset(_OFFSETS + _COUNTS)
_READ = frozenset((*_SHARED, 254, 262))  # and the kind of page and its photometric interpretation


@dataclass(frozen=True)
class Grid:
    """Strips or tiles of a page: how many, how many one below the other, and their uncompressed bytes."""

    count: int
    rows: int
    full: int
    last: int
    gapless: bool

    def lengths(self) -> NDArray[np.int64]:
        """Return the uncompressed bytes of each; the last strip of a plane may be shorter."""
        column = np.full(self.rows, self.full, np.int64)
        column[-1] = self.last
        return np.tile(column, self.count // self.rows) if self.full != self.last else np.full(self.count, self.full)


@dataclass
class Page:
    """One page (IFD): its fields and where its strips or tiles lie."""

    number: int
    offset: int
    fields: dict[int, tuple[int, ...]]
    offsets: NDArray[np.int64]
    counts: NDArray[np.int64]
    text: tuple[int, int] | None = None
    """Position and length of the description."""

    def field(self, code: int) -> int:
        """Return the first value of a field, or its default."""
        values = self.fields.get(code)
        return values[0] if values else _DEFAULTS.get(code, 0)

    @property
    def tiled(self) -> bool:
        """Whether the page is stored in tiles."""
        return 322 in self.fields

    def grid(self) -> Grid:
        """Return how the page is cut into strips or tiles."""
        width, length, depth = self.field(256), self.field(257), max(1, self.field(32997))
        planar = self.field(284) == 2
        samples = 1 if planar else self.field(277)
        bits = self.field(258)
        separate = self.field(277) if planar else 1
        if self.tiled:
            wide, high, deep = self.field(322), self.field(323), max(1, self.fields.get(32998, (1,))[0])
            whole = wide == width and length % high == 0 and depth == deep == 1
        else:
            wide, high, deep, whole = width, min(self.fields.get(278, (length,))[0] or length, length), 1, True
        if not (wide and high and width and length):
            raise SourceError(
                "the page, its strips or its tiles have no size", where=f"page {self.number + 1}", remedy=CUT
            )
        count = separate * -(-depth // deep) * -(-length // high) * -(-width // wide)
        row = -(-wide * samples * bits // 8)
        rest = high if self.tiled else length - high * (-(-length // high) - 1)
        return Grid(count, -(-length // high), row * high * deep, row * rest * deep, whole)

    @property
    def pixel_signature(self) -> tuple[tuple[int, ...], ...]:
        """What must be equal for pages of several files to be planes of one stack; how they are coded may differ."""
        return tuple(self.fields.get(code, (_DEFAULTS.get(code, 0),)) for code in (256, 257, 258, 277, 284, 339, 32997))

    @cached_property
    def signature(self) -> tuple[tuple[int, ...], ...]:
        """What must be equal for pages to be planes of one stack."""
        return tuple(self.fields.get(code, (_DEFAULTS.get(code, 0),)) for code in _SHARED)


@dataclass(frozen=True)
class PageTable:
    """All pages of a file in the order of the file."""

    byteorder: str
    bigtiff: bool
    size: int
    pages: tuple[Page, ...]


def read_page_table(path: Path, name: str) -> PageTable:
    """Return the page table of a TIFF.

    Raises
    ------
    stackbound.errors.SourceError
        Not a TIFF, or a page or its table lies outside the file.
    """
    size = path.stat().st_size
    if size == 0:
        raise SourceError("the file is empty", where=name, remedy=CUT)
    with path.open("rb") as file:
        return _Reader(file, size, name).table()


class _Reader:
    def __init__(self, file: IO[bytes], size: int, name: str) -> None:
        self.file, self.size, self.name = file, size, name
        self.order, self.big = "<", False

    def table(self) -> PageTable:
        head = self.file.read(16)
        self.order = {b"II": "<", b"MM": ">"}.get(head[:2], "")
        version = struct.unpack(self.order + "H", head[2:4])[0] if self.order and len(head) >= 4 else 0
        if version not in (42, 43):
            raise SourceError("this is not a TIFF file", where=self.name, remedy="Check what the file really holds.")
        self.big = version == 43
        self.singles = {
            kind: struct.Struct(f"{self.order}{letter}").unpack_from
            for kind, letter in ((3, "H"), (4, "I"), (16, "Q"))
            if kind != 16 or self.big
        }
        if len(head) < (16 if self.big else 8):
            raise SourceError("the file ends inside its first bytes", where=self.name, remedy=CUT)
        following = self._whole(head[8:16] if self.big else head[4:8])
        if not following:
            raise SourceError("the TIFF has no pages", where=self.name, remedy=CUT)
        pages: list[Page] = []
        seen: set[int] = set()
        while following:
            if following in seen:
                raise SourceError("the chain of pages turns back on itself", where=self._at(len(pages)), remedy=CUT)
            seen.add(following)
            page, following = self._page(len(pages), following)
            pages.append(page)
        return PageTable(self.order, self.big, self.size, tuple(pages))

    def _at(self, number: int) -> str:
        return f"{self.name}, page {number + 1}"

    def _whole(self, raw: bytes) -> int:
        return int(struct.unpack(self.order + ("Q" if len(raw) == 8 else "I"), raw)[0])

    def _take(self, position: int, length: int, number: int) -> bytes:
        if position + length > self.size:
            raise SourceError(
                f"the page's table lies at byte {position}, behind the end of the file ({self.size} bytes)",
                where=self._at(number),
                remedy=CUT,
            )
        self.file.seek(position)
        return self.file.read(length)

    def _page(self, number: int, offset: int) -> tuple[Page, int]:
        head, entry, word, form = (8, 20, 8, "HHQ8s") if self.big else (2, 12, 4, "HHI4s")
        count = struct.unpack(self.order + ("Q" if self.big else "H"), self._take(offset, head, number))[0]
        if not 0 < count < 4096:
            raise SourceError(f"the page's table claims {count} fields", where=self._at(number), remedy=CUT)
        table = self._take(offset + head, count * entry + word, number)
        singles = self.singles
        fields: dict[int, tuple[int, ...]] = {258: (1,)}
        places: dict[int, NDArray[np.int64]] = {}
        text = None
        rows = struct.iter_unpack(self.order + form, table[:-word])
        for row, (code, kind, length, raw) in enumerate(rows, 1):
            size = length * _SIZES.get(kind, 1)
            if size > word:
                self._check_value(code, size, raw, number)
            if code == 270:
                text = (self._whole(raw) if size > word else offset + head + row * entry - word), size
            elif code in _PLACES:
                places[code] = self._values(code, kind, length, raw, number)
            elif code in _READ:
                if length == 1 and kind in singles:  # nearly all fields of nearly all files
                    fields[code] = singles[kind](raw)
                else:
                    fields[code] = tuple(int(value) for value in self._values(code, kind, length, raw, number))
        offsets = next((places[code] for code in _OFFSETS if code in places), None)
        counts = next((places[code] for code in _COUNTS if code in places), None)
        if 256 not in fields or 257 not in fields or offsets is None or not len(offsets):
            raise SourceError("the page has no width, length or pixel data", where=self._at(number), remedy=CUT)
        if counts is None:  # allowed by old writers for one uncompressed strip
            counts = np.zeros_like(offsets)
        if len(counts) != len(offsets):
            raise SourceError("the page lists other numbers of strips and lengths", where=self._at(number), remedy=CUT)
        return Page(number, offset, fields, offsets, counts, text), self._whole(table[-word:])

    def _check_value(self, code: int, size: int, raw: bytes, number: int) -> None:
        """Refuse a field whose value lies behind the end of the file; the text on the pages often comes last."""
        if self._whole(raw) + size > self.size:
            raise SourceError(
                f"field {code} should end at byte {self._whole(raw) + size}, but the file has only {self.size}",
                where=self._at(number),
                remedy=CUT,
            )

    def _values(self, code: int, kind: int, length: int, raw: bytes, number: int) -> NDArray[np.int64]:
        if kind not in _WHOLE:
            raise SourceError(f"field {code} has the unexpected type {kind}", where=self._at(number), remedy=CUT)
        size = length * _SIZES[kind]
        if size > len(raw):
            raw = self._take(self._whole(raw), size, number)
        return np.frombuffer(raw[:size], self.order + _WHOLE[kind]).astype(np.int64)
