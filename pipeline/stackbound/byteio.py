"""Whole numbers and byte strings in a payload, and back without trusting a byte of it."""

from __future__ import annotations

from stackbound.errors import TileError


class Writer:
    """Gathers the bytes of a payload."""

    def __init__(self) -> None:
        self.data = bytearray()

    def number(self, value: int) -> None:
        """Write a whole number from 0 on, seven bits a byte, least significant first, the top bit saying "more"."""
        while value >= 0x80:
            self.data.append(value & 0x7F | 0x80)
            value >>= 7
        self.data.append(value)

    def signed(self, value: int) -> None:
        """Write a whole number of any sign: 0, -1, 1, -2, ... as 0, 1, 2, 3, ..."""
        self.number(2 * value if value >= 0 else -2 * value - 1)

    def sized(self, value: bytes) -> None:
        """Write bytes after their number."""
        self.number(len(value))
        self.data += value


class Reader:
    """Reads what `Writer` wrote; anything impossible raises `TileError`."""

    def __init__(self, data: memoryview) -> None:
        self.data = data
        self.at = 0

    def number(self, most: int = 2**65) -> int:
        """Read a whole number from 0 to `most`."""
        value = 0
        for place in range(10):
            if self.at >= len(self.data):
                raise damaged("it ends too soon")
            byte = self.data[self.at]
            self.at += 1
            value |= (byte & 0x7F) << (7 * place)
            if byte < 0x80:
                break
        if value > most:
            raise damaged(f"a number is {value} where at most {most} makes sense")
        return value

    def signed(self) -> int:
        """Read a whole number of any sign."""
        folded = self.number()
        return folded >> 1 if folded & 1 == 0 else -((folded + 1) >> 1)

    def sized(self) -> memoryview:
        """Read bytes that stand after their number."""
        return self.take(self.number(len(self.data)))

    def take(self, count: int) -> memoryview:
        """Read so many bytes."""
        if self.at + count > len(self.data):
            raise damaged("it ends too soon")
        self.at += count
        return self.data[self.at - count : self.at]

    def end(self) -> None:
        """Refuse bytes left over."""
        if self.at != len(self.data):
            raise damaged(f"{len(self.data) - self.at} bytes are left over")


def damaged(why: str) -> TileError:
    """Return the error for bytes that no encoder writes."""
    return TileError(f"the bytes of this tile are damaged: {why}")
